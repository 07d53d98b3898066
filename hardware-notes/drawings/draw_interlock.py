"""The hard-wired chain, its two contactors, the permit, and what the controller sees of them."""

import schemdraw.elements as elm

from sheet import drawing

TITLE = "Interlock: two hard-wired channels, two contactors, and a permit that can only be withdrawn"
DESCRIPTION = (
    "Two channels, A and B. Each runs from 24 V through the normally closed contacts of emergency stop, door and cover into one input of a "
    "dual-channel safety relay KR. Each output of KR goes through a contact of the permit relay KP to the coil of one contactor, KA or KB. "
    "The contactors' main contacts are in series in the mains lead of the high-voltage supply. The mirror contacts of both contactors and the "
    "reset button form the reset circuit of KR. The controller reads both loops, the mirror contacts and the button through "
    "optocouplers. Its permit output is a square wave into a charge pump that holds the permit relay KP only while the wave goes on."
)
HOT, LOGIC, SAFE = "#b03000", "#1d4f91", "#1f7a3a"


def contact(d, x, y, name, normally_open=False):
    """One contact, two units wide, starting at x."""
    d += elm.Line().at((x, y)).to((x + 0.5, y))
    d += elm.Dot(open=True, radius=0.07).at((x + 0.5, y))
    d += elm.Dot(open=True, radius=0.07).at((x + 1.5, y))
    d += elm.Line().at((x + 0.55, y)).to((x + 1.5, y + (0.5 if normally_open else -0.12)))
    d += elm.Line().at((x + 1.55, y)).to((x + 2.0, y))
    d += elm.Label().at((x + 1.0, y + 0.62)).label(name, halign="center")


def coil(d, x, y, name):
    d += elm.Rect(corner1=(x, y + 0.5), corner2=(x + 1.4, y - 0.5), fill="#f4f7f9").at((0, 0))
    d += elm.Label().at((x + 0.7, y - 0.02)).label(name, halign="center", valign="center")
    d += elm.Line().at((x + 1.4, y)).to((x + 2.2, y))


def channel(d, y, name, contactor):
    d += elm.Dot(open=True).at((0, y))
    d += elm.Label(color=SAFE).at((-0.3, y - 0.2)).label(f"loop {name}\n+24 V", halign="right", valign="center")
    for index, text in enumerate(("stop", "door", "cover")):
        contact(d, 2.4 * index, y, f"{text} {name}")
        d += elm.Line().at((2.4 * index + 2.0, y)).to((2.4 * index + 2.4, y))
    d += elm.Line().at((7.2, y)).to((9.4, y))
    d += elm.Dot().at((8.2, y))
    d += elm.Line(color=LOGIC, arrow="->").at((8.2, y)).to((8.2, y - 1.1))
    d += elm.Label(color=LOGIC).at((8.2, y - 1.75)).label(f"opto, GP1{'0' if name == 'A' else '1'}", halign="center")
    d += elm.Line().at((13.8, y)).to((14.2, y))
    contact(d, 14.2, y, f"KP {name}", normally_open=True)
    d += elm.Line().at((16.2, y)).to((16.8, y))
    d += elm.Rect(corner1=(16.8, y + 0.6), corner2=(19.2, y - 0.6), fill="#f4f7f9").at((0, 0))
    d += elm.Label().at((18.0, y - 0.2)).label(f"{contactor}", halign="center", valign="center")
    d += elm.Line().at((19.2, y)).to((20.2, y))
    d += elm.Ground().at((20.2, y)).label("0 V", loc="right")


def safety_relay(d, low, high):
    d += elm.Rect(corner1=(9.4, high + 1.1), corner2=(13.8, low - 1.1), fill="#eef7f0", color=SAFE).at((0, 0))
    for y, name in ((high, "A"), (low, "B")):
        d += elm.Label().at((9.6, y + 0.2)).label(f"in {name}", halign="left")
        d += elm.Label().at((13.6, y + 0.2)).label(f"out {name}", halign="right")
    d += elm.Label(color=SAFE).at((11.6, (low + high) / 2 - 0.4)).label("KR\nsafety relay, two\nchannels, monitored\nmanual reset", halign="center", valign="center")


def mains(d, y):
    d += elm.Dot(open=True).at((0, y))
    d += elm.Label(color=HOT).at((-0.3, y)).label("mains L", halign="right", valign="center")
    contact(d, 0, y, "plug, fuse")
    d += elm.Line(color=HOT).at((2.0, y)).to((9.4, y))
    contact(d, 9.4, y, "KA main", normally_open=True)
    d += elm.Line(color=HOT).at((11.4, y)).to((11.8, y))
    contact(d, 11.8, y, "KB main", normally_open=True)
    d += elm.Line(color=HOT).at((13.8, y)).to((16.8, y))
    d += elm.Rect(corner1=(16.8, y + 0.8), corner2=(20.8, y - 0.8), fill="#fdeeea", color=HOT).at((0, 0))
    d += elm.Label(color=HOT).at((18.8, y - 0.2)).label("HV supply", halign="center", valign="center")
    d += elm.Label(color=HOT).at((2.2, y - 0.9)).label("after the contactors drop, the HV still bleeds down", halign="left")


def box(d, x1, y1, x2, y2, text, fill="#eef3fb"):
    d += elm.Rect(corner1=(x1, y1), corner2=(x2, y2), fill=fill).at((0, 0))
    d += elm.Label().at(((x1 + x2) / 2, (y1 + y2) / 2 - 0.2)).label(text, halign="center", valign="center")


def arrow(d, x1, y1, x2, y2, colour=LOGIC):
    d += elm.Line(color=colour, arrow="->").at((x1, y1)).to((x2, y2))


def controller(d):
    d += elm.Line(ls="--", color="#888888").at((-2.6, -5.3)).to((21.5, -5.3))
    d += elm.Label(color="#666666").at((21.5, -5.1)).label("isolation barrier", halign="right")
    box(d, 5.0, -11.0, 10.4, -6.4, "controller (RP2040)\n\nreads the chain, may\nwithdraw the permit.\nIt cannot close, bypass\nor start anything.")
    box(d, -2.6, -7.4, 2.8, -6.4, "GP10  loop A", "white")
    box(d, -2.6, -8.6, 2.8, -7.6, "GP11  loop B", "white")
    box(d, -2.6, -9.8, 2.8, -8.8, "GP12  mirror KA+KB", "white")
    box(d, -2.6, -11.0, 2.8, -10.0, "GP13  reset pressed", "white")
    for y in (-6.9, -8.1, -9.3, -10.5):
        arrow(d, 2.8, y, 5.0, y)
    arrow(d, 10.4, -7.4, 12.6, -7.4)
    d += elm.Label(color=LOGIC).at((11.6, -7.1)).label("GP16", halign="center")
    d += elm.Label(color=LOGIC).at((11.6, -8.1)).label("1 kHz", halign="center")
    box(d, 12.6, -8.2, 16.4, -6.6, "opto, then\ncharge pump")
    arrow(d, 16.4, -7.4, 17.6, -7.4)
    box(d, 17.6, -8.2, 21.5, -6.6, "permit relay KP\n(two contacts)")
    d += elm.Label().at((12.6, -9.1)).label("steady high, steady low, open wire,\na dead or stuck controller: KP drops", halign="left")
    arrow(d, 10.4, -10.4, 12.6, -10.4)
    d += elm.Label(color=LOGIC).at((11.6, -10.1)).label("GP18", halign="center")
    box(d, 12.6, -11.0, 21.5, -9.9, "HV PRESENT lamp: lit unless held dark", "#fdeeea")


def reset_circuit(d, y):
    d += elm.Dot(open=True).at((0, y))
    d += elm.Label(color=SAFE).at((-0.3, y - 0.2)).label("reset\n+24 V", halign="right", valign="center")
    contact(d, 0, y, "KA mirror")
    d += elm.Line().at((2.0, y)).to((2.4, y))
    contact(d, 2.4, y, "KB mirror")
    d += elm.Line().at((4.4, y)).to((6.2, y))
    d += elm.Dot().at((5.3, y))
    d += elm.Line(color=LOGIC, arrow="->").at((5.3, y)).to((5.3, y - 1.1))
    d += elm.Label(color=LOGIC).at((5.3, y - 1.75)).label("opto, GP12", halign="center")
    contact(d, 6.2, y, "reset button", normally_open=True)
    d += elm.Line().at((8.2, y)).to((11.6, y))
    d += elm.Line(arrow="->", color=SAFE).at((11.6, y)).to((11.6, 0.3))
    d += elm.Label().at((11.8, y + 0.3)).label("reset in: on release", halign="left")
    d += elm.Label(color=LOGIC).at((12.6, y - 1.4)).label("the button's second contact: opto, GP13", halign="left")


def main():
    with drawing("interlock", TITLE, DESCRIPTION) as d:
        safety_relay(d, 1.4, 4.6)
        channel(d, 4.6, "A", "KA coil")
        channel(d, 1.4, "B", "KB coil")
        mains(d, 8.0)
        reset_circuit(d, -2.0)
        controller(d)


if __name__ == "__main__":
    main()
