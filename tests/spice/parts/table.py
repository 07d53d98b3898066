"""Writes the tables of hardware-notes/single-faults.md and compares them with what is in the repository."""

import re
from pathlib import Path

NUMBER = re.compile(r"[-+]?\d+(?:\.\d+)?(?:e[-+]?\d+)?")


def group(results):
    """One row for all string elements that behave alike; every other fault has its own."""
    rows, seen = [], {}
    for result in results:
        match = re.fullmatch(r"RH\d+ (open|shorted)", result.fault.name)
        if not match:
            rows.append([result])
        elif match[1] in seen:
            seen[match[1]].append(result)
        else:
            seen[match[1]] = [result]
            rows.append(seen[match[1]])
    return rows


def _label(rows):
    name = rows[0].fault.name
    if len(rows) > 1:
        name = re.sub(r"RH\d+", f"any of RH1 to RH{len(rows)}", name)
    return plain_name(name)


def _amperes(value):
    for scale, unit in ((1e-3, "mA"), (1e-6, "µA"), (1e-9, "nA")):
        if value >= scale:
            return f"{value / scale:.1f} {unit}"
    return "< 1 nA"


def _reading(result, full_reading):
    if abs(result.reading_volts) >= 0.9999 * full_reading:
        return "over range" if result.reading_volts > 0 else "below range"
    if result.fault.unpowered:
        return "none"
    if abs(result.reading_volts) < 0.01 * result.true_volts:
        return f"**{result.reading_volts:.0f} V**".replace("-0 V", "0 V")
    return f"{result.reading_volts:.0f} V"


def fault_rows(results, healthy, full_reading, noticed):
    """Markdown rows of the single-fault table, worst of each group."""
    lines = ["| fault | pin highest | pin lowest | pin against supply | pin current | buffer input | tap peak | reading says | who notices |",
             "| --- | ---: | ---: | ---: | ---: | ---: | ---: | ---: | --- |"]
    for rows in group(results):
        first = max(rows, key=lambda r: abs(r.reading_volts - healthy.reading_volts))
        lines.append("| " + " | ".join([
            _label(rows),
            f"{max(r.pin_high_volts for r in rows):.2f} V",
            f"{min(r.pin_low_volts for r in rows):.2f} V".replace("-0.00", "0.00"),
            f"{max(r.over_supply_volts for r in rows):+.2f} V".replace("-0.00", "+0.00"),
            _amperes(max(r.pin_amperes for r in rows)),
            _amperes(max(r.buffer_amperes for r in rows)),
            f"{max(r.tap_volts for r in rows):.0f} V",
            _reading(first, full_reading),
            noticed(first, healthy, full_reading),
        ]) + " |")
    return lines


def hidden_rows(hidden, results, converter):
    """How many faults stay hidden, which, and every pair of hidden fault and violent event beyond a limit."""
    names = ", ".join(plain_name(fault.name) for fault in hidden)
    bad = [r for r in results if r.breaches(converter)]
    lines = [f"{len(hidden)} faults change the reading by less than the senses' comparison can see: {names}.", "",
             f"{len(results)} pairs tried, {len(bad)} beyond a limit" + ("." if not bad else ":")]
    if bad:
        lines += ["", "| hidden fault, then event | what is exceeded | tap peak |", "| --- | --- | ---: |"]
    return lines + [f"| {plain_name(r.fault.name)} | {'; '.join(r.breaches(converter))} | {r.tap_volts:.0f} V |" for r in bad]


def plain_name(name):
    """The part's name as the notes have it, without the letter that ngspice wants in front."""
    return name.replace("XGDT", "GDT")


def leakage_rows(rows):
    """Markdown rows of what a clamp's leakage does to the reading."""
    points = list(rows[0][1])
    lines = ["| clamp | " + " | ".join(f"error at {p:.0f} V" for p in points) + " | left after a straight-line calibration |",
             "| --- |" + " ---: |" * (len(points) + 1)]
    for title, errors, left in rows:
        lines.append(f"| {title} | " + " | ".join(f"{e:.3f} V".replace("-0.000", "0.000") for e in errors.values())
                     + f" | {left:.3f} V |")
    return lines


def replace(path, marker, lines):
    """Put `lines` between the markers of `path`."""
    text = Path(path).read_text()
    begin, end = f"<!-- {marker}:begin -->", f"<!-- {marker}:end -->"
    head, _, rest = text.partition(begin)
    _, _, tail = rest.partition(end)
    Path(path).write_text(f"{head}{begin}\n" + "\n".join(lines) + f"\n{end}{tail}")


def difference(path, marker, lines):
    """First difference between the stored table and `lines`, beyond rounding; None when they agree."""
    path = Path(path)
    if not path.exists():
        return f"{path.name} is missing"
    begin, end = f"<!-- {marker}:begin -->", f"<!-- {marker}:end -->"
    text = path.read_text()
    if begin not in text or end not in text:
        return f"{path.name} has no marks {begin} ... {end}"
    stored = text.split(begin, 1)[1].split(end, 1)[0].strip().splitlines()
    if len(stored) != len(lines):
        return f"{path.name} has {len(stored)} lines between its marks, {len(lines)} were computed"
    for old, new in zip(stored, lines):
        if not same(old, new):
            return f"{path.name} says\n  {old}\nbut ngspice gives\n  {new}"
    return None


def same(old, new):
    """Equal text, and numbers equal within 2 % (peaks of currents: 20 %) or one unit of their last digit."""
    if NUMBER.sub("#", old) != NUMBER.sub("#", new):
        return False
    for a, b in zip(NUMBER.finditer(old), NUMBER.finditer(new)):
        # How high a microsecond's peak comes out depends on the solver's steps, and they on its version.
        share = 0.2 if new[b.end():].startswith((" nA", " µA", " mA")) else 0.02
        last = 10.0 ** -max(len(text.partition(".")[2]) for text in (a[0], b[0]))
        if abs(float(a[0]) - float(b[0])) > max(1.01 * last, share * abs(float(b[0]))):
            return False
    return True
