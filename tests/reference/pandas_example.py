import sys
import pandas as pd
import matplotlib
matplotlib.use("Agg")
frames = pd.read_csv(sys.argv[1] + "/frames.csv", parse_dates=["start_utc", "end_utc"])
good = frames[frames.verdict == "good"]
axes = good.plot.scatter("volts", "wavelength_pm", xerr="volts_u", yerr="wavelength_u_pm")
axes.set_xlabel("accelerating voltage, V")
axes.set_ylabel("electron wavelength, pm")
axes.figure.suptitle("SIMULATED: no measurement" if frames.simulated.any() else "")
axes.figure.savefig(sys.argv[2])
