"""Which electrode is earthed: the three variants side by side."""

import math

import schemdraw.elements as elm
from schemdraw.segments import SegmentPoly

from sheet import drawing

TITLE = "Which electrode is earthed, and where the divider goes"
DESCRIPTION = (
    "Three pictures of the same tube. A: cathode near earth, anode, target and screen at positive high voltage, divider from anode to earth, "
    "positive reading. B: anode earthed, cathode and heater at negative high voltage, divider from cathode pin to earth, negative "
    "reading, heater transformer isolated for full high voltage. C: neither earthed, one divider from each electrode to earth, the "
    "two readings subtracted."
)
HOT, COLD, GLASS = "#b03000", "#1d4f91", "#607080"


class Bulb(elm.Element):
    """Neck to the left, bulb to the right; the origin is the middle of the neck's left end."""

    def __init__(self, **kwargs):
        super().__init__(**kwargs)
        radius, neck, centre = 1.75, 0.75, 3.6
        start = math.pi - math.asin(neck / radius)
        arc = [(centre + radius * math.cos(start * (1 - t / 20)), radius * math.sin(start * (1 - t / 20))) for t in range(41)]
        self.segments.append(SegmentPoly([(0, neck), *arc, (0, -neck)], closed=True, color=GLASS, fill="#f1f5f8", lw=2))


def tube(d, x, cathode, anode):
    """Cathode with its heater and the anode disc with the target; the screen is the bulb's right side."""
    y = 9.4
    d += Bulb().at((x, y)).theta(0)
    d += elm.Line(ls=":", color="#2f8f3a", lw=2).at((x + 0.9, y)).to((x + 5.3, y))
    d += elm.Line(color=cathode, lw=3.5).at((x + 0.9, y - 0.5)).to((x + 0.9, y + 0.5))
    d += elm.Line(color=anode, lw=3.5).at((x + 2.3, y - 0.65)).to((x + 2.3, y - 0.1))
    d += elm.Line(color=anode, lw=3.5).at((x + 2.3, y + 0.1)).to((x + 2.3, y + 0.65))
    d += elm.Label(color=cathode).at((x + 0.6, y + 0.95)).label("cathode,\nheater", halign="center")
    d += elm.Label(color=anode).at((x + 3.6, y + 1.95)).label("anode, target,\nscreen", halign="center")
    d += elm.Line(color=cathode).at((x + 0.9, y - 0.5)).to((x + 0.9, 7.2))
    d += elm.Line(color=anode).at((x + 2.3, y - 0.65)).to((x + 2.3, 7.2))


def chain(d, x, top, colour, name):
    """A divider string down to the star point at y = 1."""
    d += elm.Line(color=colour).at((x, top)).to((x, 5.4))
    d += elm.Resistor(color=colour).at((x, 5.4)).to((x, 3.6)).label("RH", loc="bottom")
    d += elm.Dot().at((x, 3.2))
    d += elm.Line().at((x, 3.6)).to((x, 3.2))
    d += elm.Resistor().at((x, 3.2)).to((x, 1.4)).label("RL", loc="bottom")
    d += elm.Line().at((x, 1.4)).to((x, 1))
    d += elm.Line().at((x, 3.2)).to((x + 0.9, 3.2))
    d += elm.Label(color=COLD).at((x + 1.0, 3.2)).label(name, halign="left", valign="center")


def earth(d, x):
    d += elm.Ground().at((x, 1))


def heading(d, x, text):
    d += elm.Label(fontsize=15).at((x, 13.2)).label(text, halign="left")


def words(d, x, lines):
    for index, (text, colour) in enumerate(lines):
        d += elm.Label(color=colour).at((x, -0.9 - 0.75 * index)).label(text, halign="left", valign="center")


def variant_a(d, x):
    heading(d, x, "A   cathode near earth")
    tube(d, x + 1.2, COLD, HOT)
    d += elm.Line(color=COLD).at((x + 2.1, 7.2)).to((x + 2.1, 1))
    d += elm.Line(color=HOT).at((x + 3.5, 7.2)).to((x + 6.0, 7.2))
    d += elm.Line(color=HOT).at((x + 3.5, 7.2)).to((x + 3.5, 4.4))
    d += elm.SourceV().endpoints((x + 3.5, 2.6), (x + 3.5, 4.4)).label("supply", loc="bottom")
    d += elm.Line().at((x + 3.5, 2.6)).to((x + 3.5, 1))
    chain(d, x + 6.0, 7.2, HOT, "tap, positive")
    d += elm.Line().at((x + 2.1, 1)).to((x + 6.0, 1))
    earth(d, x + 4.7)
    words(d, x, [
        ("The bulb's coating and screen may be at +HV:", HOT),
        ("no metal camera part, lamp or hand near the face.", HOT),
        ("Heater supply near earth. Pedestal 0.1 V.", "black"),
        ("polarity = +1 in the bench profile.", "black"),
    ])


def variant_b(d, x):
    heading(d, x, "B   anode earthed")
    tube(d, x + 1.2, HOT, COLD)
    d += elm.Line(color=COLD).at((x + 3.5, 7.2)).to((x + 3.5, 5.6))
    d += elm.MeterA().endpoints((x + 3.5, 3.8), (x + 3.5, 5.6)).label("beam\ncurrent", loc="bottom")
    d += elm.Line(color=COLD).at((x + 3.5, 3.8)).to((x + 3.5, 1))
    d += elm.Line(color=HOT).at((x + 2.1, 7.2)).to((x - 0.2, 7.2))
    d += elm.Line(color=HOT).at((x - 0.2, 7.2)).to((x - 0.2, 4.4))
    d += elm.SourceV().endpoints((x - 0.2, 4.4), (x - 0.2, 2.6))
    d += elm.Label().at((x + 0.45, 3.5)).label("supply", halign="left", valign="center")
    d += elm.Line().at((x - 0.2, 2.6)).to((x - 0.2, 1))
    d += elm.Line(color=HOT).at((x + 2.1, 7.2)).to((x + 2.1, 6.4))
    d += elm.Line(color=HOT).at((x + 2.1, 6.4)).to((x + 3.3, 6.4))
    d += elm.Arc2(k=-1.0, color=HOT).at((x + 3.3, 6.4)).to((x + 3.7, 6.4))
    d += elm.Line(color=HOT).at((x + 3.7, 6.4)).to((x + 6.4, 6.4))
    d += elm.Line(color=HOT).at((x + 6.4, 6.4)).to((x + 6.4, 5.4))
    chain(d, x + 6.4, 6.0, HOT, "tap, negative")
    d += elm.Line().at((x - 0.2, 1)).to((x + 6.4, 1))
    earth(d, x + 4.7)
    words(d, x, [
        ("Cathode, heater and both heater leads float at −HV:", HOT),
        ("heater transformer isolated for the full voltage.", HOT),
        ("Divider at the cathode pin, not at the supply,", "black"),
        ("if a bias or limiting resistor lies between.", "black"),
        ("Pedestal 2.4 V. polarity = −1.", "black"),
    ])


def variant_c(d, x):
    heading(d, x, "C   neither earthed")
    tube(d, x + 1.2, HOT, HOT)
    d += elm.SourceV().endpoints((x + 2.1, 6.2), (x + 3.5, 6.2))
    d += elm.Label().at((x + 2.8, 5.1)).label("supply", halign="center")
    d += elm.Line(color=HOT).at((x + 2.1, 7.2)).to((x + 2.1, 6.2))
    d += elm.Line(color=HOT).at((x + 3.5, 7.2)).to((x + 3.5, 6.2))
    d += elm.Line(color=HOT).at((x + 2.1, 7.2)).to((x + 0.2, 7.2))
    d += elm.Line(color=HOT).at((x + 3.5, 7.2)).to((x + 5.0, 7.2))
    chain(d, x + 0.2, 7.2, HOT, "tap K")
    chain(d, x + 5.0, 7.2, HOT, "tap A")
    d += elm.Line().at((x + 0.2, 1)).to((x + 5.0, 1))
    earth(d, x + 2.6)
    words(d, x, [
        ("Every part of the tube is live.", HOT),
        ("V = reading at A − reading at K.", "black"),
        ("Their uncertainties add in quadrature.", "black"),
        ("Cross-sense needs a second pair of strings.", "black"),
    ])
    d += elm.Line(color="white").at((x + 9.6, -0.9)).to((x + 10.0, -0.9))


def main():
    with drawing("earthing", TITLE, DESCRIPTION) as d:
        variant_a(d, 0)
        variant_b(d, 11.0)
        variant_c(d, 22.0)


if __name__ == "__main__":
    main()
