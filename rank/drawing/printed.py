"""Write a drawing as PNG or PDF with matplotlib, free of dates, so that the bytes are the same every time."""

from __future__ import annotations

from io import BytesIO
from typing import TYPE_CHECKING, Literal

from capmuster.rank.drawing.shapes import Dot, Line
from capmuster.rank.drawing.svg import BADGE_CORNER, OUTLINE, PENS, PRINT

if TYPE_CHECKING:
    from matplotlib.artist import Artist
    from matplotlib.figure import Figure

    from capmuster.rank.drawing.shapes import Drawing, Label, Mark

_DOTS_PER_INCH = 96.0  # of the drawing's own unit
_SHARPER = 2.0  # pixels of a PNG per unit
_POINT = 72.0 / _DOTS_PER_INCH
_ALIGNMENT: dict[str, Literal["left", "center", "right"]] = {
    "start": "left",
    "middle": "center",
    "end": "right",
}


def printed(drawing: Drawing, kind: Literal["png", "pdf"]) -> bytes:
    """Return a drawing as the bytes of a PNG or PDF file.

    Parameters
    ----------
    drawing
        The drawing.
    kind
        PNG has 192 dots per inch; PDF is one page of the drawing's size, its text as text.
    """
    import matplotlib as mpl  # noqa: PLC0415 -- half a second, only for those who print

    # The user's own matplotlib settings must not change the file.
    with mpl.rc_context():
        mpl.rcdefaults()
        mpl.rcParams.update({"pdf.fonttype": 42, "path.simplify": False, "lines.scale_dashes": False})
        figure = _figure(drawing)
        data = BytesIO()
        silent = {"Software"} if kind == "png" else {"Creator", "Producer", "CreationDate"}
        figure.savefig(data, format=kind, metadata={"Title": drawing.title, **dict.fromkeys(silent)})
    return data.getvalue()


def _figure(drawing: Drawing) -> Figure:
    from matplotlib.figure import Figure  # noqa: PLC0415

    size = drawing.width / _DOTS_PER_INCH, drawing.height / _DOTS_PER_INCH
    figure = Figure(figsize=size, dpi=_SHARPER * _DOTS_PER_INCH, facecolor=PRINT.paper)
    axes = figure.add_axes((0.0, 0.0, 1.0, 1.0))
    axes.set_axis_off()
    axes.set_xlim(0.0, drawing.width)
    axes.set_ylim(drawing.height, 0.0)
    marks = [*drawing.wires, *(mark for symbol in drawing.symbols for mark in symbol.marks)]
    for order, mark in enumerate(marks):
        axes.add_artist(_artist(mark, order))
    for label in drawing.labels:
        for artist in _text(label, len(marks)):
            axes.add_artist(artist)
    return figure


def _artist(mark: Mark, order: int) -> Artist:
    from matplotlib.lines import Line2D  # noqa: PLC0415
    from matplotlib.patches import Circle, Polygon  # noqa: PLC0415

    if isinstance(mark, Line):
        pen = PENS[mark.stroke]
        xs, ys = zip(*mark.points, strict=True)
        return Line2D(
            xs,
            ys,
            color=getattr(PRINT, pen.tone),
            linewidth=pen.width * _POINT,
            linestyle=(0.0, tuple(length * _POINT for length in pen.dashes)) if pen.dashes else "-",
            solid_capstyle="butt",
            dash_capstyle="butt",
            solid_joinstyle="miter",
            zorder=order,
        )
    outline = mark.fill == "paper"
    look = {
        "facecolor": getattr(PRINT, mark.fill),
        "edgecolor": PRINT.ink if outline else "none",
        "linewidth": OUTLINE * _POINT if outline else 0.0,
        "zorder": order,
    }
    if isinstance(mark, Dot):
        return Circle((mark.x, mark.y), mark.radius, **look)
    return Polygon(mark.points, closed=True, **look)


def _text(label: Label, order: int) -> list[Artist]:
    from matplotlib.patches import FancyBboxPatch  # noqa: PLC0415
    from matplotlib.text import Text  # noqa: PLC0415

    tone = getattr(PRINT, label.tone)
    found: list[Artist] = []
    if label.badge:
        box = label.box
        found.append(
            FancyBboxPatch(
                (box.left, box.top),
                box.right - box.left,
                box.bottom - box.top,
                boxstyle=f"round,pad=0,rounding_size={BADGE_CORNER}",
                facecolor=tone if label.badge == "solid" else PRINT.paper,
                edgecolor=tone,
                linewidth=_POINT,
                zorder=order,
            )
        )
        tone = PRINT.paper if label.badge == "solid" else tone
    found.append(
        Text(
            label.x,
            label.y,
            label.text,
            color=tone,
            fontfamily="DejaVu Sans",  # comes with matplotlib
            fontsize=label.size * _POINT,
            fontweight="bold" if label.bold else "normal",
            horizontalalignment=_ALIGNMENT[label.anchor],
            verticalalignment="baseline",
            parse_math=False,
            zorder=order + 1,
        )
    )
    return found
