"""Read a drawing back: which wires are joined, and what hangs on them, from the geometry alone."""

from __future__ import annotations

from itertools import pairwise
from typing import TYPE_CHECKING

from capmuster.rank.drawing.shapes import Dot, Line

if TYPE_CHECKING:
    from capmuster.rank.drawing.shapes import Drawing, Point, Symbol

_NEAR = 1e-6
_CONDUCTORS = ("port", "rail", "lead")


class Joined:
    """Wires of a drawing, joined wherever one ends upon another; wires that cross are not joined."""

    def __init__(self, drawing: Drawing) -> None:
        self.lines = [w for w in drawing.wires if isinstance(w, Line) and w.stroke in _CONDUCTORS]
        self.parent = list(range(len(self.lines)))
        for i, line in enumerate(self.lines):
            for end in (line.points[0], line.points[-1]):
                for j, other in enumerate(self.lines):
                    if i != j and _lies_on(end, other):
                        self.parent[self._root(i)] = self._root(j)

    def _root(self, k: int) -> int:
        while self.parent[k] != k:
            k = self.parent[k]
        return k

    def net_at(self, point: Point) -> int:
        """Net of the one wire that ends at a point."""
        found = {
            self._root(k)
            for k, line in enumerate(self.lines)
            if min(_distance(point, line.points[0]), _distance(point, line.points[-1])) < _NEAR
        }
        assert len(found) == 1, f"{len(found)} nets at {point}"
        return found.pop()

    def net_of(self, line: Line) -> int:
        """Net of a wire."""
        return self._root(self.lines.index(line))


def terminals(symbol: Symbol) -> tuple[Point, Point]:
    """Upper and lower end of a capacitor's or switch's symbol."""
    if symbol.name.startswith("S"):
        dots = sorted((mark.y, mark.x) for mark in symbol.marks if isinstance(mark, Dot))
        (top, x), (bottom, _) = dots
        return (x, top), (x, bottom)
    plates = [mark for mark in symbol.marks if isinstance(mark, Line)]
    ends = sorted((mark.points[0][1], 0.5 * (mark.points[0][0] + mark.points[1][0])) for mark in plates)
    (top, x), (bottom, _) = ends
    return (x, top), (x, bottom)


def _distance(a: Point, b: Point) -> float:
    return max(abs(a[0] - b[0]), abs(a[1] - b[1]))


def _lies_on(point: Point, line: Line) -> bool:
    for (x1, y1), (x2, y2) in pairwise(line.points):
        if x1 == x2 or y1 == y2:
            inside = (
                min(x1, x2) - _NEAR <= point[0] <= max(x1, x2) + _NEAR
                and min(y1, y2) - _NEAR <= point[1] <= max(y1, y2) + _NEAR
            )
            if inside:
                return True
    return False
