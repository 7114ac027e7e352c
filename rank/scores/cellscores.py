"""Every score of the census cells, skeleton by skeleton, on small exact integers.

The same definitions as `capmuster.rank.scores.switching` and `capmuster.rank.scores.utilisation`, for a
whole census: everything that is linear in "which port does this plate meet" is one matrix product per
skeleton (whole numbers in single precision, exact below 2^24), and the chains of all vertices are sorted
and walked for many cells together, in integers of two bytes with one cell per column.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from capmuster.enumerate.attached import MOST_AT_ONCE, attached_cells
from capmuster.enumerate.attachments import N_PORTS
from capmuster.enumerate.laws import laws
from capmuster.enumerate.sorting import comparators
from capmuster.rank.scores.clusterforms import COUNT_BITS, cluster_forms

if TYPE_CHECKING:
    from collections.abc import Iterator, Mapping, Sequence

    from numpy.typing import NDArray

    from capmuster.enumerate.attached import AttachedCells
    from capmuster.enumerate.skeletons import SkeletonTable
    from capmuster.enumerate.tally import Tally

    _Ints = NDArray[np.int16]

_SKELETONS_AT_ONCE = 256
_PLATES = (1 << COUNT_BITS) - 1
_FAR = 16_000  # above every potential; twice it is still an integer of two bytes


@dataclass(frozen=True, slots=True)
class CellScores:
    """Non-degenerate cells with their scores; every array has shape (N,).

    Charges are in the unit of the skeleton's charges. Voltages are in the unit in which the ports'
    potentials are U_A = 0, U_B = D g_C, U_C = -D g_B, with D the skeleton's determinant.

    Attributes
    ----------
    skeleton, attachment, mirror
        Address of the cell, as in `capmuster.enumerate.census.Addresses`.
    charge_b, charge_c
        Charge that ports B and C send per cycle.
    first_b, first_c
        The part of it sent in phase 1.
    capacitor_sum, switch_sum
        Sum of |q v| over capacitors and over switches.
    highest_capacitor, highest_blocking
        Highest voltage of a capacitor and of an open switch.
    switches
        Number of switches.
    clean
        Whether no switch is idle or equipotential.
    """

    skeleton: NDArray[np.int32]
    attachment: NDArray[np.int32]
    mirror: NDArray[np.int8]
    charge_b: NDArray[np.int16]
    charge_c: NDArray[np.int16]
    first_b: NDArray[np.int16]
    first_c: NDArray[np.int16]
    capacitor_sum: NDArray[np.int32]
    highest_capacitor: NDArray[np.int16]
    switch_sum: NDArray[np.int32]
    highest_blocking: NDArray[np.int16]
    switches: NDArray[np.int16]
    clean: NDArray[np.bool_]

    def __len__(self) -> int:
        """Count the cells."""
        return len(self.skeleton)

    @classmethod
    def of(cls, columns: Mapping[str, NDArray[np.integer]], clean: NDArray[np.bool_]) -> CellScores:
        """Make a table of integer columns of any type."""
        return cls(**{name: columns[name].astype(kind) for name, kind in _TYPES.items()}, clean=clean)

    @classmethod
    def empty(cls) -> CellScores:
        """Make a table without cells."""
        return cls(
            **{name: np.zeros(0, kind) for name, kind in _TYPES.items()}, clean=np.zeros(0, dtype=bool)
        )

    def renumbered(self, skeleton: NDArray[np.integer]) -> CellScores:
        """Return the same cells with other numbers for their skeletons."""
        return replace(self, skeleton=skeleton.astype(np.int32))

    def take(self, rows: NDArray[np.bool_] | NDArray[np.intp] | slice) -> CellScores:
        """Return the chosen rows as a table."""
        return CellScores(*(getattr(self, name)[rows] for name in self.__slots__))


_TYPES = {
    "skeleton": np.int32,
    "attachment": np.int32,
    "mirror": np.int8,
    "charge_b": np.int16,
    "charge_c": np.int16,
    "first_b": np.int16,
    "first_c": np.int16,
    "capacitor_sum": np.int32,
    "highest_capacitor": np.int16,
    "switch_sum": np.int32,
    "highest_blocking": np.int16,
    "switches": np.int16,
}


def concatenate(tables: Sequence[CellScores]) -> CellScores:
    """Put tables behind each other."""
    if not tables:
        return CellScores.empty()
    return CellScores(*(np.concatenate([getattr(t, name) for t in tables]) for name in CellScores.__slots__))


def three_ports(b: NDArray[np.int16], c: NDArray[np.int16]) -> NDArray[np.int16]:
    """Charges of ports A, B, C from those of B and C: they add up to zero; shape (N, 3)."""
    return np.stack([-b - c, b, c], axis=1)


def utilisations(
    cells: CellScores, unit: NDArray[np.integer]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Capacitor and switch utilisation of cells, 0 for unity; ``unit``: determinants of their skeletons."""
    magnitudes = np.sort(np.abs(three_ports(cells.charge_b, cells.charge_c).astype(np.int64)), axis=1)
    lifted = unit * magnitudes[:, 0] * magnitudes[:, 1]
    return lifted / cells.capacitor_sum, 4 * lifted / np.maximum(cells.switch_sum, 1)


def score_cells(table: SkeletonTable, first: int, tally: Tally) -> Iterator[CellScores]:
    """Score the non-degenerate cells of skeletons, in batches.

    Parameters
    ----------
    table
        Skeletons, those with equally many nodes per phase behind each other.
    first
        Number of the first of them in the whole list.
    tally
        Is told of every cell, degenerate ones included.
    """
    start = 0
    while start < len(table):
        alike = np.all(table.nodes[start : start + _SKELETONS_AT_ONCE] == table.nodes[start], axis=1)
        stop = start + int(np.argmin(alike)) if not alike.all() else start + len(alike)
        yield from _alike(table.take(slice(start, stop)), first + start, tally)
        start = stop


def _alike(table: SkeletonTable, first: int, tally: Tally) -> Iterator[CellScores]:
    """Score the cells of a few skeletons that have equally many nodes per phase."""
    law = laws(table)
    clusters = cluster_forms(table, law)
    batch = _Batch(table.n, *table.nodes[0].tolist())
    for cells in attached_cells(table, law, tally):
        if batch.filled + len(cells.outer.values) > MOST_AT_ONCE:
            yield batch.scored()
        row = cells.row
        codes = clusters.codes(row, cells.outer.letters)
        batch.gather(first + row, cells, codes, float(law.determinant[row]), table.charges[row])
    if batch.filled:
        yield batch.scored()


class _Batch:
    """Cells of skeletons with equally many nodes per phase, gathered until there are enough of them."""

    def __init__(self, n: int, m1: int, m2: int) -> None:
        self.n, self.m1, self.m2 = n, m1, m2
        self.rows, self.columns = m1 + N_PORTS, m2 + N_PORTS
        self.filled = 0
        self.codes = np.empty((self.rows * self.columns, MOST_AT_ONCE), np.int16)
        self.levels = np.empty(
            (N_PORTS + n - 1, MOST_AT_ONCE), np.int16
        )  # ports, nodes of phase 1, of phase 2
        self.skeleton = np.empty(MOST_AT_ONCE, np.int32)
        self.attachment = np.empty(MOST_AT_ONCE, np.int32)
        self.mirror = np.empty(MOST_AT_ONCE, np.int8)
        self.charges = np.empty((2, MOST_AT_ONCE), np.int16)
        self.first = np.empty((2, MOST_AT_ONCE), np.int16)
        self.capacitor_sum = np.empty(MOST_AT_ONCE, np.int32)
        self.highest_capacitor = np.empty(MOST_AT_ONCE, np.int16)

    def gather(
        self,
        skeleton: int,
        cells: AttachedCells,
        codes: NDArray[np.float32],
        determinant: float,
        charges: NDArray[np.int64],
    ) -> None:
        """Take in cells of one skeleton."""
        to = slice(self.filled, self.filled + len(cells.outer.values))
        self.filled = to.stop
        self.codes[:, to] = codes
        self.levels[0, to] = 0
        self.levels[1, to] = determinant * cells.charges[1]
        self.levels[2, to] = -determinant * cells.charges[0]
        self.levels[N_PORTS:, to] = cells.potentials
        self.skeleton[to] = skeleton
        self.attachment[to] = cells.outer.values
        self.mirror[to] = cells.outer.mirror
        self.charges[:, to] = cells.charges
        self.first[:, to] = cells.first
        magnitudes = np.abs(cells.voltages)
        self.capacitor_sum[to] = np.abs(charges).astype(np.float32) @ magnitudes
        self.highest_capacitor[to] = magnitudes.max(axis=0)

    def scored(self) -> CellScores:
        """Score what has been gathered, and start again."""
        used = slice(0, self.filled)
        self.filled = 0
        codes = self.codes[:, used].reshape(self.rows, self.columns, -1)
        ports = self.levels[:N_PORTS, used]
        levels = [
            np.concatenate([ports, self.levels[N_PORTS : N_PORTS + self.m1, used]]),
            np.concatenate([ports, self.levels[N_PORTS + self.m1 :, used]]),
        ]
        if np.abs(self.levels[:, used]).max() >= _FAR:
            raise OverflowError("potentials do not fit integers of two bytes")
        one = _Chains(np.swapaxes(codes, 0, 1), levels[1])
        two = _Chains(codes, levels[0])
        return CellScores(
            skeleton=self.skeleton[used].copy(),
            attachment=self.attachment[used].copy(),
            mirror=self.mirror[used].copy(),
            charge_b=self.charges[0, used].copy(),
            charge_c=self.charges[1, used].copy(),
            first_b=self.first[0, used].copy(),
            first_c=self.first[1, used].copy(),
            capacitor_sum=self.capacitor_sum[used].copy(),
            highest_capacitor=self.highest_capacitor[used].copy(),
            switch_sum=one.cost + two.cost,
            highest_blocking=np.maximum(one.blocking, two.blocking),
            switches=2 * one.clusters - np.int16(self.n + 5),
            clean=one.clean & two.clean,
        )


class _Chains:
    """The optimal chains of all vertices of one phase, for many cells.

    Parameters
    ----------
    codes
        Shape (K, V, N): charge x 2^6 + plates of the cluster at vertex k of the other phase and vertex v of
        this one. The sign of the charge is free: only magnitudes are used.
    levels
        Shape (K, N): potential of the vertices of the other phase.
    """

    def __init__(self, codes: _Ints, levels: _Ints) -> None:
        codes, levels = codes.copy(), levels.copy()
        for port in range(N_PORTS):
            # A port makes up for all other plates on its vertex, and is there even without a plate.
            codes[port, port] = 0
            codes[port, port] = 1 - (codes[:, port].sum(axis=0, dtype=np.int16) & ~np.int16(_PLATES))
        _sort(codes, levels)
        self._walk(codes, levels)

    def _walk(self, codes: _Ints, levels: _Ints) -> None:
        """Go up every chain; a cluster that has one below it closes a link."""
        _, vertices, rows = codes.shape
        passed = np.zeros((vertices, rows), np.int16)
        below = np.full((vertices, rows), _FAR, np.int16)
        blocking = np.zeros((vertices, rows), np.int16)
        cost = np.zeros(rows, np.int32)
        clusters = np.zeros(rows, np.int16)
        ends = np.zeros(rows, np.int16)  # clusters above which nothing flows: one per vertex in a clean cell
        level_twice = np.zeros((vertices, rows), bool)
        for k, (code, level) in enumerate(zip(codes, levels, strict=True)):
            here = (code & _PLATES) != 0
            passed += code >> COUNT_BITS
            clusters += here.sum(axis=0, dtype=np.int16)
            ends += (here & (passed == 0)).sum(axis=0, dtype=np.int16)
            step = level - below
            level_twice |= here & (step == 0)
            step &= -here.astype(np.int16)
            np.maximum(blocking, step, out=blocking)
            below += step
            if k + 1 < len(codes):
                gap = levels[k + 1] - level
                cost += np.abs(passed).sum(axis=0, dtype=np.int32) * gap
        self.cost = cost
        self.blocking = blocking.max(axis=0)
        self.clusters = clusters
        self.clean = (ends == vertices) & ~level_twice.any(axis=0)


def _sort(codes: _Ints, levels: _Ints) -> None:
    """Sort levels along the first axis, in place, and carry the codes along."""
    for i, j in comparators(len(levels)):
        swap = -(levels[i] > levels[j]).astype(np.int16)
        low, high = np.minimum(levels[i], levels[j]), np.maximum(levels[i], levels[j])
        levels[i], levels[j] = low, high
        change = (codes[i] ^ codes[j]) & swap
        codes[i] ^= change
        codes[j] ^= change
