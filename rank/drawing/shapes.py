"""What a drawing is made of: lines, dots, areas and labels at known places, each with its box.

All lengths are in px at 96 px per inch; x grows to the right and y downwards. A drawing is geometry only: the
back ends (`svg`, `printed`) decide nothing but colours and line widths.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from itertools import combinations, pairwise
from typing import TYPE_CHECKING, Literal, TypeAlias

from capmuster.rank.drawing.metrics import ASCENT, CAP_HEIGHT, DESCENT, text_width

if TYPE_CHECKING:
    from collections.abc import Iterable

Point: TypeAlias = tuple[float, float]
Stroke = Literal["port", "rail", "lead", "plate", "guide", "axis", "stretch", "arrow", "frame"]
Fill = Literal["ink", "accent", "paper"]
Tone = Literal["ink", "accent", "soft", "paper"]
Anchor = Literal["start", "middle", "end"]
Badge = Literal["solid", "outline"]

BADGE_HEIGHT = 1.3
"""Height of a badge per unit of its type size."""


@dataclass(frozen=True, slots=True)
class Box:
    """A rectangle with its sides parallel to the axes."""

    left: float
    top: float
    right: float
    bottom: float

    def overlaps(self, other: Box) -> bool:
        """Whether the two have more than an edge in common."""
        return (
            self.left < other.right
            and other.left < self.right
            and self.top < other.bottom
            and other.top < self.bottom
        )

    def contains(self, other: Box) -> bool:
        """Whether the other one lies inside."""
        return (
            self.left <= other.left
            and other.right <= self.right
            and self.top <= other.top
            and other.bottom <= self.bottom
        )

    def moved(self, dx: float, dy: float) -> Box:
        """Return the rectangle elsewhere."""
        return Box(self.left + dx, self.top + dy, self.right + dx, self.bottom + dy)


@dataclass(frozen=True, slots=True)
class Line:
    """A polyline."""

    points: tuple[Point, ...]
    stroke: Stroke

    @property
    def box(self) -> Box:
        """The least box around it."""
        xs, ys = zip(*self.points, strict=True)
        return Box(min(xs), min(ys), max(xs), max(ys))

    def moved(self, dx: float, dy: float) -> Line:
        """Return the line elsewhere."""
        return replace(self, points=tuple((x + dx, y + dy) for x, y in self.points))


@dataclass(frozen=True, slots=True)
class Dot:
    """A disc, or a ring with the paper inside."""

    x: float
    y: float
    radius: float
    fill: Fill

    @property
    def box(self) -> Box:
        """The least box around it."""
        return Box(self.x - self.radius, self.y - self.radius, self.x + self.radius, self.y + self.radius)

    def moved(self, dx: float, dy: float) -> Dot:
        """Return the dot elsewhere."""
        return replace(self, x=self.x + dx, y=self.y + dy)


@dataclass(frozen=True, slots=True)
class Area:
    """A filled polygon; filled with paper it has an outline of ink."""

    points: tuple[Point, ...]
    fill: Fill

    @property
    def box(self) -> Box:
        """The least box around it."""
        xs, ys = zip(*self.points, strict=True)
        return Box(min(xs), min(ys), max(xs), max(ys))

    def moved(self, dx: float, dy: float) -> Area:
        """Return the area elsewhere."""
        return replace(self, points=tuple((x + dx, y + dy) for x, y in self.points))


@dataclass(frozen=True, slots=True)
class Label:
    """One line of text; ``y`` is its baseline. A badge stands on a ground of its own: solid or outlined."""

    x: float
    y: float
    text: str
    size: float = 11.0
    bold: bool = False
    anchor: Anchor = "start"
    tone: Tone = "ink"
    badge: Badge | None = None

    @property
    def width(self) -> float:
        """Width of the text [px]."""
        return text_width(self.text, self.size, bold=self.bold)

    @property
    def box(self) -> Box:
        """Box that holds the text."""
        left = self.x - {"start": 0.0, "middle": 0.5, "end": 1.0}[self.anchor] * self.width
        text = Box(left, self.y - ASCENT * self.size, left + self.width, self.y + DESCENT * self.size)
        if self.badge is None:
            return text
        middle = 0.5 * (text.left + text.right), self.y - 0.5 * CAP_HEIGHT * self.size
        half = max(0.5 * self.width + 3.0, 0.5 * BADGE_HEIGHT * self.size)
        tall = 0.5 * BADGE_HEIGHT * self.size
        return Box(middle[0] - half, middle[1] - tall, middle[0] + half, middle[1] + tall)

    def moved(self, dx: float, dy: float) -> Label:
        """Return the label elsewhere."""
        return replace(self, x=self.x + dx, y=self.y + dy)


Mark: TypeAlias = Line | Dot | Area


@dataclass(frozen=True, slots=True)
class Symbol:
    """A part of the drawing that stands for one thing, such as the plates of a capacitor."""

    name: str
    marks: tuple[Mark, ...]

    @property
    def box(self) -> Box:
        """The least box around it."""
        return around(mark.box for mark in self.marks)

    def moved(self, dx: float, dy: float) -> Symbol:
        """Return the symbol elsewhere."""
        return replace(self, marks=tuple(mark.moved(dx, dy) for mark in self.marks))


@dataclass(frozen=True, slots=True)
class Drawing:
    """Wires at the back, symbols upon them, labels in front; all inside (0, 0) to (width, height)."""

    width: float
    height: float
    wires: tuple[Mark, ...]
    symbols: tuple[Symbol, ...]
    labels: tuple[Label, ...]
    title: str = ""

    def moved(self, dx: float, dy: float) -> Drawing:
        """Return the drawing with everything moved, and the sheet as much larger."""
        return replace(
            self,
            width=self.width + dx,
            height=self.height + dy,
            wires=tuple(wire.moved(dx, dy) for wire in self.wires),
            symbols=tuple(symbol.moved(dx, dy) for symbol in self.symbols),
            labels=tuple(label.moved(dx, dy) for label in self.labels),
        )

    def collisions(self) -> list[str]:
        """Name what overlaps, and what is cut by the edge of the sheet.

        No two labels or symbols may overlap, no wire may run through a label, and nothing may leave the
        sheet.
        """
        found = []
        things = [(repr(label.text), label.box) for label in self.labels]
        things += [(symbol.name, symbol.box) for symbol in self.symbols]
        for (name, box), (other_name, other) in combinations(things, 2):
            if box.overlaps(other):
                found.append(f"{name} and {other_name} overlap")
        sheet = Box(0.0, 0.0, self.width, self.height)
        found += [f"{name} is cut" for name, box in things if not sheet.contains(box)]
        found += [f"a wire at {wire.box} is cut" for wire in self.wires if not sheet.contains(wire.box)]
        segments = [piece for wire in self.wires for piece in _pieces(wire)]
        for label in self.labels:
            found += [
                f"a wire runs through {label.text!r}" for piece in segments if piece.overlaps(label.box)
            ]
        return found


def _pieces(wire: Mark) -> list[Box]:
    """Boxes of a wire's pieces, widened so that a straight line has an inside."""
    if not isinstance(wire, Line):
        return [wire.box]
    width = 0.4
    return [
        Box(min(x1, x2) - width, min(y1, y2) - width, max(x1, x2) + width, max(y1, y2) + width)
        for (x1, y1), (x2, y2) in pairwise(wire.points)
    ]


def around(boxes: Iterable[Box]) -> Box:
    """Return the least box around some boxes."""
    listed = list(boxes)
    return Box(
        min(box.left for box in listed),
        min(box.top for box in listed),
        max(box.right for box in listed),
        max(box.bottom for box in listed),
    )


def together(drawings: Iterable[Drawing], title: str = "") -> Drawing:
    """Lay drawings that are in their places already on one sheet."""
    listed = list(drawings)
    return Drawing(
        width=max(drawing.width for drawing in listed),
        height=max(drawing.height for drawing in listed),
        wires=tuple(wire for drawing in listed for wire in drawing.wires),
        symbols=tuple(symbol for drawing in listed for symbol in drawing.symbols),
        labels=tuple(label for drawing in listed for label in drawing.labels),
        title=title,
    )
