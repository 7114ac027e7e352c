"""Write a drawing as SVG: plain elements, escaped text, the same bytes every time."""

from __future__ import annotations

import re
from dataclasses import dataclass
from html import escape
from itertools import groupby
from typing import TYPE_CHECKING

from capmuster.rank.drawing.shapes import Area, Dot, Line

if TYPE_CHECKING:
    from collections.abc import Iterable

    from capmuster.rank.drawing.shapes import Drawing, Label, Mark

OUTLINE = 1.2
"""Width of the outline of areas that are filled with paper [px]."""
BADGE_CORNER = 2.0
"""Radius of the corners of a badge [px]."""
FONT = "DejaVu Sans, Verdana, Arial, Helvetica, sans-serif"


@dataclass(frozen=True, slots=True)
class Pen:
    """How a stroke is drawn: width [px], dashes [px], tone."""

    width: float
    dashes: tuple[float, ...] = ()
    tone: str = "ink"


PENS = {
    "port": Pen(2.6),
    "rail": Pen(1.5),
    "lead": Pen(1.2),
    "plate": Pen(2.4),
    "guide": Pen(0.8, (1.0, 3.0), "faint"),
    "axis": Pen(1.0, (), "soft"),
    "stretch": Pen(1.0, (4.0, 3.0), "soft"),
    "arrow": Pen(1.6, (), "accent"),
    "frame": Pen(0.8, (), "faint"),
}
"""How each stroke is drawn."""


@dataclass(frozen=True, slots=True)
class Palette:
    """Colours, as CSS writes them. They differ in lightness, so that greyscale keeps them apart."""

    ink: str = "#111418"
    soft: str = "#4c5560"
    faint: str = "#8f98a3"
    accent: str = "#0b5394"
    paper: str = "#ffffff"


PRINT = Palette()
"""Ink on white paper."""
INLINE = Palette("currentColor", "var(--soft)", "var(--faint)", "var(--accent)", "var(--paper)")
"""Colours of the page that the drawing stands in."""


_NOT_IN_XML = re.compile("[\x00-\x08\x0b\x0c\x0e-\x1f\ud800-\udfff\ufffe\uffff]")


def _escaped(text: str) -> str:
    """Return text that stays text, without the characters that XML cannot hold."""
    return escape(_NOT_IN_XML.sub("\N{REPLACEMENT CHARACTER}", text))


def number(value: float) -> str:
    """Write a length with at most two decimals."""
    text = f"{value:.2f}".rstrip("0").rstrip(".")
    return "0" if text == "-0" else text


def svg(drawing: Drawing, palette: Palette = PRINT, *, inline: bool = False) -> str:
    """Return a drawing as SVG text.

    Parameters
    ----------
    drawing
        The drawing.
    palette
        Its colours.
    inline
        Whether it is to stand inside an HTML page: then without XML header and background.
    """
    width, height = number(drawing.width), number(drawing.height)
    title = _escaped(drawing.title)
    head = (
        f'<svg xmlns="http://www.w3.org/2000/svg" width="{width}" height="{height}" '
        f'viewBox="0 0 {width} {height}" role="img" font-family="{FONT}">'
    )
    parts = [head, f"<title>{title}</title>"]
    if not inline:
        parts.insert(0, '<?xml version="1.0" encoding="UTF-8"?>')
        parts.append(f'<rect width="{width}" height="{height}" fill="{palette.paper}"/>')
    marks: list[Mark] = [*drawing.wires, *(mark for symbol in drawing.symbols for mark in symbol.marks)]
    parts += _marks(marks, palette)
    parts += _labels(drawing.labels, palette)
    parts.append("</svg>")
    return "\n".join(parts) + "\n"


def _marks(marks: Iterable[Mark], palette: Palette) -> list[str]:
    """Write each kind of mark as one path: lines first, so that rings and areas lie upon them."""
    found = []
    for (kind, style), group in groupby(sorted(marks, key=_style), key=_style):
        path = "".join(_path(mark) for mark in group)
        if kind == "line":
            pen = PENS[style]
            dashes = f' stroke-dasharray="{" ".join(map(number, pen.dashes))}"' if pen.dashes else ""
            tone = getattr(palette, pen.tone)
            look = f'fill="none" stroke="{tone}" stroke-width="{number(pen.width)}"{dashes}'
        elif style == "paper":
            look = f'fill="{palette.paper}" stroke="{palette.ink}" stroke-width="{number(OUTLINE)}"'
        else:
            look = f'fill="{getattr(palette, style)}"'
        found.append(f'<path d="{path}" {look}/>')
    return found


def _style(mark: Mark) -> tuple[str, str]:
    return ("line", mark.stroke) if isinstance(mark, Line) else ("other", mark.fill)


def _path(mark: Mark) -> str:
    if isinstance(mark, Dot):
        x, y, r = number(mark.x - mark.radius), number(mark.y), number(mark.radius)
        d = number(2 * mark.radius)
        return f"M{x} {y}a{r} {r} 0 1 0 {d} 0a{r} {r} 0 1 0 -{d} 0z"
    points = "L".join(f"{number(x)} {number(y)}" for x, y in mark.points)
    return f"M{points}" + ("z" if isinstance(mark, Area) else "")


def _labels(labels: Iterable[Label], palette: Palette) -> list[str]:
    found = []
    for label in labels:
        if label.badge:
            box, tone = label.box, getattr(palette, label.tone)
            ground = tone if label.badge == "solid" else palette.paper
            found.append(
                f'<rect x="{number(box.left)}" y="{number(box.top)}" width="{number(box.right - box.left)}" '
                f'height="{number(box.bottom - box.top)}" rx="{number(BADGE_CORNER)}" fill="{ground}" '
                f'stroke="{tone}"/>'
            )
    for look, group in groupby(sorted(labels, key=_look), key=_look):
        size, bold, anchor, tone = look
        weight = ' font-weight="bold"' if bold else ""
        side = f' text-anchor="{anchor}"' if anchor != "start" else ""
        found.append(f'<g font-size="{number(size)}"{weight}{side} fill="{getattr(palette, tone)}">')
        found += [
            f'<text x="{number(label.x)}" y="{number(label.y)}">{_escaped(label.text)}</text>'
            for label in group
        ]
        found.append("</g>")
    return found


def _look(label: Label) -> tuple[float, bool, str, str]:
    return label.size, label.bold, label.anchor, "paper" if label.badge == "solid" else label.tone
