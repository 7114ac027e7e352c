"""The best cells of each triple and those that no other beats, kept while all cells pass by.

Whatever a role does to a cell it does to all cells of its triple alike, so what is best for a ratio is best
for the triple: kept cells are enough to know the best converters and the frontier of every ratio.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

import numpy as np

from capmuster.enumerate.tally import triple_numbers
from capmuster.rank.frontier import frontier
from capmuster.rank.scores.cellscores import CellScores, concatenate, utilisations

if TYPE_CHECKING:
    from collections.abc import Iterable

    from numpy.typing import NDArray

    from capmuster.enumerate.tally import Triple

Score = Literal["product", "capacitor", "switch"]
"""What the best are best in: a utilisation, or the product of both."""
_ROWS_AT_ONCE = 1 << 16
_DIGITS_THAT_TIE = 12
_QUICK = 8


@dataclass(frozen=True, slots=True)
class Kept:
    """Clean cells of one triple that are worth keeping.

    Attributes
    ----------
    cells
        The cells.
    unit
        The determinant of each one's skeleton, shape (N,).
    best
        Whether it is among the best, shape (N,).
    unbeaten
        Whether no other beats it, shape (N,).
    """

    cells: CellScores
    unit: NDArray[np.int64]
    best: NDArray[np.bool_]
    unbeaten: NDArray[np.bool_]


class Keeper:
    """Keeps the best cells of each triple, and those that no other beats.

    A cell beats another of its triple if it is as good in switches, both utilisations and highest blocking
    voltage, and better in one of them. Cells that tie in the score are ordered by fewer switches, higher
    capacitor utilisation, and their place in the census.

    Parameters
    ----------
    most
        How many of the best to keep for each triple.
    by
        What they are best in.
    """

    def __init__(self, most: int, by: Score) -> None:
        self.most, self.by = most, by
        self.waiting: list[tuple[CellScores, NDArray[np.int64]]] = []
        self.rows = 0
        self.kept: dict[Triple, Kept] = {}

    def add(self, cells: CellScores, unit: NDArray[np.int64]) -> None:
        """See clean cells, with the determinants of their skeletons."""
        if not len(cells):
            return
        self.waiting.append((cells, unit))
        self.rows += len(cells)
        if self.rows >= _ROWS_AT_ONCE:
            self._settle()

    def merge(self, kept: Iterable[tuple[Triple, Kept]]) -> None:
        """See what another keeper has kept."""
        for _, one in kept:
            self.add(one.cells, one.unit)

    def result(self) -> dict[Triple, Kept]:
        """Return what is kept of all cells seen, by triple."""
        self._settle()
        return dict(sorted(self.kept.items()))

    def _settle(self) -> None:
        if not self.waiting:
            return
        cells = concatenate([cells for cells, _ in self.waiting])
        unit = np.concatenate([unit for _, unit in self.waiting])
        self.waiting, self.rows = [], 0
        triples, place = triple_numbers(cells.charge_b, cells.charge_c)
        order = np.argsort(place.astype(np.int16), kind="stable")
        ends = np.cumsum(np.bincount(place, minlength=len(triples)))
        for triple, rows in zip(triples, np.split(order, ends[:-1]), strict=True):
            self.kept[triple] = self._chosen(self.kept.get(triple), cells.take(rows), unit[rows])

    def _chosen(self, before: Kept | None, cells: CellScores, unit: NDArray[np.int64]) -> Kept:
        if before is not None:
            # Quick first: most newcomers are beaten by one of a few, and not among the best.
            costs, score = _costs(cells, unit), self._score(cells, unit)
            hopeful = np.ones(len(cells), dtype=bool)
            old_costs, old_score = _costs(before.cells, before.unit), self._score(before.cells, before.unit)
            leading = np.argsort(-old_score, kind="stable")
            for cost in old_costs[leading[before.unbeaten[leading]][:_QUICK]]:
                hopeful &= ~(np.all(cost <= costs, axis=1) & np.any(cost < costs, axis=1))
            if np.count_nonzero(before.best) >= self.most:
                hopeful |= score >= old_score[before.best].min()
            else:
                hopeful[:] = True
            cells = concatenate([before.cells, cells.take(hopeful)])
            unit = np.concatenate([before.unit, unit[hopeful]])
        # The same cell may come twice when parts are merged; it stays once, and all stay in the census's
        # order.
        order = np.lexsort((cells.attachment, cells.skeleton))
        address = np.stack([cells.skeleton[order], cells.attachment[order]])
        order = order[np.append(True, np.any(address[:, 1:] != address[:, :-1], axis=0))]
        cells, unit = cells.take(order), unit[order]
        costs, score = _costs(cells, unit), self._score(cells, unit)
        unbeaten = frontier(costs)
        best = np.zeros(len(cells), dtype=bool)
        best[np.lexsort((costs[:, 1], costs[:, 0], -score))[: self.most]] = True
        worth = best | unbeaten
        return Kept(cells.take(worth), unit[worth], best[worth], unbeaten[worth])

    def _score(self, cells: CellScores, unit: NDArray[np.int64]) -> NDArray[np.float64]:
        capacitor, switch = utilisations(cells, unit)
        chosen = {"product": capacitor * switch, "capacitor": capacitor, "switch": switch}[self.by]
        return np.asarray(np.round(chosen, _DIGITS_THAT_TIE))


def _costs(cells: CellScores, unit: NDArray[np.int64]) -> NDArray[np.float64]:
    """Switches, utilisations with their signs turned, highest blocking voltage in the triple's own unit."""
    capacitor, switch = utilisations(cells, unit)
    divisor = np.gcd(cells.charge_b.astype(np.int64), cells.charge_c)
    blocking = cells.highest_blocking / (unit * np.maximum(divisor, 1))
    return np.stack([cells.switches.astype(np.float64), -capacitor, -switch, blocking], axis=1)
