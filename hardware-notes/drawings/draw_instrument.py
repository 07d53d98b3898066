"""The whole instrument on one page: what touches what, and where the barriers are."""

import schemdraw.elements as elm

from sheet import drawing

TITLE = "The whole instrument"
DESCRIPTION = (
    "Three zones. High-voltage zone: supply, tube, two independent divider strings, bleeder, earthing stick. Instrument box at earth potential: protective "
    "networks and two converters on two separate buses, interlock box with safety relay and contactors, controller board, lamps. Behind an isolation barrier: the "
    "host computer by USB or isolated serial line, and the camera, whose exposure contact comes back through an optocoupler."
)
HOT, LOGIC, SAFE = "#b03000", "#1d4f91", "#1f7a3a"


def zone(d, x1, y1, x2, y2, text, fill, colour):
    d += elm.Rect(corner1=(x1, y1), corner2=(x2, y2), fill=fill, color=colour).at((0, 0)).theta(0)
    d += elm.Label(color=colour, fontsize=14).at((x1 + 0.3, y2 - 0.75)).label(text, halign="left")


def box(d, x1, y1, x2, y2, text, colour="black", fill="white"):
    d += elm.Rect(corner1=(x1, y1), corner2=(x2, y2), fill=fill, color=colour).at((0, 0)).theta(0)
    d += elm.Label(color=colour).at(((x1 + x2) / 2, (y1 + y2) / 2 - 0.2)).label(text, halign="center", valign="center")


def arrow(d, *points, colour=LOGIC):
    for a, b in zip(points[:-2], points[1:-1]):
        d += elm.Line(color=colour).at(a).to(b)
    d += elm.Line(color=colour, arrow="->").at(points[-2]).to(points[-1])


def note(d, x, y, text, colour=LOGIC, halign="center"):
    d += elm.Label(color=colour).at((x, y)).label(text, halign=halign)


def main():
    with drawing("instrument", TITLE, DESCRIPTION) as d:
        zone(d, 0, 0, 8.2, 15, "high voltage", "#fdeeea", HOT)
        zone(d, 9.2, 0, 20.6, 15, "instrument box, at earth", "#eef3fb", LOGIC)
        zone(d, 25.0, 0, 33.4, 15, "people's side", "#eef7f0", SAFE)
        d += elm.Line(ls="--", color="#555555", lw=2.5).at((22.8, 0)).to((22.8, 10.4))
        note(d, 22.8, 10.7, "isolation barrier", "#555555")

        box(d, 0.6, 11.2, 3.6, 13.4, "HV supply", HOT)
        box(d, 4.6, 11.2, 7.6, 13.4, "tube", HOT)
        arrow(d, (3.6, 12.3), (4.6, 12.3), colour=HOT)
        box(d, 0.6, 7.6, 3.6, 9.8, "bleeder,\nearthing\nstick", HOT)
        arrow(d, (2.1, 11.2), (2.1, 9.8), colour=HOT)
        box(d, 4.6, 7.6, 7.6, 9.8, "string 1\n(sense)", HOT)
        box(d, 4.6, 4.2, 7.6, 6.4, "string 2\n(cross-\nsense)", HOT)
        arrow(d, (6.1, 11.2), (6.1, 9.8), colour=HOT)
        d += elm.Line(color=HOT).at((6.1, 10.5)).to((4.1, 10.5))
        arrow(d, (4.1, 10.5), (4.1, 5.3), (4.6, 5.3), colour=HOT)
        note(d, 0.6, 2.2, "both measured at the\ntube's own pins", HOT, "left")

        box(d, 9.8, 7.6, 14.2, 9.8, "protective network,\nconverter 0x48")
        box(d, 9.8, 4.2, 14.2, 6.4, "protective network,\nconverter 0x49")
        arrow(d, (7.6, 8.7), (9.8, 8.7))
        arrow(d, (7.6, 5.3), (9.8, 5.3))
        box(d, 16.0, 3.4, 20.2, 10.4, "controller\n(RP2040)\n\nreadings,\ntrips,\njournal,\npermit")
        arrow(d, (14.2, 8.7), (16.0, 8.7))
        arrow(d, (14.2, 5.3), (16.0, 5.3))
        note(d, 15.1, 9.0, "I2C0")
        note(d, 15.1, 5.6, "I2C1")
        box(d, 9.8, 11.2, 14.6, 13.4, "interlock box:\nsafety relay KR,\ncontactors KA, KB", SAFE)
        arrow(d, (9.8, 12.9), (8.7, 12.9), (8.7, 14.0), (2.1, 14.0), (2.1, 13.4), colour=SAFE)
        note(d, 5.2, 14.15, "mains", SAFE)
        arrow(d, (14.6, 12.7), (17.2, 12.7), (17.2, 10.4))
        note(d, 17.5, 12.5, "loops, mirrors", halign="left")
        arrow(d, (18.6, 10.4), (18.6, 11.7), (14.6, 11.7), colour=SAFE)
        note(d, 15.7, 11.0, "permit", SAFE)
        box(d, 9.8, 0.6, 14.2, 2.8, "HV PRESENT lamp,\nstatus, sync lamp")
        arrow(d, (16.0, 4.0), (15.1, 4.0), (15.1, 1.7), (14.2, 1.7))
        box(d, 16.0, 0.6, 20.2, 2.4, "beam current,\nenclosure temp.")
        arrow(d, (18.1, 2.4), (18.1, 3.4))

        box(d, 25.8, 7.6, 32.6, 9.8, "host computer:\nringvolt run, stamp, report")
        box(d, 25.8, 3.4, 32.6, 5.6, "camera,\nscreen and sync lamp in view")
        box(d, 25.8, 11.2, 32.6, 13.4, "door, cover, stop, reset:\nhard-wired to the chain", SAFE)
        arrow(d, (20.2, 8.9), (25.8, 8.9))
        arrow(d, (25.8, 8.5), (20.2, 8.5))
        note(d, 20.8, 9.35, "USB or\nserial", halign="left")
        note(d, 23.1, 9.2, "isolated", halign="left")
        arrow(d, (25.8, 4.5), (20.2, 4.5))
        note(d, 20.8, 4.8, "opto", halign="left")
        note(d, 23.1, 4.8, "exposure", halign="left")
        arrow(d, (29.2, 5.6), (29.2, 7.6))
        note(d, 29.5, 6.4, "frames", halign="left")
        arrow(d, (25.8, 12.3), (21.2, 12.3), (21.2, 14.0), (12.2, 14.0), (12.2, 13.4), colour=SAFE)
        note(d, 25.4, 1.4, "The chain trips without the\ncontroller, the host, or any program.", SAFE, "left")


if __name__ == "__main__":
    main()
