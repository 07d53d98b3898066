"""The hard-wired chain, its two contactors, the permit, and what the controller sees of them."""

import schemdraw.elements as elm

from sheet import drawing

TITLE = "Interlock: two hard-wired channels, two contactors, and a permit that can only be withdrawn"
DESCRIPTION = (
    "Two channels, A and B. Each runs from 24 V through the normally closed contacts of emergency stop, door, and cover, then through the permit "
    "relay's contact and the reset latch, to the coil of its own contactor KA or KB. Contactor main contacts are in series in the mains lead of "
    "the high-voltage supply. The controller reads both loops, and the mirror contacts of both contactors, through optocouplers. Its "
    "permit output is a square wave into a charge pump that holds the permit relay KP only while the wave goes on."
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
    d += elm.Label(color=SAFE).at((-0.2, y)).label(f"loop {name}\n+24 V", halign="right", valign="center")
    for index, text in enumerate(("stop", "door", "cover")):
        contact(d, 2.2 * index, y, f"{text} {name}")
        d += elm.Line().at((2.2 * index + 2.0, y)).to((2.2 * index + 2.2, y))
    d += elm.Line().at((6.6, y)).to((8.4, y))
    d += elm.Dot().at((7.4, y))
    d += elm.Line(color=LOGIC).at((7.4, y)).to((7.4, y - 1.2))
    d += elm.Label(color=LOGIC).at((7.4, y - 1.65)).label(f"to opto, GP1{'0' if name == 'A' else '1'}", halign="center")
    contact(d, 8.4, y, f"KP {name}", normally_open=True)
    contact(d, 10.4, y, f"{'KR'} {name}", normally_open=True)
    d += elm.Line().at((12.4, y)).to((13.4, y))
    coil(d, 13.4, y, contactor)
    d += elm.Line().at((15.6, y)).to((16.2, y))
    d += elm.Line().at((16.2, y)).to((16.2, y - 0.3))
    d += elm.Ground().at((16.2, y - 0.3))


def mains(d, y):
    d += elm.Dot(open=True).at((0, y))
    d += elm.Label(color=HOT).at((-0.2, y)).label("mains L", halign="right", valign="center")
    d += elm.Line(color=HOT).at((0, y)).to((2.2, y))
    contact(d, 2.2, y, "plug, fuse")
    d += elm.Line(color=HOT).at((4.2, y)).to((8.4, y))
    contact(d, 8.4, y, "KA main", normally_open=True)
    contact(d, 10.4, y, "KB main", normally_open=True)
    d += elm.Line(color=HOT).at((12.4, y)).to((13.4, y))
    d += elm.Rect(corner1=(13.4, y + 0.8), corner2=(17.2, y - 0.8), fill="#fdeeea", color=HOT).at((0, 0))
    d += elm.Label(color=HOT).at((15.3, y)).label("HV supply", halign="center", valign="center")
    d += elm.Label().at((0, y - 1.2)).label("HV stays for the bleed-down time after the contactors have dropped: see trips and cautions", halign="left", fontsize=12)


def box(d, x1, y1, x2, y2, text, fill="#eef3fb"):
    d += elm.Rect(corner1=(x1, y1), corner2=(x2, y2), fill=fill).at((0, 0))
    d += elm.Label().at(((x1 + x2) / 2, (y1 + y2) / 2)).label(text, halign="center", valign="center")


def arrow(d, x1, y1, x2, y2, colour=LOGIC):
    d += elm.Line(color=colour, arrow="->").at((x1, y1)).to((x2, y2))


def controller(d):
    d += elm.Line(ls="--", color="#888888").at((-2.6, -5.3)).to((21.5, -5.3))
    d += elm.Label(color="#666666").at((21.5, -5.1)).label("isolation barrier", halign="right")
    box(d, 6.0, -10.8, 10.6, -6.6, "controller (RP2040)\n\nreads; may withdraw\nthe permit; can close,\nbypass and start\nnothing")
    box(d, -2.6, -7.4, 2.8, -6.4, "GP10  loop A", "white")
    box(d, -2.6, -8.6, 2.8, -7.6, "GP11  loop B", "white")
    box(d, -2.6, -9.8, 2.8, -8.8, "GP12  mirror KA+KB", "white")
    box(d, -2.6, -11.0, 2.8, -10.0, "GP13  reset pressed", "white")
    for y in (-6.9, -8.1, -9.3, -10.5):
        arrow(d, 2.8, y, 6.0, y)
    arrow(d, 10.6, -7.4, 12.6, -7.4)
    d += elm.Label(color=LOGIC).at((11.6, -7.1)).label("GP16", halign="center")
    d += elm.Label(color=LOGIC).at((11.6, -8.1)).label("1 kHz", halign="center")
    box(d, 12.6, -8.2, 16.4, -6.6, "opto, then\ncharge pump")
    arrow(d, 16.4, -7.4, 17.6, -7.4)
    box(d, 17.6, -8.2, 21.5, -6.6, "permit relay KP\n(two contacts)")
    d += elm.Label().at((12.6, -9.1)).label("steady high, steady low, open wire,\na dead or stuck controller: KP drops", halign="left")
    arrow(d, 10.6, -10.4, 12.6, -10.4)
    d += elm.Label(color=LOGIC).at((11.6, -10.1)).label("GP18", halign="center")
    box(d, 12.6, -11.0, 21.5, -9.9, "HV PRESENT lamp: lit unless held dark", "#fdeeea")


def mirrors(d, y):
    d += elm.Dot(open=True).at((0, y))
    d += elm.Label(color=LOGIC).at((-0.2, y)).label("mirror\ncontacts", halign="right", valign="center")
    contact(d, 0, y, "KA")
    contact(d, 2.0, y, "KB")
    arrow(d, 4.0, y, 6.2, y)
    d += elm.Label(color=LOGIC).at((6.4, y)).label("to opto, GP12: high = both released", halign="left", valign="center")


def reset(d, y):
    box(d, 13.0, y - 0.6, 21.5, y + 0.6, "KR: reset latch of the chain. Press and\nrelease of the button, both mirrors closed", "#eef7f0")


def main():
    with drawing("interlock", TITLE, DESCRIPTION) as d:
        channel(d, 4.6, "A", "KA coil")
        channel(d, 1.4, "B", "KB coil")
        mains(d, 8.0)
        mirrors(d, -3.4)
        reset(d, -3.4)
        controller(d)


if __name__ == "__main__":
    main()
