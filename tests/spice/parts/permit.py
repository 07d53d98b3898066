"""The permit's charge pump: what holds the relay, what does not, and how fast it lets go."""

from .simulator import measure

STOP_AT = 0.08
WATCHED = 0.12

PARTS = (
    ("RPF", "opto", "filtered", "filter_ohms"),
    ("CPF", "filtered", "0", "filter_farads"),
    ("CPA", "drive", "middle", ("pump_farads", 0)),
    ("CPB", "middle", "pump", ("pump_farads", 1)),
    ("DP1", "0", "pump", None),
    ("DP2", "pump", "coil", None),
    ("CPR", "coil", "0", "reservoir_farads"),
)


def faults():
    """Every single open and short of the pump's parts."""
    return [(None, None)] + [(name, how) for name, *_ in PARTS for how in ("open", "shorted")]


def _value(permit, key):
    return permit[key] if isinstance(key, str) else permit[key[0]][key[1]]


def _netlist(permit, hertz, stuck, fault, title):
    """`fault` is (part, how), or (part+part, how). `stuck`: None for the wave all along, else the level at which the line stands after STOP_AT (0 Hz: from the start)."""
    high = permit["gate_volts"]
    if hertz:
        lines = [f"VWAVE wave 0 PULSE(0 {high:g} 0 1u 1u {0.5 / hertz - 1e-6:.9g} {1 / hertz:.9g})"]
        lines.append("BOPTO opto 0 V = v(wave)" if stuck is None
                     else f"BOPTO opto 0 V = time < {STOP_AT} ? v(wave) : {high * stuck:g}")
    else:
        lines = [f"VOPTO opto 0 {high * stuck:g}"]
    for name, a, b, key in PARTS:
        struck = fault[1] if name in (fault[0] or "").split("+") else None
        if struck == "open":
            lines.append(f"RX{name} {a} {b} 1e12")
        elif struck == "shorted":
            lines.append(f"RX{name} {a} {b} 0.1")
        else:
            lines.append(f"{name} {a} {b} " + ("rectifier" if key is None else f"{_value(permit, key):g}"))
    middle, half = (permit["gate_high"] + permit["gate_low"]) / 2 * high, (permit["gate_high"] - permit["gate_low"]) / 2 * high
    lines += [
        "RFLOAT filtered 0 1e9", "VONE one 0 1", "SGATE one gate filtered 0 schmitt", "RGATE gate 0 1k",
        f".model schmitt SW(vt={middle:g} vh={half:g} ron=1m roff=1e9)",
        f"BBRIDGE bridge 0 V = {permit['supply_volts']:g}*v(gate)", f"RDRIVE bridge drive {permit['driver_ohms']:g}",
        "RMIDDLE middle 0 1e9", "RPUMP pump 0 1e9", f"RCOIL coil 0 {permit['coil_ohms']:g}",
        ".model rectifier D(is=1e-9 n=1.7 rs=0.5)", ".options reltol=1e-3 method=gear",
    ]
    step = 2e-5 if hertz <= 3000 else 2e-6
    return "\n".join([f"* permit: {title}", *lines, f".tran {step:g} {WATCHED} 0 {step:g}"])


def held(permit, hertz, stuck=None, fault=(None, None)):
    """Lowest and highest coil voltage over the last 20 ms before STOP_AT or, at 0 Hz, over the whole time."""
    start, end = (STOP_AT - 0.02, STOP_AT) if hertz else (0.0, WATCHED)
    text = _netlist(permit, hertz, stuck, fault, f"{hertz:g} Hz, {fault}")
    text += f"\n.meas tran low MIN v(coil) from={start} to={end}\n.meas tran high MAX v(coil) from={start} to={end}\n.end\n"
    found = measure(text, ("low", "high"))
    return found["low"], found["high"]


def drop_out(permit, stuck, fault=(None, None)):
    """Seconds from the moment the wave stops to the coil's release voltage, for good; 0 when it was never above."""
    text = _netlist(permit, permit["hertz"], stuck, fault, f"stops at {stuck}, {fault}")
    text += f"\n.meas tran end MAX v(coil) from={WATCHED - 0.005} to={WATCHED}\n"
    text += f".meas tran before MAX v(coil) from={STOP_AT - 0.005} to={STOP_AT}\n"
    found = measure(text + ".end\n", ("end", "before"))
    if found["before"] < permit["release_volts"]:
        return 0.0
    if found["end"] >= permit["release_volts"]:
        return float("inf")
    text += f".meas tran release WHEN v(coil)={permit['release_volts']:g} FALL=LAST\n.end\n"
    return measure(text, ("release",))["release"] - STOP_AT


def wave_rows(permit):
    """Markdown rows: what the line does, what the coil gets."""
    lines = ["| GP16 | coil voltage | KP |", "| --- | ---: | --- |"]
    states = [(0.0, 0, "steady low"), (0.0, 1, "steady high")]
    states += [(hertz, None, f"square wave, {hertz:g} Hz") for hertz in (50.0, 100.0, 300.0, 700.0, 1000.0, 1500.0, 2500.0, 5000.0, 50000.0)]
    for hertz, stuck, text in states:
        low, high = held(permit, hertz, stuck)
        lines.append(f"| {text} | {low:.1f} to {high:.1f} V | {verdict(permit, low, high)} |".replace("-0.0", "0.0"))
    return lines


def verdict(permit, low, high):
    """What a relay does with a coil voltage between `low` and `high`."""
    if low >= permit["pick_up_volts"]:
        return "picks up and holds"
    if high < permit["release_volts"]:
        return "drops, stays off"
    return "not promised: may hold, will not surely pick up"


def fault_rows(permit):
    """Markdown rows, and the worst figures: (rows, coil volts of a steady line, drop-out seconds, healthy drop-out seconds)."""
    lines = ["| fault | coil at 1 kHz | coil, line steady | wave stops: released after |", "| --- | ---: | ---: | ---: |"]
    steady_worst, slowest, healthy = 0.0, 0.0, 0.0
    for fault in faults():
        low, high = held(permit, permit["hertz"], None, fault)
        steady = max(held(permit, 0.0, level, fault)[1] for level in (0, 1))
        seconds = max(drop_out(permit, level, fault) for level in (0, 1))
        name = "none (healthy)" if fault[0] is None else " ".join(fault)
        lines.append(f"| {name} | {low:.1f} to {high:.1f} V | {steady:.1f} V | {seconds * 1e3:.0f} ms |".replace("-0.0", "0.0"))
        steady_worst, slowest = max(steady_worst, steady), max(slowest, seconds)
        healthy = seconds if fault[0] is None else healthy
    return lines, steady_worst, slowest, healthy
