"""Ratio, settling, bandwidth and bleed-down of the three plain networks, and the cost of a clamp's leakage."""

import math

from .simulator import measure

TOUCH_VOLTS = 60.0
SETTLED = 100.0e-6


def _string(net):
    lines = [
        f"RH{i + 1} {'hv' if i == 0 else f's{i}'} {'tap' if i == net['elements'] - 1 else f's{i + 1}'} {net['element_ohms']:g}"
        for i in range(net["elements"])
    ]
    lines += [f"RL{i + 1} tap 0 {ohms:g}" for i, ohms in enumerate(net["low_ohms"])]
    return lines + [f"RIN tap 0 {net['input_ohms']:g}", f"CF tap 0 {net['filter_farads']:g}"]


def _filter_seconds(net):
    """Only to choose time steps and sweep limits; no reported figure comes from it."""
    low = 1.0 / sum(1.0 / ohms for ohms in net["low_ohms"])
    return low * net["filter_farads"]


def plain(net, volts):
    """The figures of one network, all read from ngspice."""
    exact = ".options reltol=1e-7 abstol=1e-16 vntol=1e-10 gmin=1e-18 numdgt=10"
    dc = measure("\n".join([
        f"* {net['name']} ratio", f"VHV hv 0 {volts:g}", *_string(net), exact, f".dc VHV {volts:g} {volts:g} 1",
        ".meas dc tap_volts MAX v(tap)", ".meas dc string_amperes MIN i(vhv)", ".end", ""]),
        ("tap_volts", "string_amperes"))
    tau = _filter_seconds(net)
    level = dc["tap_volts"] * (1.0 - SETTLED)
    step = measure("\n".join([
        f"* {net['name']} settling", f"VHV hv 0 PULSE(0 {volts:g} 0 1n 1n 1 2)", *_string(net), exact,
        f".tran {tau / 50:g} {tau * 14:g} 0 {tau / 100:g}", f".meas tran settled WHEN v(tap)={level:.12g} RISE=1",
        ".end", ""]), ("settled",))
    ac = measure("\n".join([
        f"* {net['name']} bandwidth", "VHV hv 0 DC 0 AC 1", *_string(net), exact,
        f".ac dec 2000 {0.001 / tau:g} {10 / tau:g}", ".save v(tap)",
        f".meas ac corner WHEN vdb(tap)={20.0 * math.log10(dc['tap_volts'] / volts / 2**0.5):.12g}",
        ".end", ""]), ("corner",))
    # ngspice prints seven digits, and more than that is not kept.
    return {
        "ratio": float(f"{volts / dc['tap_volts']:.7g}"),
        "tap_volts": dc["tap_volts"],
        "string_amperes": -dc["string_amperes"],
        "settle_100ppm_seconds": step["settled"],
        "bandwidth_hz": ac["corner"],
        "bleed_seconds": _bleed(net, volts, True),
        "bleed_without_bleeder_seconds": _bleed(net, volts, False),
    }


def _bleed(net, volts, with_bleeder):
    ohms = net["elements"] * net["element_ohms"]
    if with_bleeder:
        ohms = 1.0 / (1.0 / ohms + 1.0 / net["bleeder_ohms"])
    tau = ohms * net["supply_farads"]
    bleeder = [f"RB hv 0 {net['bleeder_ohms']:g}"] if with_bleeder else []
    found = measure("\n".join([
        f"* {net['name']} bleed-down", f"CS hv 0 {net['supply_farads']:g} ic={volts:g}", *bleeder, *_string(net),
        ".options reltol=1e-6 gmin=1e-18", f".tran {tau / 100:g} {tau * 12:g} 0 {tau / 200:g} uic",
        f".meas tran bled WHEN v(hv)={TOUCH_VOLTS:g} FALL=1", ".end", ""]), ("bled",))
    return found["bled"]


# Name, lines of the clamp at node `clamp`, and the leakage in amperes used for the I x R_H estimate.
def clamps(protection):
    """The clamps that are compared. Leakages are from memory; the TVS law is an assumption, no source."""
    typical = protection["diode_saturation_amperes"]
    reference = f"VR vr 0 {protection['reference_volts']:g}"

    def pair(up, down):
        return [reference, "DUP clamp vr up", "DDN 0 clamp down", f".model up D(is={up:g} n=1.8)",
                f".model down D(is={down:g} n=1.8)"]

    def suppressor(amperes):
        return [f"BTVS clamp 0 I = {amperes:g}*sinh(v(clamp)/0.8)/sinh(5/0.8)"]

    return [
        ("low-leakage pair to 2.5 V, typical (3 pA)", pair(typical, typical)),
        ("low-leakage pair, both at 5 nA", pair(5e-9, 5e-9)),
        ("low-leakage pair, upper one alone at 5 nA", pair(5e-9, typical)),
        ("5 V suppressor on the tap, 1 µA at 5 V", suppressor(1e-6)),
        ("5 V suppressor on the tap, 20 K warmer (4 µA)", suppressor(4e-6)),
        ("5 V suppressor on the tap, worst part (100 µA)", suppressor(1e-4)),
    ]


def leakage(net, protection, volts):
    """Error of the reading in volts at five points, for each clamp: (name, {volts: error}, residual ppm of full scale)."""
    points = [0.0, 0.25 * volts, 0.5 * volts, 0.75 * volts, volts]
    names = [f"p{i}" for i in range(len(points))]

    def sweep(title, lines):
        text = [f"* leakage: {title}", "VHV hv 0 0", *_string(net), f"RS1 tap clamp {sum(protection['series_ohms']):g}",
                *lines, ".options reltol=1e-7 abstol=1e-18 vntol=1e-10 gmin=1e-18 numdgt=10",
                f".dc VHV 0 {volts:g} {volts / 4:g}"]
        text += [f".meas dc {name} FIND v(clamp) AT={point:g}" for name, point in zip(names, points)]
        found = measure("\n".join([*text, ".end", ""]), names)
        return [found[name] for name in names]

    clean = sweep("no clamp", ["RNONE clamp 0 1e15"])
    scale = volts / clean[-1]
    rows = []
    for title, lines in clamps(protection):
        errors = [(got - want) * scale for got, want in zip(sweep(title, lines), clean)]
        rows.append((title, dict(zip(points, errors)), _after_line(points, errors)))
    return rows


def _after_line(points, errors):
    """Largest error in volts that a straight-line calibration cannot take out (least squares)."""
    n = len(points)
    mean_x, mean_y = sum(points) / n, sum(errors) / n
    slope = sum((x - mean_x) * (y - mean_y) for x, y in zip(points, errors)) / sum((x - mean_x) ** 2 for x in points)
    return max(abs(y - mean_y - slope * (x - mean_x)) for x, y in zip(points, errors))
