"""Which faults are tried, and what is made of each."""

from dataclasses import dataclass

from . import network, simulator
from .network import Fault

# A reading that moves by less than this is not noticed by any comparison of the two senses.
UNNOTICED = 0.0005
# Where the controller trips on disagreeing senses (DESIGN: max(0.25 %, 4 u) on 1 s means).
DISAGREE = 0.0025


@dataclass(frozen=True)
class Outcome:
    """Worst values at the converter's two pins, and what the reading became."""

    fault: Fault
    negative: bool
    pin_high_volts: float
    pin_low_volts: float
    over_supply_volts: float
    pin_amperes: float
    buffer_amperes: float
    tap_volts: float
    supply_volts: float
    reading_volts: float
    true_volts: float

    def deviation(self):
        """How far the reading is off, as a fraction of the true voltage at the tube."""
        return self.reading_volts / self.true_volts - 1.0

    def breaches(self, converter):
        """Sentences for every limit that is exceeded; empty when all hold."""
        margin = converter["over_supply_volts"]
        found = []
        if self.over_supply_volts > margin:
            found.append(f"pin {self.over_supply_volts:+.2f} V against its supply, limit +{margin} V")
        if self.pin_low_volts < -margin:
            found.append(f"pin at {self.pin_low_volts:.2f} V, limit -{margin} V")
        if self.pin_amperes > converter["input_amperes"]:
            found.append(f"pin current {self.pin_amperes * 1e3:.1f} mA, limit {converter['input_amperes'] * 1e3:.0f} mA")
        if self.supply_volts > converter["supply_absolute_volts"]:
            found.append(f"analogue supply pushed to {self.supply_volts:.1f} V, limit {converter['supply_absolute_volts']} V")
        if self.buffer_amperes > converter["buffer_amperes"]:
            found.append(f"buffer input {self.buffer_amperes * 1e3:.1f} mA, limit {converter['buffer_amperes'] * 1e3:.0f} mA")
        return found


def single(net, protection, negative):
    """Every single fault: each part opened, each part shorted, the string as a whole, buffer and conditions."""
    made = [Fault("none (healthy)")]
    for part in network.parts(net, protection, negative):
        made.append(Fault(f"{part.name} open", opened=(part.name,)))
        made.append(Fault(f"{part.name} shorted", shorted=(part.name,)))
    both = tuple(f"RL{letter}" for letter, _ in zip("AB", net["low_ohms"]))
    made += [
        Fault("common lead of RLA and RLB open", opened=both),
        Fault("flashover: whole string bridged", flashover=True),
        Fault("flashover held just below gas tube firing", standing=True),
        Fault("buffer output stuck at supply", buffer="high"),
        Fault("buffer output stuck at ground", buffer="low"),
        Fault("buffer input joined to its output", buffer="shorted"),
        Fault("pedestal stuck at supply", pedestal="high"),
        Fault("pedestal stuck at ground", pedestal="low"),
        Fault("electronics unpowered, HV on", unpowered=True),
        Fault("HV of the wrong polarity", wrong_polarity=True),
    ]
    return made


def violent():
    """Events that follow a hidden fault in the second table."""
    return [Fault("flashover", flashover=True), Fault("standing flashover", standing=True),
            Fault("both low-side resistors open", opened=("RLA", "RLB"))]


def joined(first, second):
    """Both faults at once."""
    return Fault(
        f"{first.name}, then {second.name}",
        opened=first.opened + second.opened,
        shorted=first.shorted + second.shorted,
        flashover=second.flashover,
        standing=second.standing,
        buffer=first.buffer,
        pedestal=first.pedestal,
    )


def outcome(description, net, fault, negative):
    """Simulate one fault."""
    m = simulator.measure(network.netlist(description, net, fault, negative), network.MEASURED)
    scale = 1.0 + net["elements"] * net["element_ohms"] * sum(1.0 / ohms for ohms in net["low_ohms"])
    full = description["converter"]["full_scale_volts"]
    difference = max(-full, min(full, m["end_pin"] - m["end_low"]))
    return Outcome(
        fault=fault,
        negative=negative,
        pin_high_volts=max(m["max_pin"], m["max_low"]),
        pin_low_volts=min(m["min_pin"], m["min_low"]),
        over_supply_volts=max(m["max_over"], m["max_lowover"]),
        pin_amperes=max(abs(m[key]) for key in ("max_ipin", "min_ipin", "max_ilow", "min_ilow")),
        buffer_amperes=max(abs(m["max_ibin"]), abs(m["min_ibin"])),
        tap_volts=max(abs(m["max_tap"]), abs(m["min_tap"])),
        supply_volts=m["max_vdd"],
        true_volts=abs(m["end_hv"]),
        reading_volts=(-1.0 if negative else 1.0) * difference * scale,
    )


def harsher(description, changes):
    """The description with the figures of one table of [harsher] put in."""
    changed = {key: dict(value) if isinstance(value, dict) else value for key, value in description.items()}
    for section, values in changes.items():
        changed[section].update(values)
    return changed


def noticed(result, healthy, full_reading):
    """Who notices: told from the reading against the healthy one."""
    if result.fault == healthy.fault:
        return "nothing to notice"
    if result.fault.unpowered:
        return "converter silent"
    if abs(result.reading_volts) >= 0.9999 * full_reading:
        return "tap over range" if result.reading_volts > 0 else "under range, wrong sign"
    if result.fault.wrong_polarity:
        return "wrong sign, on both senses" if result.reading_volts < 0 else "nobody: both senses read near 0"
    # Both strings hang on the same supply, so a fault that only loads the supply moves both alike.
    off = abs(result.deviation() - healthy.deviation())
    if off < UNNOTICED:
        return "nobody: hidden"
    if off < DISAGREE:
        return "session check only"
    return "senses disagree"
