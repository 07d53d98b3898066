"""The divider and its protective network, part by part, with the names of tests/spice."""

import schemdraw.elements as elm

from sheet import drawing

TITLE = "Divider and protective network"
DESCRIPTION = (
    "High voltage at the upper left runs down a string of ten resistors, RH1 to RH10, and a foot resistor RT to the tap. From the tap, capacitor CF and two gas "
    "discharge tubes go to the star point, two low-side resistors RLA and RLB in parallel go to the pedestal node, and two "
    "resistors RS1A and RS1B lead to a pair of low-leakage clamp diodes with a capacitor CCL, then RS2A, RS2B and a buffer lead to converter input "
    "AIN0. The pedestal node leads to AIN1. Below, a shunt reference makes the clamp rail and the pedestal voltage."
)


def star(d, x, y):
    d += elm.GroundSignal().at((x, y))


def rail(d, x, y, name):
    d += elm.Vdd().at((x, y)).label(name)


def string_and_tap(d):
    d += elm.Rect(corner1=(-4.6, 13.6), corner2=(6.6, 5.1), fill="#fdeeea", color="#f3c9bd").at((0, 0))
    d += elm.Label(color="#b03000").at((-4.3, 13.0)).label("HIGH VOLTAGE", halign="left")
    d += elm.Dot(open=True).at((0, 13)).label("from the tube pin (earthing.svg)", loc="right")
    d += elm.Resistor().at((0, 13)).to((0, 11)).label("RH1", loc="top")
    d += elm.Resistor().at((0, 11)).to((0, 9.2)).label("RH2", loc="top")
    d += elm.Line(ls=":").at((0, 9.2)).to((0, 8.4))
    d += elm.Resistor().at((0, 8.4)).to((0, 6.6)).label("RH10", loc="top")
    d += elm.Resistor().at((0, 6.6)).to((0, 5.2)).label("RT  1 kΩ", loc="top")
    d += elm.Line().at((0, 5.2)).to((0, 4))
    d += elm.Label().at((0.9, 10.2)).label("10 × 20 MΩ, each\nrated 3.5 kV or more,\nin one row: no fold\nbrings the hot end\nnear the tap", halign="left")
    d += elm.Line(ls="--", color="#b03000").at((-4.6, 4.95)).to((6.6, 4.95))
    d += elm.Label(color="#b03000").at((6.9, 5.55)).label("earthed guard and slot", halign="left", valign="center")
    d += elm.Dot().at((0, 4)).label("tap", loc="left")
    d += elm.Line().at((0, 4)).to((9, 4))
    for x, made, name in ((1.6, elm.Capacitor, "CF\n10 nF\n2 kV"), (3.6, elm.SparkGap, "GDTA\n90 V"), (5.6, elm.SparkGap, "GDTB\n90 V")):
        d += elm.Dot().at((x, 4))
        d += made().at((x, 4)).to((x, 0.5)).label(name, loc="bottom")
        d += elm.Line().at((x, 0.5)).to((x, -1.6))
        d += elm.Dot().at((x, -1.6))
    d += elm.Line().at((0, -1.6)).to((5.6, -1.6))
    d += elm.Ground().at((0, -1.6)).label("star point:\nown wire to the\nearthed electrode,\nbonded to PE", loc="left")
    for x, name in ((7.4, "RLA\n80 kΩ"), (9.6, "RLB\n80 kΩ")):
        d += elm.Dot().at((x, 4)) if x < 9 else elm.Line().at((9, 4)).to((x, 4))
        d += elm.Resistor().at((x, 4)).to((x, 0)).label(name, loc="bottom")
        d += elm.Dot().at((x, 0))
    d += elm.Dot().at((9.6, 4))


def sense_path(d):
    d += elm.Resistor().at((9.6, 4)).to((12, 4)).label("RS1A\n5 kΩ")
    d += elm.Resistor().at((12, 4)).to((14.6, 4)).label("RS1B\n5 kΩ")
    d += elm.Dot().at((14.6, 4))
    d += elm.Diode().at((14.6, 4)).to((14.6, 6.4))
    d += elm.Label().at((15.0, 5.35)).label("DUP", halign="left")
    rail(d, 14.6, 6.4, "")
    d += elm.Label().at((15.1, 6.3)).label("VR", halign="left")
    d += elm.Diode().at((14.6, 2.0)).to((14.6, 4)).label("DDN", loc="bottom")
    star(d, 14.6, 2.0)
    d += elm.Dot().at((16.2, 4))
    d += elm.Line().at((14.6, 4)).to((16.2, 4))
    d += elm.Capacitor().at((16.2, 4)).to((16.2, 2.0)).label("CCL\n470 pF", loc="bottom")
    star(d, 16.2, 2.0)
    d += elm.Resistor().at((16.2, 4)).to((18.6, 4)).label("RS2A\n5 kΩ")
    d += elm.Resistor().at((18.6, 4)).to((21.0, 4)).label("RS2B\n5 kΩ")
    d += elm.Dot().at((21.0, 4))
    d += elm.Resistor().at((21.0, 4)).to((21.0, 1.6)).label("RPD\n100 MΩ", loc="bottom")
    star(d, 21.0, 1.6)
    d += elm.Line().at((21.0, 4)).to((22.6, 4))
    triangle(d, 22.6, 4, "×1")
    d += elm.Resistor().at((24.4, 4)).to((26.6, 4)).label("RO1 100 Ω")
    d += elm.Line().at((26.6, 4)).to((27, 4))


def triangle(d, x, y, text):
    d += elm.Line().at((x, y + 1)).to((x, y - 1))
    d += elm.Line().at((x, y + 1)).to((x + 1.8, y))
    d += elm.Line().at((x, y - 1)).to((x + 1.8, y))
    d += elm.Label().at((x + 0.62, y - 0.02)).label(text, halign="center", valign="center")


def low_path(d):
    d += elm.Line().at((7.4, 0)).to((23.4, 0))
    d += elm.Label().at((17.7, 0.32)).label("low: pedestal 0.1 V (positive HV) or 2.4 V (negative HV)", halign="center", fontsize=11)
    d += elm.Dot().at((12.0, 0))
    d += elm.Diode().at((12.0, 0)).to((12.0, 1.7)).label("DUL", loc="bottom")
    rail(d, 12.0, 1.7, "")
    d += elm.Label().at((12.5, 1.75)).label("VR", halign="left")
    d += elm.Schottky().at((12.0, -1.7)).to((12.0, 0)).label("DDL", loc="bottom")
    star(d, 12.0, -1.7)
    d += elm.Dot().at((14.6, 0))
    d += elm.Capacitor().at((14.6, 0)).to((14.6, -1.9)).label("CPED 1 nF", loc="bottom")
    star(d, 14.6, -1.9)
    d += elm.Resistor().at((23.4, 0)).to((26, 0)).label("RA1 100 Ω")
    d += elm.Line().at((26, 0)).to((27, 0))
    d += elm.Rect(corner1=(27, 5.2), corner2=(33, -1.2), fill="#eef3fb").at((0, 0))
    d += elm.Label().at((27.25, 4)).label("AIN0", halign="left", valign="center")
    d += elm.Label().at((27.25, 0)).label("AIN1", halign="left", valign="center")
    d += elm.Label().at((30, 2)).label("16-bit converter\nreads AIN0 − AIN1,\n±2.048 V", halign="center", valign="center")


def reference(d):
    y = -5.2
    rail(d, 1.6, y, "VDD 3.3 V ")
    d += elm.Line().at((1.6, y)).to((3.4, y))
    d += elm.Dot().at((1.6, y))
    d += elm.Zener().at((1.6, y - 2.4)).to((1.6, y)).label("DVDD\n4.3 V", loc="bottom", ofst=0.25)
    star(d, 1.6, y - 2.4)
    d += elm.Resistor().at((3.4, y)).to((6.4, y)).label("RB1\n150 Ω")
    d += elm.Dot().at((6.8, y))
    d += elm.Line().at((6.4, y)).to((11, y))
    rail(d, 6.8, y, "VR 2.5 V")
    d += elm.Zener().at((6.8, y - 2.4)).to((6.8, y)).label("DREF", loc="bottom")
    star(d, 6.8, y - 2.4)
    d += elm.Dot().at((9.3, y))
    d += elm.Capacitor().at((9.3, y)).to((9.3, y - 2.4)).label("CR1\n1 µF", loc="bottom")
    star(d, 9.3, y - 2.4)
    d += elm.Resistor().at((11, y)).to((14, y)).label("RP1\n120 kΩ")
    d += elm.Dot().at((14.6, y))
    d += elm.Line().at((14, y)).to((16.4, y))
    d += elm.Resistor().at((14.6, y)).to((14.6, y - 2.4)).label("RP2\n5 kΩ", loc="bottom")
    star(d, 14.6, y - 2.4)
    triangle(d, 16.4, y, "×1")
    d += elm.Resistor().at((18.2, y)).to((21.2, y)).label("RPED\n22 Ω")
    d += elm.Line().at((21.2, y)).to((22, y))
    d += elm.Line().at((22, y)).to((22, 0))
    d += elm.Dot().at((22, 0))
    d += elm.Label().at((23.0, y + 0.1)).label("for negative HV exchange\nthe values of RP1 and RP2", halign="left", valign="center")
    d += elm.Label().at((23.0, y - 1.9)).label("every triangle of earth\nis the star point", halign="left", valign="center")


NOTES = [
    "RLA and RLB are two: one open doubles the reading and puts no kilovolts on the tap.",
    "RT slows a flashover to what the gas tubes can follow.",
    "GDTA and GDTB take a flashover; CF meets its steep front; both return to the star, not to AIN1.",
    "RS1A and RS1B limit what is left to the clamp DUP, DDN, CCL; in halves, since a shorted half leaves the other.",
    "RS2A and RS2B limit what reaches the buffer, whose output cannot leave its own supply.",
    "RPD empties the input when a series resistor opens: no plausible charge stays behind.",
    "The pedestal keeps a true zero and a wrong sign visible. Its own drift cancels in AIN0 − AIN1.",
    "A second string, network and converter stand beside this one and share nothing with it but the star.",
]


def notes(d):
    for index, text in enumerate(NOTES):
        d += elm.Label().at((7.6, 12.9 - 0.78 * index)).label("•  " + text, halign="left", valign="center")


def main():
    with drawing("divider", TITLE, DESCRIPTION) as d:
        string_and_tap(d)
        sense_path(d)
        low_path(d)
        reference(d)
        notes(d)


if __name__ == "__main__":
    main()
