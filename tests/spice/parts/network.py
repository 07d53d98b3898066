"""The network as a list of two-terminal parts, and as ngspice text with at most a few parts at fault."""

from dataclasses import dataclass

# When a fault strikes, and how long it is watched: 25 time constants of the filter, and long enough
# for a spark gap that cannot hold its arc to strike again.
FAULT_AT = 1.0e-3
WATCHED = 12.0e-3
REPORT_FROM = 10.0e-3


@dataclass(frozen=True)
class Part:
    """One part between two nodes. `line` is its ngspice text with {a} and {b} for the nodes."""

    name: str
    a: str
    b: str
    line: str


def parts(net, protection, negative):
    """Every part whose opening or shorting is a fault. The polarity sets the pedestal and nothing else."""
    p = protection
    upper, lower = p["pedestal_negative_ohms" if negative else "pedestal_positive_ohms"]
    made = []
    for index in range(net["elements"]):
        above = "hv" if index == 0 else f"s{index}"
        below = "foot" if index == net["elements"] - 1 else f"s{index + 1}"
        made.append(Part(f"RH{index + 1}", above, below, f"{{a}} {{b}} {net['element_ohms']:g}"))
    for letter, ohms in zip("AB", net["low_ohms"]):
        made.append(Part(f"RL{letter}", "tap", "low", f"{{a}} {{b}} {ohms:g}"))
    diode = "{a} {b} lowleak"

    def value(key):
        return f"{{a}} {{b}} {p[key]:g}"

    made += [
        Part("RT", "foot", "tap", value("foot_ohms")),
        # To the star, not to the pedestal: the charge of a flashover would be pushed into the low pin.
        Part("CF", "tap", "0", value("filter_farads")),
        Part("XGDTA", "tap", "0", "{a} {b} gdt"),
        Part("XGDTB", "tap", "0", "{a} {b} gdt"),
        Part("RS1A", "tap", "mid1", f"{{a}} {{b}} {p['series_ohms'][0]:g}"),
        Part("RS1B", "mid1", "clamp", f"{{a}} {{b}} {p['series_ohms'][1]:g}"),
        Part("DUP", "clamp", "vr", diode),
        Part("DDN", "0", "clamp", diode),
        Part("CCL", "clamp", "0", value("clamp_farads")),
        Part("RS2A", "clamp", "mid2", f"{{a}} {{b}} {p['buffer_ohms'][0]:g}"),
        Part("RS2B", "mid2", "bin", f"{{a}} {{b}} {p['buffer_ohms'][1]:g}"),
        Part("RPD", "bin", "0", value("pulldown_ohms")),
        Part("RO1", "bout", "pin", value("output_ohms")),
        Part("RB1", "vdd", "vr", value("reference_bias_ohms")),
        Part("DREF", "0", "vr", "{a} {b} shunt"),
        Part("CR1", "vr", "0", value("reference_farads")),
        Part("RP1", "vr", "pedin", f"{{a}} {{b}} {upper:g}"),
        Part("RP2", "pedin", "0", f"{{a}} {{b}} {lower:g}"),
        Part("RPED", "pedout", "low", value("pedestal_series_ohms")),
        Part("CPED", "low", "0", value("pedestal_farads")),
        Part("DUL", "low", "vr", diode),
        Part("DDL", "0", "low", "{a} {b} schottky"),
        Part("RA1", "low", "lowpin", value("low_pin_ohms")),
        Part("DVDD", "0", "vdd", "{a} {b} vclamp"),
    ]
    return made


@dataclass(frozen=True)
class Fault:
    """What goes wrong: parts opened, parts shorted, a spark along the string, or a condition from the start."""

    name: str
    opened: tuple = ()
    shorted: tuple = ()
    flashover: bool = False
    wrong_polarity: bool = False
    unpowered: bool = False
    standing: bool = False
    buffer: str = "works"
    pedestal: str = "works"


def netlist(description, net, fault, negative):
    """Complete ngspice text: healthy until FAULT_AT, then with the fault, watched to its end."""
    supply, p, converter = description["supply"], description["protection"], description["converter"]
    sign = -1.0 if negative != fault.wrong_polarity else 1.0
    lines = [f"* {net['name']} {'negative' if negative else 'positive'}: {fault.name}"]
    lines += _source(supply, net, sign, fault, p)
    lines += _parts(parts(net, p, negative), fault)
    lines += _buffer(fault, converter, p)
    lines += _models(p)
    lines += [
        ".options reltol=1e-4 abstol=1e-13 vntol=1e-7 gmin=1e-15 itl4=200",
        f".tran 2u {WATCHED:g} 0 20u",
    ]
    for name, expression in (("pin", "v(pin)"), ("low", "v(lowpin)"), ("over", "v(pin)-v(vdd)"),
                             ("lowover", "v(lowpin)-v(vdd)"), ("ipin", "i(vpin)"), ("ilow", "i(vlow)"),
                             ("ibin", "i(vbin)"), ("clamp", "v(clamp)"), ("tap", "v(tap)"), ("vdd", "v(vdd)"), ("vr", "v(vr)")):
        lines.append(f".meas tran max_{name} MAX par('{expression}')" if "-" in expression
                     else f".meas tran max_{name} MAX {expression}")
        if name != "vdd" and "over" not in name:
            lines.append(f".meas tran min_{name} MIN {expression}")
    lines.append(f".meas tran end_pin AVG v(pin) from={REPORT_FROM:g} to={WATCHED:g}")
    lines.append(f".meas tran end_hv AVG v(hv) from={REPORT_FROM:g} to={WATCHED:g}")
    lines.append(f".meas tran end_low AVG v(lowpin) from={REPORT_FROM:g} to={WATCHED:g}")
    return "\n".join(lines + [".end", ""])


MEASURED = ("max_pin", "min_pin", "max_low", "min_low", "max_over", "max_lowover", "max_ipin", "min_ipin",
            "max_ilow", "min_ilow", "max_ibin", "min_ibin", "max_clamp", "min_clamp", "max_tap", "min_tap",
            "max_vdd", "end_pin", "end_low", "end_hv")


def _source(supply, net, sign, fault, p):
    volts = sign * supply["volts"]
    lines = [
        f"VHV src 0 {volts:g}",
        f"RSRC src hvs {supply['source_ohms']:g}",
        f"CSRC hvs 0 {supply['output_farads']:g}",
        "RLEAD hvs hv 0.1",
        f"RBLEED hvs 0 {net['bleeder_ohms']:g}",
        f"VOPEN opening 0 PULSE(1 0 {FAULT_AT:g} 1u 1u 1 2)",
        f"VSHORT shorting 0 PULSE(0 1 {FAULT_AT:g} 50n 50n 1 2)",
        ".model opens SW(vt=0.5 vh=0 ron=1m roff=1e14)",
        ".model shorts SW(vt=0.5 vh=0 ron=0.1 roff=1e14)",
        f".model arcs SW(vt=0.5 vh=0 ron={supply['arc_ohms']:g} roff=1e14)",
    ]
    if fault.flashover:
        lines += ["SARC hv spark shorting 0 arcs", f"LARC spark foot {supply['lead_henries']:g}"]
    if fault.standing:
        lines += [f".model smoulders SW(vt=0.5 vh=0 ron={_standing_ohms(supply, net, p):g} roff=1e14)",
                  "SSTAND hv foot shorting 0 smoulders"]
    return lines


def _standing_ohms(supply, net, p):
    """A spark of just so high a resistance that the tap stands a little below what fires the gas tube."""
    volts = 0.95 * p["gdt_fire_volts"]
    amperes = volts * sum(1.0 / ohms for ohms in net["low_ohms"]) + (volts - p["reference_volts"]) / sum(p["series_ohms"])
    return (supply["volts"] - volts) / amperes - supply["source_ohms"] - p["foot_ohms"]


def _parts(made, fault):
    lines = []
    for part in made:
        a = part.a
        if part.name in fault.opened:
            a = f"{part.name.lower()}_open"
            lines.append(f"SO{part.name} {part.a} {a} opening 0 opens")
            # A node behind an opened part still needs a path and some capacitance for ngspice: far below any effect.
            lines += [f"RO{part.name}X {a} {part.b} 1e15", f"CO{part.name}X {a} {part.b} 1p"]
        if part.name in fault.shorted:
            lines.append(f"SS{part.name} {part.a} {part.b} shorting 0 shorts")
        lines.append(f"{part.name} {part.line.format(a=a, b=part.b)}")
    return lines


def _buffer(fault, converter, p):
    """Buffer, analogue supply and converter. The supply can only give: a current pushed into it lifts it."""
    volts = 0.0 if fault.unpowered else converter["supply_volts"]
    lines = [
        f"VLDO ldo 0 {volts + 0.0:g}",
        f"BLDO ldo vdd I = min(max(10*(v(ldo)-v(vdd)), 0), {converter['supply_amperes']:g})",
        f"RLOAD vdd 0 {converter['supply_load_ohms']:g}",
        "CLOAD vdd 0 10u",
        "VBIN bin bi 0",
        "DBUP bi vdd esd",
        "DBDN 0 bi esd",
        "RBI bi 0 1e13",
        # Bandwidth first, then the rails: an output stage cannot stand above a supply that collapses.
        "EPOLE ideal 0 bi 0 1",
        "RPOLE ideal slow 1k",
        "CPOLE slow 0 160p",
        f"BDRIVE drive 0 V = {_driven('slow', fault.buffer)}",
        "SDRIVE drive driven opening 0 opens" if fault.buffer == "shorted" else "RDRIVE drive driven 1m",
        "ROUT driven bout 1",
        f"BPDRIVE peddrive 0 V = {_driven('pedin', fault.pedestal)}",
        "RPOUT peddrive pedout 50",
        "VPIN pin conv 0",
        "DCUP conv vdd esd",
        "DCDN 0 conv esd",
        "VLOW lowpin convlow 0",
        "DLUP convlow vdd esd",
        "DLDN 0 convlow esd",
        f"RCONV conv convlow {converter['input_ohms']:g}",
        ".model esd D(is=1e-15 n=1 rs=10)",
    ]
    if fault.buffer == "shorted":
        lines.append("SBUF bi bout shorting 0 shorts")
    return lines


def _driven(node, state):
    """What an amplifier's output stage gives: its input within the supply, or a rail once it is stuck."""
    works = f"max(min(v({node}), v(vdd)-0.005), 0.005)"
    return {
        "high": f"time < {FAULT_AT:g} ? {works} : v(vdd)",
        "low": f"time < {FAULT_AT:g} ? {works} : 0",
    }.get(state, works)


def _models(p):
    fire, hold = p["gdt_fire_volts"], p["gdt_hold_amperes"]
    zener = p["gdt_arc_volts"] - 0.8
    return [
        f".model lowleak D(is={p['diode_saturation_amperes']:g} n=1.8 rs={p['diode_series_ohms']:g} cjo=2p)",
        ".model schottky D(is=1e-7 n=1.05 rs=1)",
        f".model vclamp D(is=1e-12 bv={p['supply_clamp_volts']:g} ibv=1m rs=1)",
        f".model shunt D(is=1e-14 bv={p['reference_volts']:g} ibv=1m rs={p['reference_dynamic_ohms']:g})",
        # Gas tube: fires once the volt-seconds above its static level are used up, holds while current flows.
        ".subckt gdt a b",
        f"BAREA 0 area I = max(abs(v(a,b))-{fire:g},0)/{p['gdt_volt_seconds']:g}"
        f" + (abs(i(vsense)) > {hold:g} ? 1e6 : 0)",
        "CAREA area 0 1",
        "RAREA area 0 10u",
        "DAREA area lid limiter",
        "VLID lid 0 2",
        "SG a g1 area 0 gsw",
        "DG1 g1 g2 arc",
        "DG2 g3 g2 arc",
        "VSENSE g3 b 0",
        "CGDT a b 1p",
        "RGDT a b 1e13",
        ".model gsw SW(vt=0.5 vh=0.45 ron=0.05 roff=1e13)",
        f".model arc D(is=1e-9 bv={zener:g} ibv=1m rs=0.05)",
        ".model limiter D(is=1e-6 rs=1e-7)",
        ".ends",
    ]
