"""Potential diagrams: vertices are rails at their potential, capacitors stand between two rails.

So a capacitor is as tall as its voltage, and a string of capacitors is seen to add up.
"""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction
from itertools import pairwise
from typing import TYPE_CHECKING

from capmuster.enumerate.wiring import CONVERTER_PORTS, N_PORTS, vertex_name
from capmuster.rank.drawing.metrics import CAP_HEIGHT
from capmuster.rank.drawing.numbers import plain, volts
from capmuster.rank.drawing.order import Rails, shared_order
from capmuster.rank.drawing.scale import Scale, fit_scale
from capmuster.rank.drawing.shapes import Dot, Drawing, Label, Line
from capmuster.rank.drawing.symbols import (
    GAP,
    PLATE,
    SMALL,
    TYPE,
    arrow,
    baseline,
    guide,
    plates,
    wire_down,
)

if TYPE_CHECKING:
    from capmuster.enumerate.wiring import Converter
    from capmuster.rank.drawing.shapes import Mark, Stroke, Symbol

_STUB = 11.0  # how far a rail goes on past its last capacitor
_LANE = 15.0  # between rails that share a potential and a column
_ROOM = 42.0  # between neighbouring rails
_BESIDE = 4.0  # between a rail and its name
_ARROW_AT, _TEXT_AT = PLATE + 9.0, PLATE + 17.0  # right of a capacitor
_COLUMN_GAP = 7.0
_LEAST, _MOST = 210.0, 640.0  # height of the axis
_HEAD, _FOOT = 50.0, 14.0


@dataclass(frozen=True, slots=True)
class Phase:
    """One phase, before it has heights.

    Attributes
    ----------
    number
        0 or 1.
    rails
        Its vertices that have capacitors.
    order
        Capacitors from left to right.
    spans
        First and last column of each rail.
    lanes
        0, or how many lanes above its potential a rail is drawn, clear of others.
    lane_step
        Height of a lane [px].
    """

    number: int
    rails: Rails
    order: tuple[int, ...]
    spans: tuple[tuple[int, int], ...]
    lanes: tuple[int, ...]
    lane_step: float

    @classmethod
    def of(cls, number: int, rails: Rails, order: tuple[int, ...]) -> Phase:
        """Lay out the columns; rails at one potential that share a column get lanes, one above the other."""
        columns = [[k for k, c in enumerate(order) if members >> c & 1] for members in rails.members]
        spans = tuple((listed[0], listed[-1]) for listed in columns)
        lanes: list[int] = []
        for rail, (first, last) in enumerate(spans):
            taken = {
                lanes[other]
                for other in range(rail)
                if rails.levels[other] == rails.levels[rail]
                and spans[other][0] <= last
                and first <= spans[other][1]
            }
            lanes.append(next(lane for lane in range(rail + 1) if lane not in taken))
        flat = any(rails.levels[plus] == rails.levels[minus] for plus, minus in rails.ends)
        return cls(number, rails, order, spans, tuple(lanes), _ROOM if flat else _LANE)

    @property
    def lifts(self) -> list[float]:
        """How far each rail is drawn above its potential [px]."""
        return [lane * self.lane_step for lane in self.lanes]

    def room(self, potentials: tuple[Fraction, ...]) -> dict[Fraction, float]:
        """Room wanted above each potential of the phase [px]."""
        room = dict.fromkeys(potentials, _ROOM)
        for level, lift in zip(self.rails.levels, self.lifts, strict=True):
            room[level] = max(room[level], _ROOM + lift)
        return room


@dataclass(frozen=True, slots=True)
class PotentialPanels:
    """The potential diagrams of both phases, of one height and on one vertical scale.

    Attributes
    ----------
    first, second
        The panels.
    remarks
        What a reader has to know about this drawing beyond the usual, in whole sentences.
    """

    first: Drawing
    second: Drawing
    remarks: tuple[str, ...]


def phases_in_order(converter: Converter) -> tuple[Phase, Phase]:
    """Put the capacitors of both phases into the order in which they are drawn."""
    rails = [
        Rails.of(
            [(word[2 * p], word[2 * p + 1]) for word in converter.words], converter.balance.potentials[p]
        )
        for p in (0, 1)
    ]
    first, second = (Phase.of(p, rails[p], order) for p, order in enumerate(shared_order(rails)))
    return first, second


def potential_panels(converter: Converter, input_voltage: float | None = None) -> PotentialPanels:
    """Draw the potential diagrams of phase 1 and phase 2.

    Beside each capacitor stand its charge per unit of output charge and its direction.

    Parameters
    ----------
    converter
        The converter.
    input_voltage
        Input voltage [V] for an axis in volts; without it the axis is per volt of input.
    """
    phases = phases_in_order(converter)
    potentials = converter.balance.potentials
    scale = fit_scale([phase.room(potentials[phase.number]) for phase in phases], _LEAST, _MOST)
    base = _HEAD + scale.total + max(lift for phase in phases for lift in phase.lifts)
    remarks = []
    if any(scale.stretched(low, high) for p in potentials for low, high in pairwise(sorted(set(p)))):
        remarks.append("Where the axis is dashed, steps are drawn larger than scale.")
    if any(lane for phase in phases for lane in phase.lanes):
        remarks.append("A rail with its potential in brackets is drawn above it, clear of another rail.")
    first, second = (_Panel(converter, phase, scale, base, input_voltage).drawing() for phase in phases)
    return PotentialPanels(first, second, tuple(remarks))


class _Panel:
    """One phase being drawn."""

    def __init__(
        self,
        converter: Converter,
        phase: Phase,
        scale: Scale,
        base: float,
        input_voltage: float | None,
    ) -> None:
        self.phase = phase
        self.scale = scale
        self.base = base
        self.balance = converter.balance
        self.potentials = converter.balance.potentials[phase.number]
        self.input_voltage = input_voltage
        self.wires: list[Mark] = []
        self.symbols: list[Symbol] = []
        self.labels: list[Label] = []

        self.ticks = [Label(0, 0, self._value(v), SMALL, tone="soft") for v in sorted(set(self.potentials))]
        output = abs(self.balance.port_charges[2])
        self.texts = [
            (Label(0, 0, f"C{i + 1}", bold=True), Label(0, 0, plain(Fraction(abs(q), output)), tone="accent"))
            for i, q in enumerate(self.balance.charges)
        ]
        self.names = [
            Label(0, 0, self._name(rail), bold=True, anchor="end") for rail in range(len(phase.lanes))
        ]
        left = _STUB + _BESIDE + max(name.width for name in self.names)
        right = _TEXT_AT + max(label.width for pair in self.texts for label in pair)
        self.axis = max(tick.width for tick in self.ticks) + 9.0
        columns = range(len(phase.order))
        self.xs = [self.axis + 12.0 + left + k * (left + right + _COLUMN_GAP) for k in columns]
        self.end = self.xs[-1] + right + _COLUMN_GAP
        self.ys = [self.y(level) - lift for level, lift in zip(phase.rails.levels, phase.lifts, strict=True)]

    def y(self, potential: Fraction) -> float:
        """Height on the sheet of a potential."""
        return self.base - self.scale.height(potential)

    def drawing(self) -> Drawing:
        """Draw all of the panel."""
        self._rails()
        for column, capacitor in enumerate(self.phase.order):
            self._capacitor(column, capacitor)
        self._unused_ports()
        boxes = [label.box for label in self.labels]
        for level in sorted(set(self.potentials[:N_PORTS])):
            self.wires[:0] = guide(self.axis, self.end, self.y(level), boxes)
        self._axis()
        self._heading()
        width = max([self.end, *(label.box.right for label in self.labels)]) + 1.0
        return Drawing(width, self.base + _FOOT, tuple(self.wires), tuple(self.symbols), tuple(self.labels))

    def _value(self, potential: Fraction) -> str:
        return plain(potential) if self.input_voltage is None else volts(potential, self.input_voltage)

    def _name(self, rail: int) -> str:
        """Name of a rail; one that is drawn above its potential says what that is."""
        name = vertex_name(self.phase.rails.vertices[rail])
        return f"{name} ({self._value(self.phase.rails.levels[rail])})" if self.phase.lanes[rail] else name

    def _rails(self) -> None:
        for vertex, y, span, name in zip(
            self.phase.rails.vertices, self.ys, self.phase.spans, self.names, strict=True
        ):
            left, right = self.xs[span[0]] - _STUB, self.xs[span[1]] + _STUB
            self.wires.append(Line(((left, y), (right, y)), "port" if vertex < N_PORTS else "rail"))
            self.labels.append(name.moved(left - _BESIDE, baseline(y, TYPE)))

    def _capacitor(self, column: int, capacitor: int) -> None:
        """Draw a capacitor, its symbol and label clear of the rails that pass and of the guides."""
        plus, minus = self.phase.rails.ends[capacitor]
        x, top, bottom = self.xs[column], *sorted((self.ys[plus], self.ys[minus]))
        crossed = [
            y
            for rail, (y, (first, last)) in enumerate(zip(self.ys, self.phase.spans, strict=True))
            if first <= column <= last and rail not in (plus, minus) and top < y < bottom
        ]
        guides = [self.y(self.potentials[port]) for port in range(N_PORTS)]
        edges = sorted({top, bottom, *crossed, *(y for y in guides if top < y < bottom)})
        low, high = max(
            pairwise(edges), key=lambda band: (round(band[1] - band[0], 3), -abs(sum(band) - top - bottom))
        )
        y = 0.5 * (low + high)
        self.wires += [
            wire_down(x, top, y - GAP, crossed),
            wire_down(x, y + GAP, bottom, crossed),
            Dot(x, top, 2.2, "ink"),
            Dot(x, bottom, 2.2, "ink"),
        ]
        name, multiplier = self.texts[capacitor]
        into_plus = (self.balance.charges[capacitor] > 0) == (self.phase.number == 0)
        down = into_plus == (self.ys[plus] <= self.ys[minus])
        self.symbols += [
            plates(name.text, x, y),
            arrow(f"arrow of {name.text}", x + _ARROW_AT, y, down=down),
        ]
        self.labels += [
            name.moved(x + _TEXT_AT, y - 2.9),
            multiplier.moved(x + _TEXT_AT, y + 2.9 + CAP_HEIGHT * TYPE),
        ]

    def _unused_ports(self) -> None:
        unused: dict[Fraction, list[str]] = {}
        for port in sorted(set(range(N_PORTS)) - set(self.phase.rails.vertices)):
            unused.setdefault(self.potentials[port], []).append(CONVERTER_PORTS[port])
        for level, ports in unused.items():
            text = f"{', '.join(ports)} unused"
            self.labels.append(
                Label(self.end + 3.0, baseline(self.y(level), SMALL), text, SMALL, tone="soft")
            )

    def _axis(self) -> None:
        levels = sorted(set(self.potentials))
        for low, high in pairwise(levels):
            stroke: Stroke = "stretch" if self.scale.stretched(low, high) else "axis"
            self.wires.append(Line(((self.axis, self.y(low)), (self.axis, self.y(high))), stroke))
        for tick, level in zip(self.ticks, levels, strict=True):
            y = self.y(level)
            self.wires.append(Line(((self.axis - 4.0, y), (self.axis, y)), "axis"))
            self.labels.append(tick.moved(self.axis - 7.0 - tick.width, baseline(y, SMALL)))

    def _heading(self) -> None:
        self.labels += [
            Label(0.0, 13.0, f"Phase {self.phase.number + 1}", 13.0, bold=True),
            Label(0.0, 29.0, self._port_flow(), SMALL, tone="soft"),
        ]

    def _port_flow(self) -> str:
        """Say what input and output do in this phase, per unit of output charge."""
        given = [0, 0, 0]
        for (plus, minus), q in zip(self.phase.rails.ends, self.balance.charges, strict=True):
            taken = q if self.phase.number == 0 else -q
            for rail, sign in ((plus, 1), (minus, -1)):
                vertex = self.phase.rails.vertices[rail]
                if vertex < N_PORTS:
                    given[vertex] += sign * taken
        output = self.balance.port_charges[2]
        into = plain(Fraction(given[1], abs(output)))
        out = plain(Fraction(given[2], output))
        return f"input gives {into}, output takes {out}"
