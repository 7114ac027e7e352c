"""Where the parts of a switch-level schematic go: nets in rows, elements in columns.

A net is a horizontal rail in a row, an element stands upright in a column between the rails of its two nets.
Elements at a port are stubs that end in a flag with the port's name, so that the three largest nets need no
rail. A local search moves one part at a time while that saves crossings or room; every run finds the same.
"""

from __future__ import annotations

from dataclasses import dataclass
from random import Random
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence

UP, DOWN = -1, 1

_STARTS, _KICKS, _KICK = 5, 6, 4  # searches from scratch; from the best found, after so many moves at random
_IMPOSSIBLE = 1000
_CROSSING = 60
_UPSIDE_DOWN = 20
_COLUMN = 5
_ROW = 7


@dataclass(frozen=True, slots=True)
class Link:
    """An element between two nets; ``upright`` if the first net should be the upper one."""

    nets: tuple[int, int]
    upright: bool


@dataclass(frozen=True, slots=True)
class Stub:
    """An element between a net and a port, and where its flag best points, up or down."""

    net: int
    direction: int


@dataclass(frozen=True, slots=True)
class Plan:
    """Places on a grid.

    Attributes
    ----------
    rows
        Row of each net, 0 at the top.
    links
        Column of each link.
    stubs
        Column and direction of each stub.
    columns
        Number of columns.
    """

    rows: tuple[int, ...]
    links: tuple[int, ...]
    stubs: tuple[tuple[int, int], ...]
    columns: int


@dataclass(frozen=True, slots=True)
class _State:
    """Row of each net and column of each link."""

    rows: tuple[int, ...]
    columns: tuple[int, ...]

    def moves(self) -> Iterator[_State]:
        """Every state that moves one link or one net, or exchanges two columns."""
        width, height = max(self.columns, default=-1) + 1, max(self.rows) + 1
        for link in range(len(self.columns)):
            for place in range(2 * width + 1):
                yield _State(self.rows, _put(self.columns, link, place))
        for net in range(len(self.rows)):
            for place in range(2 * height + 1):
                yield _State(_put(self.rows, net, place), self.columns)
        for first in range(width):
            for second in range(first + 1, width):
                exchange = {first: second, second: first}
                yield _State(self.rows, tuple(exchange.get(c, c) for c in self.columns))


def _put(places: tuple[int, ...], item: int, place: int) -> tuple[int, ...]:
    """Move one item to an existing line (odd places) or to a new one between them, and close empty lines."""
    moved = [2 * old + 1 for old in places]
    moved[item] = place
    ranks = {old: new for new, old in enumerate(sorted(set(moved)))}
    return tuple(ranks[old] for old in moved)


def plan(heights: Sequence[float], links: Sequence[Link], stubs: Sequence[Stub]) -> Plan:
    """Find places for all parts.

    Parameters
    ----------
    heights
        For each net how high it would best stand.
    links, stubs
        The elements.
    """
    ranks = sorted(set(heights), reverse=True)
    rows = tuple(ranks.index(height) for height in heights)
    random = Random(0)  # noqa: S311 -- where the search starts, the same on every run
    columns = list(range(len(links)))
    found = []
    for _ in range(_STARTS):
        found.append(_descend(_State(rows, tuple(columns)), links))
        random.shuffle(columns)
    best = min(found, key=lambda pair: pair[0])
    for _ in range(_KICKS):
        state = best[1]
        for _ in range(_KICK):
            state = random.choice(list(state.moves()))
        best = min(best, _descend(state, links), key=lambda pair: pair[0])
    return _Placing(best[1], links).with_stubs(stubs)


def _descend(state: _State, links: Sequence[Link]) -> tuple[int, _State]:
    """Take the best move until none is better; return the cost with the state."""
    cost = _cost(state, links)
    while True:
        least, best = min(((_cost(one, links), one) for one in state.moves()), key=lambda pair: pair[0])
        if least >= cost:
            return cost, state
        state, cost = best, least


def _spans(columns: Sequence[int], links: Sequence[Link], nets: int) -> tuple[list[int], list[int]]:
    """First and last column of each net; an empty span for a net that has no link."""
    first, last = [len(links)] * nets, [-1] * nets
    for column, link in zip(columns, links, strict=True):
        for net in link.nets:
            first[net] = min(first[net], column)
            last[net] = max(last[net], column)
    return first, last


def _cost(state: _State, links: Sequence[Link]) -> int:
    """Weigh a state: what cannot be drawn, crossings, capacitors upside down, and room."""
    rows, columns = state.rows, state.columns
    first, last = _spans(columns, links, len(rows))
    in_row: dict[int, list[int]] = {}
    for net, row in enumerate(rows):
        if last[net] >= 0:
            in_row.setdefault(row, []).append(net)
    cost = _COLUMN * (max(columns, default=0) + 1) + _ROW * (max(rows) + 1)
    cost += sum(last[net] - first[net] for nets in in_row.values() for net in nets)
    for nets in in_row.values():
        for k, net in enumerate(nets):
            for other in nets[:k]:
                if first[net] <= last[other] and first[other] <= last[net]:
                    cost += _IMPOSSIBLE
    in_column: dict[int, list[tuple[int, int]]] = {}
    for column, link in zip(columns, links, strict=True):
        upper, lower = rows[link.nets[0]], rows[link.nets[1]]
        if upper >= lower:
            cost += _IMPOSSIBLE if upper == lower else _UPSIDE_DOWN * link.upright
            upper, lower = lower, upper
        cost += 2 * (lower - upper)
        for row in range(upper + 1, lower):
            cost += _CROSSING * sum(first[net] <= column <= last[net] for net in in_row.get(row, ()))
        neighbours = in_column.setdefault(column, [])
        cost += _IMPOSSIBLE * sum(max(top, upper) < min(bottom, lower) for top, bottom in neighbours)
        neighbours.append((upper, lower))
    return cost


class _Placing:
    """Stubs put into free places, one after the other, columns added where there is none."""

    def __init__(self, state: _State, links: Sequence[Link]) -> None:
        self.rows = state.rows
        self.links = links
        self.columns = list(state.columns)
        self.width = max(self.columns, default=-1) + 1
        self.first, self.last = _spans(self.columns, links, len(self.rows))
        self.placed: list[tuple[int, int, int]] = []  # net, column, direction

    def with_stubs(self, stubs: Sequence[Stub]) -> Plan:
        """Place the stubs in their order."""
        for stub in stubs:
            self._place(stub)
        return Plan(
            self.rows,
            tuple(self.columns),
            tuple((column, direction) for _, column, direction in self.placed),
            self.width,
        )

    def _place(self, stub: Stub) -> None:
        net = stub.net
        if self.last[net] < 0:  # its first element: a column of its own at the right
            self.first[net] = self.last[net] = self.width
            self.width += 1
        choices = []
        for direction in (stub.direction, -stub.direction):
            wrong = 3 if direction != stub.direction else 0
            for column in range(self.first[net], self.last[net] + 1):
                if self._free(net, column, direction):
                    in_line = self._meets(net, column)
                    choices.append((wrong + (0 if in_line else 1), column, direction))
        if not choices or min(choices)[0] > 2:  # noqa: PLR2004 -- a new column costs 2
            choices.append((2, self._widened(net), stub.direction))
        _, column, direction = min(choices)
        self.placed.append((net, column, direction))

    def _meets(self, net: int, column: int) -> bool:
        """Whether something of the net stands in the column already."""
        linked = any(
            c == column and net in link.nets for c, link in zip(self.columns, self.links, strict=True)
        )
        return linked or any(n == net and c == column for n, c, _ in self.placed)

    def _free(self, net: int, column: int, direction: int) -> bool:
        """Whether nothing stands in a column just above or below a net's row."""
        gap = self.rows[net] + (0 if direction == DOWN else -1)
        for c, link in zip(self.columns, self.links, strict=True):
            upper, lower = sorted((self.rows[link.nets[0]], self.rows[link.nets[1]]))
            if c == column and upper <= gap < lower:
                return False
        return all(c != column or self.rows[n] + (0 if d == DOWN else -1) != gap for n, c, d in self.placed)

    def _widened(self, net: int) -> int:
        """Put a new column behind the last one of a net."""
        new = self.last[net] + 1
        self.columns = [c + (c >= new) for c in self.columns]
        self.placed = [(n, c + (c >= new), d) for n, c, d in self.placed]
        self.first = [c + (c >= new) for c in self.first]
        self.last = [c + (c >= new) for c in self.last]
        self.last[net] = new
        self.width += 1
        return new
