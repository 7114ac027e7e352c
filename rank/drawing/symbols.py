"""Symbols that the drawings share: capacitor, charge arrow, wires with bows over what they cross."""

from __future__ import annotations

from math import cos, pi, sin
from typing import TYPE_CHECKING

from capmuster.rank.drawing.metrics import CAP_HEIGHT
from capmuster.rank.drawing.shapes import Area, Dot, Label, Line, Symbol

if TYPE_CHECKING:
    from collections.abc import Iterable, Sequence

    from capmuster.rank.drawing.shapes import Box, Point

TYPE = 11.0
"""Type size of names and figures [px]."""
SMALL = 10.0
"""Type size of axes and remarks [px]."""
PLATE = 10.0
"""Half the width of a plate [px]."""
GAP = 2.5
"""Half the gap between two plates [px]."""
SWITCH = 9.0
"""Half the distance between the contacts of a switch [px]."""

_HOP = 4.5  # radius of a bow
_ARROW = 22.0
_ARROW_HEAD = (3.0, 6.5)  # half width, length
_CLEAR = 3.0  # between a guide and a label in its way


def baseline(y: float, size: float) -> float:
    """Baseline of text whose capitals stand around a height."""
    return y + 0.5 * CAP_HEIGHT * size


def wire_down(x: float, top: float, bottom: float, crossed: Iterable[float]) -> Line:
    """Run a wire downwards, with a bow over each height at which it crosses a rail."""
    points: list[Point] = [(x, top)]
    for y in sorted(crossed):
        if top < y < bottom:
            points += [(x + _HOP * sin(pi * k / 8), y - _HOP * cos(pi * k / 8)) for k in range(9)]
    return Line((*points, (x, bottom)), "lead")


def plates(name: str, x: float, y: float) -> Symbol:
    """Draw the plates of a capacitor around a point."""
    return Symbol(
        name,
        tuple(Line(((x - PLATE, level), (x + PLATE, level)), "plate") for level in (y - GAP, y + GAP)),
    )


def arrow(name: str, x: float, y: float, *, down: bool) -> Symbol:
    """Draw an upright arrow around a point."""
    sense = 1.0 if down else -1.0
    half, length = _ARROW_HEAD
    tip, tail = y + 0.5 * sense * _ARROW, y - 0.5 * sense * _ARROW
    neck = tip - sense * length
    return Symbol(
        name,
        (
            Line(((x, tail), (x, neck)), "arrow"),
            Area(((x, tip), (x - half, neck), (x + half, neck)), "accent"),
        ),
    )


def guide(left: float, right: float, y: float, obstacles: Sequence[Box]) -> tuple[Line, ...]:
    """Draw a thin level line, broken where a label stands."""
    pieces, start = [], left
    for box in sorted((b for b in obstacles if b.top < y < b.bottom), key=lambda b: b.left):
        if box.left - _CLEAR > start:
            pieces.append((start, min(right, box.left - _CLEAR)))
        start = max(start, box.right + _CLEAR)
    if right > start:
        pieces.append((start, right))
    return tuple(Line(((a, y), (b, y)), "guide") for a, b in pieces)


def open_switch(name: str, x: float, y: float) -> Symbol:
    """Draw an upright switch around a point, its blade open to the left."""
    return Symbol(
        name,
        (
            Line(((x, y + SWITCH), (x - 8.0, y - SWITCH + 2.0)), "lead"),
            Dot(x, y - SWITCH, 2.2, "paper"),
            Dot(x, y + SWITCH, 2.2, "paper"),
        ),
    )


def flag(port: str, x: float, y: float, *, down: bool) -> tuple[Symbol, Label | None]:
    """Draw the end of a wire at a port: earth bars for the ground below, else a bar and the port's letter."""
    if port == "G" and down:
        bars = ((7.0, 0.0), (4.5, 3.5), (2.0, 7.0))
        return Symbol("ground", tuple(Line(((x - w, y + d), (x + w, y + d)), "lead") for w, d in bars)), None
    bar = Symbol(f"flag {port}", (Line(((x - 7.0, y), (x + 7.0, y)), "plate"),))
    beyond = y + 3.5 + CAP_HEIGHT * TYPE if down else y - 5.0
    return bar, Label(x, beyond, port, TYPE, bold=True, anchor="middle")
