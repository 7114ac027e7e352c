"""In which order the capacitors of one drawing stand from left to right.

A vertex is a rail over all columns from its first capacitor to its last. A column whose capacitor reaches
past a rail that is none of its own crosses it; two rails at one level that want the same column have to be
drawn apart. Both depend only on which capacitors stand to the left, not on their order, so dynamic
programming over subsets finds the best of all orders.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import combinations
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from collections.abc import Sequence
    from fractions import Fraction

    from numpy.typing import NDArray

MOST_EXACT = 12
"""Most capacitors whose order is the best of all; above it, the best that moving one at a time reaches."""

_APART = 3  # rails drawn apart at one level read worse than a crossing
_CROSSING = 10_000  # crossings before length, length before the order of names
_LENGTH = 100


@dataclass(frozen=True, slots=True)
class Rails:
    """The vertices of one phase that have capacitors.

    Attributes
    ----------
    vertices
        Their numbers in the wiring.
    levels
        Their potentials, per volt of input.
    members
        For each rail the capacitors on it, as bits.
    ends
        For each capacitor the rails of its plus and of its minus plate, as positions in `vertices`.
    """

    vertices: tuple[int, ...]
    levels: tuple[Fraction, ...]
    members: tuple[int, ...]
    ends: tuple[tuple[int, int], ...]

    @classmethod
    def of(cls, plates: Sequence[tuple[int, int]], potentials: Sequence[Fraction]) -> Rails:
        """Collect the rails of one phase from the vertices of each capacitor's plates."""
        vertices = tuple(sorted({vertex for pair in plates for vertex in pair}))
        place = {vertex: k for k, vertex in enumerate(vertices)}
        return cls(
            vertices=vertices,
            levels=tuple(potentials[vertex] for vertex in vertices),
            members=tuple(
                sum(1 << i for i, pair in enumerate(plates) if vertex in pair) for vertex in vertices
            ),
            ends=tuple((place[plus], place[minus]) for plus, minus in plates),
        )

    def passed(self, capacitor: int) -> list[int]:
        """Rails that lie strictly between the ends of a capacitor."""
        low, high = sorted(self.levels[end] for end in self.ends[capacitor])
        return [rail for rail, level in enumerate(self.levels) if low < level < high]

    @property
    def twins(self) -> list[tuple[int, int]]:
        """Pairs of rails at one level."""
        return [
            (a, b) for a, b in combinations(range(len(self.levels)), 2) if self.levels[a] == self.levels[b]
        ]


def best_order(phases: Sequence[Rails]) -> tuple[int, ...]:
    """Return the order of columns that suits all the given phases best.

    Least crossings first, a rail drawn apart counting as three; then the shortest rails; then the order of
    the capacitors' names.
    """
    n = len(phases[0].ends)
    return _exact(phases, n) if n <= MOST_EXACT else _sifted(phases, n)


def crossings(phases: Sequence[Rails], order: Sequence[int]) -> int:
    """Count crossings in all the given phases, a rail drawn apart over one column counting as three."""
    return _cost(phases, order) // _CROSSING


def shared_order(phases: Sequence[Rails]) -> tuple[tuple[int, ...], ...]:
    """Return an order for each phase: the same one wherever that costs no crossing."""
    alone = tuple(best_order([rails]) for rails in phases)
    common = best_order(phases)
    least = sum(crossings([rails], order) for rails, order in zip(phases, alone, strict=True))
    return (common,) * len(phases) if crossings(phases, common) == least else alone


def _step(phases: Sequence[Rails], capacitor: int, before: NDArray[np.int64]) -> NDArray[np.int64]:
    """Cost of placing a capacitor next, for each set of capacitors that stand to its left."""
    bit = 1 << capacitor
    cost = np.zeros(len(before), dtype=np.int64)
    later = before >> (capacitor + 1)
    while later.any():  # inversions: capacitors of higher number to the left
        cost += later & 1
        later = later >> 1
    for rails in phases:
        covering = [
            (((before | bit) & members) != 0) & ((members & ~before) != 0) for members in rails.members
        ]
        for rail in covering:
            cost += _LENGTH * rail
        for rail in rails.passed(capacitor):
            cost += _CROSSING * covering[rail]
        for a, b in rails.twins:
            cost += _APART * _CROSSING * (covering[a] & covering[b])
    return cost


def _exact(phases: Sequence[Rails], n: int) -> tuple[int, ...]:
    subsets = np.arange(1 << n, dtype=np.int64)
    steps = [_step(phases, capacitor, subsets).tolist() for capacitor in range(n)]
    best = [0] * (1 << n)
    last = [0] * (1 << n)
    for subset in range(1, 1 << n):
        best[subset], last[subset] = min(
            (best[subset ^ (1 << c)] + steps[c][subset ^ (1 << c)], c) for c in range(n) if subset >> c & 1
        )
    order: list[int] = []
    subset = (1 << n) - 1
    while subset:
        order.append(last[subset])
        subset ^= 1 << last[subset]
    return tuple(reversed(order))


def _cost(phases: Sequence[Rails], order: Sequence[int]) -> int:
    total, placed = 0, 0
    for capacitor in order:
        total += int(_step(phases, capacitor, np.array([placed], dtype=np.int64))[0])
        placed |= 1 << capacitor
    return total


def _sifted(phases: Sequence[Rails], n: int) -> tuple[int, ...]:
    order = list(range(n))
    least = _cost(phases, order)
    improved = True
    while improved:
        improved = False
        for capacitor in range(n):
            rest = [c for c in order if c != capacitor]
            tried = [[*rest[:k], capacitor, *rest[k:]] for k in range(n)]
            cost, chosen = min((_cost(phases, one), one) for one in tried)
            if cost < least:
                least, order, improved = cost, chosen, True
    return tuple(order)
