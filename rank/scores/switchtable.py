"""Switches and utilisations of many cells or converters at once, on exact integers.

The same definition as `capmuster.rank.scores.switching`. A cluster is a pair of vertices (phase 1, phase
2), so all clusters of a row are the entries of one small matrix, and all chains of a phase are cumulative
sums along it, its columns sorted by their potential.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Protocol, TypeAlias, TypeVar

import numpy as np

if TYPE_CHECKING:
    from collections.abc import Iterator

    from numpy.typing import NDArray

_PORTS = 3
_BLOCK = 8192
_T = TypeVar("_T", np.int8, np.int64)


class Wired(Protocol):
    """What cells and converters offer: words, charges, port charges, potentials and node counts."""

    @property
    def words(self) -> NDArray[np.int8]:
        """Shape (N, n, 4)."""

    @property
    def charges(self) -> NDArray[np.integer]:
        """Shape (N, n)."""

    @property
    def port_charges(self) -> NDArray[np.integer]:
        """Shape (N, 3)."""

    @property
    def potentials(self) -> NDArray[np.integer]:
        """Shape (N, 2, n + 2)."""

    @property
    def voltages(self) -> NDArray[np.integer]:
        """Shape (N, n)."""

    @property
    def nodes(self) -> NDArray[np.int8]:
        """Shape (N, 2)."""


@dataclass(frozen=True, slots=True)
class SwitchTable:
    """All switches of N converters of n capacitors, in the integer units of their table.

    Attributes
    ----------
    charges
        Shape (N, 3 n + 1), int64: charge through each switch, not negative; 0 beyond `count`.
    blocking
        Shape (N, 3 n + 1), int64: blocking voltage, not negative; 0 beyond `count`.
    phase
        Shape (N, 3 n + 1), int8: phase in which it is closed, 1 or 2; 0 beyond `count`.
    vertex
        Shape (N, 3 n + 1), int8: the vertex, of the phase in which it is closed, that it holds together.
    high, low
        Shape (N, 3 n + 1), int8: vertices, of the phase in which it is open, between which it blocks; `high`
        has the higher potential.
    count
        Shape (N,): number of switches.
    """

    charges: NDArray[np.int64]
    blocking: NDArray[np.int64]
    phase: NDArray[np.int8]
    vertex: NDArray[np.int8]
    high: NDArray[np.int8]
    low: NDArray[np.int8]
    count: NDArray[np.int64]

    def take(self, rows: NDArray[np.bool_] | NDArray[np.intp] | slice) -> SwitchTable:
        """Return the chosen rows as a table."""
        return SwitchTable(*(getattr(self, name)[rows] for name in self.__slots__))

    @property
    def clean(self) -> NDArray[np.bool_]:
        """Where every switch carries charge and blocks voltage, shape (N,)."""
        present = self.phase > 0
        return np.asarray(np.all(~present | ((self.charges > 0) & (self.blocking > 0)), axis=1))

    @property
    def volt_charge(self) -> NDArray[np.int64]:
        """Sum of charge x blocking voltage, shape (N,)."""
        return np.asarray((self.charges * self.blocking).sum(axis=1))


@dataclass(frozen=True, slots=True)
class Scores:
    """How well N cells use their elements; each utilisation is an exact quotient of integers.

    Attributes
    ----------
    lifted
        Shape (N,), int64: E, the energy lifted per cycle.
    capacitor_sum, switch_sum
        Shape (N,), int64: sum of |q v| over capacitors and over switches, in the unit of `lifted`.
    switches
        Shape (N,), int64: number of switches.
    clean
        Shape (N,): whether no switch is idle or equipotential.
    """

    lifted: NDArray[np.int64]
    capacitor_sum: NDArray[np.int64]
    switch_sum: NDArray[np.int64]
    switches: NDArray[np.int64]
    clean: NDArray[np.bool_]

    @property
    def capacitor_utilisation(self) -> NDArray[np.float64]:
        """E / sum |q v| over capacitors, 0 for unity, shape (N,)."""
        return _share(self.lifted, self.capacitor_sum)

    @property
    def switch_utilisation(self) -> NDArray[np.float64]:
        """4 E / sum |q v| over switches, 0 for unity, shape (N,)."""
        return _share(4 * self.lifted, self.switch_sum)


def _share(part: NDArray[np.int64], whole: NDArray[np.int64]) -> NDArray[np.float64]:
    return np.divide(part, whole, out=np.zeros(len(part)), where=part > 0)


def score(table: Wired) -> Scores:
    """Score non-degenerate cells or converters."""
    switches = switch_table(table)
    return Scores(
        lifted=_lifted(table),
        capacitor_sum=np.abs(table.charges.astype(np.int64) * table.voltages).sum(axis=1),
        switch_sum=switches.volt_charge,
        switches=switches.count,
        clean=switches.clean,
    )


def switch_table(table: Wired) -> SwitchTable:
    """Find the optimal chains of every row.

    Where clusters of equal potential leave a chain open, the order here is the vertices' own: charges through
    equipotential switches can differ from `capmuster.rank.scores.switching`, sums and counts cannot.
    """
    rows, n, _ = table.words.shape
    parts = [_block(table, slice(start, start + _BLOCK)) for start in range(0, rows, _BLOCK)]
    if not parts:
        shape = (0, 3 * n + 1)
        empty, small = np.zeros(shape, dtype=np.int64), np.zeros(shape, dtype=np.int8)
        return SwitchTable(empty, empty, small, small, small, small, np.zeros(0, dtype=np.int64))
    return SwitchTable(
        *(np.concatenate([getattr(part, name) for part in parts]) for name in SwitchTable.__slots__)
    )


def _lifted(table: Wired) -> NDArray[np.int64]:
    ports = table.potentials[:, 0, :_PORTS].astype(np.int64)
    order = np.argsort(ports, axis=1)
    ports = np.take_along_axis(ports, order, axis=1)
    charges = np.abs(np.take_along_axis(table.port_charges.astype(np.int64), order, axis=1))
    return np.asarray(charges[:, 2] * (ports[:, 2] - ports[:, 1]))


def _block(table: Wired, rows: slice) -> SwitchTable:
    words = table.words[rows].astype(np.intp)
    charges = table.charges[rows].astype(np.int64)
    potentials = table.potentials[rows].astype(np.int64)
    count, n, _ = words.shape
    v = n + 2
    row = np.arange(count)
    net = np.zeros((count, v * v), dtype=np.int64)
    present = np.zeros((count, v * v), dtype=bool)
    for i in range(n):
        for plate, sign in ((0, 1), (1, -1)):
            cluster = words[:, i, plate] * v + words[:, i, plate + 2]
            net[row, cluster] += sign * charges[:, i]
            present[row, cluster] = True
    net, present = net.reshape(count, v, v), present.reshape(count, v, v)
    port = np.arange(_PORTS)
    present[:, port, port] = True
    used = np.arange(v) < table.nodes[rows][:, :, None] + _PORTS

    found: list[_Link] = []
    for phase, (matrix, there) in enumerate(
        ((net.copy(), present), (-np.swapaxes(net, 1, 2), np.swapaxes(present, 1, 2)))
    ):
        # Kirchhoff's current law: a port makes up for all other plates on its vertex.
        matrix[:, port, port] = 0
        matrix[:, port, port] = -matrix[:, port].sum(axis=2)
        other = np.where(used[:, 1 - phase], potentials[:, 1 - phase], np.iinfo(np.int64).max)
        order = np.argsort(other, axis=1, kind="stable")
        level = np.take_along_axis(potentials[:, 1 - phase], order, axis=1)
        found.extend(
            _links(
                np.take_along_axis(matrix, order[:, None, :], axis=2),
                np.take_along_axis(there, order[:, None, :], axis=2),
                level,
                order,
            )
        )
    return _compressed(found, n)


_Link: TypeAlias = (
    "tuple[NDArray[np.int64], NDArray[np.int64], NDArray[np.int64], NDArray[np.int64], NDArray[np.bool_]]"
)


def _links(
    charge: NDArray[np.int64], present: NDArray[np.bool_], level: NDArray[np.int64], vertex: NDArray[np.intp]
) -> Iterator[_Link]:
    """Walk up the sorted columns; each present cluster that has one below it closes a link of the chain.

    Yields for every column: charge, blocking voltage, upper and lower vertex, and whether there is a link.
    """
    passed = np.zeros_like(charge[:, :, 0])
    below, under = np.zeros_like(passed), np.zeros_like(passed)
    started = np.zeros(passed.shape, dtype=bool)
    for column in range(charge.shape[2]):
        here = present[:, :, column]
        height = np.broadcast_to(level[:, column, None], here.shape)
        name = np.broadcast_to(vertex[:, column, None], here.shape)
        yield np.abs(passed), height - below, name, under, here & started
        passed = passed + charge[:, :, column]
        below, under = np.where(here, height, below), np.where(here, name, under)
        started = started | here


def _compressed(found: list[_Link], n: int) -> SwitchTable:
    """Move the links that exist to the front of each row."""
    half = len(found) // 2
    exists = np.concatenate([link[-1] for link in found], axis=1)
    phase = np.repeat(np.array([1, 2], dtype=np.int8), [half * found[0][0].shape[1]] * 2)
    row, column = np.nonzero(exists)
    count = exists.sum(axis=1)
    place = np.arange(len(row)) - np.repeat(np.cumsum(count) - count, count)
    shape = (len(exists), 3 * n + 1)

    def packed(values: NDArray[np.int64], kind: type[_T]) -> NDArray[_T]:
        result = np.zeros(shape, dtype=kind)
        result[row, place] = values
        return result

    charges, blocking, high, low = (
        np.concatenate([link[k] for link in found], axis=1)[row, column] for k in range(4)
    )
    return SwitchTable(
        packed(charges, np.int64),
        packed(blocking, np.int64),
        packed(phase[column].astype(np.int64), np.int8),
        packed(column % found[0][0].shape[1], np.int8),
        packed(high, np.int8),
        packed(low, np.int8),
        count,
    )
