"""Fits, Allan deviations and wavelengths against independent programs (scipy, allantools, GTC) on random inputs."""

import json
import subprocess
import sys
from pathlib import Path

import allantools
import GTC
import numpy as np
from scipy import constants, odr

results = Path(sys.argv[1]).with_name("reference-results")
rng = np.random.default_rng(20261201)
failed = False


def ask(**request):
    answer = subprocess.run([results], input=json.dumps(request), capture_output=True, text=True, check=True)
    return json.loads(answer.stdout)


def check(what, worst, limit):
    global failed
    good = bool(worst <= limit)
    failed |= not good
    print(f"{'ok' if good else 'FAILED'}: {what}: worst {worst:.1e}, limit {limit:.0e}")


# Polynomials with known sigmas: numpy's own solver on the same system.
worst = 0.0
for degree in (1, 2):
    for _ in range(50):
        x = np.sort(rng.uniform(0, 16000, 33))
        sigma = rng.uniform(0.05, 0.5, x.size)
        y = 0.2 + 0.3126 * x + (1e-9 * x**2 if degree == 2 else 0) + rng.normal(0, sigma)
        ours = ask(what="polynomial", x=list(x), y=list(y), sigma=list(sigma), degree=degree)
        columns = np.vander(x, degree + 1, increasing=True) / sigma[:, None]
        scale = np.linalg.norm(columns, axis=0)
        theirs, *_ = np.linalg.lstsq(columns / scale, y / sigma, rcond=None)
        inverse = np.linalg.pinv((columns / scale).T @ (columns / scale)) / np.outer(scale, scale)
        deviations = np.sqrt(np.diag(inverse))
        worst = max(worst, np.max(np.abs(np.array(ours["coefficients"]) - theirs / scale) / deviations))
        worst = max(worst, np.max(np.abs(np.sqrt(np.diag(ours["covariance"])) / deviations - 1)))
check("weighted polynomials against numpy (in standard deviations)", worst, 1e-6)

# GTC's weighted line with given uncertainties.
worst = 0.0
for _ in range(50):
    x = np.sort(rng.uniform(0, 5000, 20))
    sigma = rng.uniform(0.1, 1.0, x.size)
    y = 3 + 1.0003 * x + rng.normal(0, sigma)
    ours = ask(what="polynomial", x=list(x), y=list(y), sigma=list(sigma), degree=1)
    fit = GTC.type_a.line_fit_wls(list(x), list(y), list(sigma))
    a, b = fit.a_b
    worst = max(worst, abs(ours["coefficients"][0] - a.x) / a.u, abs(ours["coefficients"][1] - b.x) / b.u)
    worst = max(worst, abs(np.sqrt(ours["covariance"][0][0]) / a.u - 1), abs(np.sqrt(ours["covariance"][1][1]) / b.u - 1))
check("weighted line against GTC (in standard uncertainties)", worst, 1e-6)

# Errors in both variables: orthogonal distance regression finds the same line by another way.
worst = 0.0
for _ in range(30):
    true = np.sort(rng.uniform(0, 10, 25))
    u_x, u_y = rng.uniform(0.05, 0.3, true.size), rng.uniform(0.05, 0.3, true.size)
    x, y = true + rng.normal(0, u_x), 2 - 0.7 * true + rng.normal(0, u_y)
    ours = ask(what="york", x=list(x), u_x=list(u_x), y=list(y), u_y=list(u_y))
    data = odr.RealData(x, y, sx=u_x, sy=u_y)
    line = odr.Model(lambda beta, x: beta[0] + beta[1] * x)
    theirs = odr.ODR(data, line, beta0=[0.0, 0.0], sstol=1e-15, partol=1e-15, maxit=500).run()
    worst = max(worst, abs(ours["intercept"] - theirs.beta[0]) / ours["u_intercept"])
    worst = max(worst, abs(ours["slope"] - theirs.beta[1]) / ours["u_slope"])
    worst = max(worst, abs(ours["chi_square"] / theirs.sum_square - 1))
check("line with errors in both variables against scipy.odr (in standard uncertainties)", worst, 1e-4)

# Allan deviations.
worst = 0.0
for factor in (1, 3, 10):
    values = np.cumsum(rng.normal(0, 0.01, 500)) + rng.normal(0, 1, 500)
    ours = ask(what="allan", values=list(values), factor=factor)
    for name in ("adev", "oadev", "mdev"):
        theirs = getattr(allantools, name)(values, rate=1.0, data_type="freq", taus=[factor])[1][0]
        worst = max(worst, abs(ours[name] / theirs - 1))
check("Allan deviations against allantools", worst, 1e-9)

# Wavelengths: momentum from the energy, with scipy's constants.
volts = list(np.geomspace(10, 3e5, 50))
energy = constants.e * np.array(volts)
momentum = np.sqrt(energy * (energy + 2 * constants.m_e * constants.c**2)) / constants.c
# scipy may carry an earlier CODATA mass: the two differ by less than 1e-9.
check("wavelengths against scipy.constants", np.max(np.abs(np.array(ask(what="wavelength", volts=volts)) * momentum / constants.h - 1)), 1e-9)

sys.exit(failed)
