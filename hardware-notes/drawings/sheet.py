"""What every drawing shares: a white sheet, a title for screen readers, fonts large enough to read."""

import re
from contextlib import contextmanager
from html import escape
from pathlib import Path

import schemdraw

schemdraw.use("svg")
HERE = Path(__file__).resolve().parent


@contextmanager
def drawing(name, title, description, fontsize=12):
    """Collect elements on a sheet and write NAME.svg beside this file."""
    d = schemdraw.Drawing(show=False)
    d.config(unit=2, fontsize=fontsize, inches_per_unit=0.42, lw=1.6, font="DejaVu Sans, Verdana, sans-serif", margin=0.4)
    yield d
    text = d.get_imagedata("svg").decode()
    (HERE / f"{name}.svg").write_text(dressed(text, name, title, description))


def dressed(text, name, title, description):
    """Add title, description and a white background to an SVG text."""
    box = re.search(r'viewBox="([-\d.]+) ([-\d.]+) ([-\d.]+) ([-\d.]+)"', text)
    x, y, width, height = box.groups()
    head = re.search(r"<svg[^>]*>", text)
    opening = head[0][:-1] + f' role="img" aria-labelledby="{name}-title {name}-description">'
    extra = (f'<title id="{name}-title">{escape(title)}</title><desc id="{name}-description">{escape(description)}</desc>'
             f'<rect x="{x}" y="{y}" width="{width}" height="{height}" fill="white"/>')
    return text.replace(head[0], opening + "\n" + extra, 1).rstrip() + "\n"
