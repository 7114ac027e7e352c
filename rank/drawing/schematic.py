"""Switch-level schematic: every capacitor and every switch once, and the phase in which it is closed."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise
from typing import TYPE_CHECKING

from capmuster.rank.drawing.shapes import Dot, Drawing, Label, Line
from capmuster.rank.drawing.symbols import (
    GAP,
    PLATE,
    SMALL,
    SWITCH,
    TYPE,
    baseline,
    flag,
    open_switch,
    plates,
    wire_down,
)
from capmuster.rank.drawing.wireplan import DOWN, UP, Link, Plan, Stub, plan
from capmuster.rank.scores.switching import switch_network

if TYPE_CHECKING:
    from collections.abc import Sequence

    from capmuster.enumerate.wiring import Converter
    from capmuster.rank.drawing.shapes import Mark, Symbol
    from capmuster.rank.scores.switching import SwitchNetwork

_SIDE = 19.0  # left of a column, for a blade or a plus sign
_TEXT_AT = PLATE + 5.0
_ROOM, _STUB_ROOM = 54.0, 72.0  # between two rows, without and with a flag in between
_FLAG_AT = 50.0  # from a row to the flag of its stub
_HEAD, _LEGEND = 30.0, 34.0
_BRANCHES = 3  # that make a junction


@dataclass(frozen=True, slots=True)
class _Link:
    """An element between two nets; the plus plate, or the side that is positive while it blocks, first."""

    name: str
    nets: tuple[int, int]
    phase: int  # in which it is closed; 0 for a capacitor


@dataclass(frozen=True, slots=True)
class _Stub:
    """An element between a net and a port."""

    name: str
    net: int
    port: str
    phase: int
    net_first: bool  # whether the net is at the plus plate


@dataclass(frozen=True, slots=True)
class _Parts:
    links: tuple[_Link, ...]
    stubs: tuple[_Stub, ...]
    heights: tuple[float, ...]

    @classmethod
    def of(cls, network: SwitchNetwork) -> _Parts:
        """Sort capacitors and switches by whether they end at a port."""
        clusters = network.clusters
        nets = {k: net for net, k in enumerate(k for k, c in enumerate(clusters) if c.port is None)}
        home = {plate: k for k, cluster in enumerate(clusters) for plate in cluster.plates}
        elements = [(f"C{i + 1}", (home[i, 1], home[i, -1]), 0) for i in range(len(home) // 2)]
        elements += [(switch.name, switch.clusters, switch.phase) for switch in network.switches]
        links, stubs = [], []
        for name, (first, second), phase in elements:
            if first in nets and second in nets:
                links.append(_Link(name, (nets[first], nets[second]), phase))
            else:
                net, port = (first, second) if first in nets else (second, first)
                stubs.append(_Stub(name, nets[net], clusters[port].port or "", phase, first in nets))
        return cls(tuple(links), tuple(stubs), tuple(float(sum(clusters[k].potentials)) for k in nets))

    def plan(self) -> Plan:
        """Find places: plus plates up, the ground's flags down, the others' up."""
        links = [Link(link.nets, upright=not link.phase) for link in self.links]
        stubs = [
            Stub(stub.net, DOWN if (stub.port == "G" if stub.phase else stub.net_first) else UP)
            for stub in self.stubs
        ]
        return plan(self.heights, links, stubs)


def schematic(converter: Converter) -> Drawing:
    """Draw the switch-level schematic of a converter.

    A solid badge marks a switch that is closed in phase 1 and open in phase 2, an outlined one the reverse.
    """
    parts = _Parts.of(switch_network(converter))
    return _Schematic(parts, parts.plan()).drawing()


class _Schematic:
    """A schematic being drawn."""

    def __init__(self, parts: _Parts, places: Plan) -> None:
        self.parts = parts
        self.places = places
        named = [link.name for link in parts.links] + [stub.name for stub in parts.stubs]
        pitch = _SIDE + _TEXT_AT + max(Label(0, 0, name, bold=True).width for name in named) + 6.0
        self.xs = [_SIDE + k * pitch for k in range(places.columns)]
        self.ys, self.bottom = self._heights()
        self.wires: list[Mark] = []
        self.symbols: list[Symbol] = []
        self.labels: list[Label] = []

    def _heights(self) -> tuple[list[float], float]:
        """Height of each row, and of the lower edge."""
        rows = max(self.places.rows) + 1
        with_flag = {
            self.places.rows[stub.net] - (direction == UP)
            for stub, (_, direction) in zip(self.parts.stubs, self.places.stubs, strict=True)
        }
        ys = [_HEAD + (_STUB_ROOM if -1 in with_flag else 8.0)]
        for gap in range(rows - 1):
            ys.append(ys[-1] + (_STUB_ROOM if gap in with_flag else _ROOM))
        return ys, ys[-1] + (_STUB_ROOM if rows - 1 in with_flag else 8.0)

    def drawing(self) -> Drawing:
        """Draw all of it."""
        spans = self._rails()
        for link, column in zip(self.parts.links, self.places.links, strict=True):
            self._link(link, column, spans)
        for stub, (column, direction) in zip(self.parts.stubs, self.places.stubs, strict=True):
            self._stub(stub, column, direction)
        self.labels.append(Label(0.0, 13.0, "Switch-level schematic", 13.0, bold=True))
        self._legend()
        width = max(label.box.right for label in self.labels) + 1.0
        return Drawing(
            max(width, self.xs[-1] + _SIDE),
            self.bottom + _LEGEND,
            tuple(self.wires),
            tuple(self.symbols),
            tuple(self.labels),
        )

    def _rails(self) -> list[tuple[int, int]]:
        """Draw the nets and their junctions; return their first and last columns."""
        branches: dict[tuple[int, int], int] = {}
        for link, column in zip(self.parts.links, self.places.links, strict=True):
            for net in link.nets:
                branches[net, column] = branches.get((net, column), 0) + 1
        for stub, (column, _) in zip(self.parts.stubs, self.places.stubs, strict=True):
            branches[stub.net, column] = branches.get((stub.net, column), 0) + 1
        spans = []
        for net, row in enumerate(self.places.rows):
            y = self.ys[row]
            columns = sorted(column for owner, column in branches if owner == net)
            spans.append((columns[0], columns[-1]))
            if columns[0] < columns[-1]:
                self.wires.append(Line(((self.xs[columns[0]], y), (self.xs[columns[-1]], y)), "rail"))
            for column in columns:
                sides = (column > columns[0]) + (column < columns[-1])
                if branches[net, column] + sides >= _BRANCHES:
                    self.wires.append(Dot(self.xs[column], y, 2.4, "ink"))
        return spans

    def _link(self, link: _Link, column: int, spans: list[tuple[int, int]]) -> None:
        rows = self.places.rows
        upper, lower = sorted(rows[net] for net in link.nets)
        crossed = [
            self.ys[rows[net]]
            for net, (first, last) in enumerate(spans)
            if upper < rows[net] < lower and first <= column <= last
        ]
        edges = sorted([self.ys[upper], self.ys[lower], *crossed])
        low, high = max(pairwise(edges), key=lambda band: round(band[1] - band[0], 3))
        first_up = rows[link.nets[0]] <= rows[link.nets[1]]
        self._element(
            link.name,
            link.phase,
            self.xs[column],
            (edges[0], 0.5 * (low + high), edges[-1]),
            crossed=crossed,
            first_up=first_up,
        )

    def _stub(self, stub: _Stub, column: int, direction: int) -> None:
        x, y = self.xs[column], self.ys[self.places.rows[stub.net]]
        end = y + direction * _FLAG_AT
        heights = (min(y, end), 0.5 * (y + end), max(y, end))
        self._element(stub.name, stub.phase, x, heights, first_up=stub.net_first == (direction == DOWN))
        mark, label = flag(stub.port, x, end, down=direction == DOWN)
        self.symbols.append(mark)
        if label is not None:
            self.labels.append(label)

    def _element(
        self,
        name: str,
        phase: int,
        x: float,
        heights: tuple[float, float, float],
        *,
        crossed: Sequence[float] = (),
        first_up: bool,
    ) -> None:
        """Draw a capacitor or a switch: upper end, centre and lower end of its column are given."""
        top, y, bottom = heights
        half = SWITCH if phase else GAP
        self.wires += [wire_down(x, top, y - half, crossed), wire_down(x, y + half, bottom, crossed)]
        if phase:
            self.symbols.append(open_switch(name, x, y))
            self.labels.append(Label(x + _TEXT_AT, y - 3.0, name, TYPE, bold=True))
            self.labels.append(self._badge(phase, x + _TEXT_AT + 4.0, y + 12.0))
        else:
            self.symbols.append(plates(name, x, y))
            self.labels.append(Label(x + _TEXT_AT, baseline(y, TYPE), name, TYPE, bold=True))
            plus = y - 5.0 if first_up else y + 12.0
            self.labels.append(Label(x - PLATE - 1.0, plus, "+", SMALL, anchor="middle"))

    @staticmethod
    def _badge(phase: int, left: float, y: float) -> Label:
        return Label(left, y, str(phase), 9.0, bold=True, badge="solid" if phase == 1 else "outline")

    def _legend(self) -> None:
        left, y = 4.0, self.bottom + 20.0
        for phase, other in ((1, 2), (2, 1)):
            self.labels.append(self._badge(phase, left, y))
            text = Label(
                left + 14.0, y, f"closed in phase {phase}, open in phase {other}", SMALL, tone="soft"
            )
            self.labels.append(text)
            left = text.box.right + 22.0
