"""The complete census of irreducible cells, as structure-of-arrays tables.

A cell has an address: the number of its skeleton, and its attachment as a number. Everything else follows
from the address in a few array operations on exact small integers, so that is what is stored and passed
around.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from typing import TYPE_CHECKING

import numpy as np

from capmuster.enumerate.attachments import EXCHANGES, N_PORTS, attachments
from capmuster.enumerate.errors import CapmusterError
from capmuster.enumerate.laws import laws
from capmuster.enumerate.skeletons import skeletons

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from capmuster.enumerate.skeletons import SkeletonTable
    from capmuster.enumerate.tally import Triple

CENSUS_REACH = 5
"""Most flying capacitors that the census lists."""
_ROWS_AT_ONCE = 1 << 16


@dataclass(frozen=True, slots=True)
class Addresses:
    """Where N cells stand in the census of ``n`` capacitors.

    Attributes
    ----------
    n
        Number of flying capacitors.
    skeleton
        Shape (N,), int32: row in `capmuster.enumerate.skeletons.skeletons`.
    attachment
        Shape (N,), int32: port of each outer place as a digit in base 3, first place most significant.
    stabiliser
        Shape (N,), int8: number of renamings that leave the cell as it is.
    mirror
        Shape (N,), int8: row of `EXCHANGES`, where its symmetries send ports A, B, C.
    """

    n: int
    skeleton: NDArray[np.int32]
    attachment: NDArray[np.int32]
    stabiliser: NDArray[np.int8]
    mirror: NDArray[np.int8]

    def __len__(self) -> int:
        """Count the cells."""
        return len(self.skeleton)

    def take(self, rows: NDArray[np.bool_] | NDArray[np.intp] | slice) -> Addresses:
        """Return the chosen rows."""
        return Addresses(
            self.n, self.skeleton[rows], self.attachment[rows], self.stabiliser[rows], self.mirror[rows]
        )


@dataclass(frozen=True, slots=True)
class CellTable:
    """All non-trivial cells of ``n`` capacitors, one row each.

    Attributes
    ----------
    words
        Shape (N, n, 4), int8: vertices as in `capmuster.enumerate.wiring`, ports A, B, C = 0, 1, 2.
    charges
        Shape (N, n), int32: charge into each plus plate in phase 1, coprime per skeleton.
    port_charges
        Shape (N, 3), int32: charge that ports A, B, C send per cycle; one is zero in a unity cell.
    potentials
        Shape (N, 2, n + 2), int32: potentials of the vertices of phase 1 and 2, up to one positive or
        negative factor and one constant per cell; unused vertices are 0.
    nodes
        Shape (N, 2), int8: internal nodes of phase 1 and 2.
    stabiliser
        Shape (N,), int32: number of renamings that leave the cell as it is.
    mirror
        Shape (N, 3), int8: where its symmetries send ports A, B, C.
    """

    words: NDArray[np.int8]
    charges: NDArray[np.int32]
    port_charges: NDArray[np.int32]
    potentials: NDArray[np.int32]
    nodes: NDArray[np.int8]
    stabiliser: NDArray[np.int32]
    mirror: NDArray[np.int8]

    def __len__(self) -> int:
        """Count the cells."""
        return len(self.words)

    @property
    def n(self) -> int:
        """Number of flying capacitors."""
        return int(self.words.shape[1])

    def take(self, rows: NDArray[np.bool_] | NDArray[np.intp] | slice) -> CellTable:
        """Return the chosen rows as a table."""
        return CellTable(*(getattr(self, name)[rows] for name in self.__slots__))

    @property
    def unity(self) -> NDArray[np.bool_]:
        """Where one port charge is zero, shape (N,)."""
        return np.asarray(np.any(self.port_charges == 0, axis=1))

    @property
    def voltages(self) -> NDArray[np.int32]:
        """Capacitor voltages in the unit of `potentials`, shape (N, n)."""
        plates = np.take_along_axis(
            self.potentials[:, 0, :], self.words[:, :, :2].reshape(len(self), 2 * self.n).astype(np.intp), 1
        )
        pairs = plates.reshape(len(self), self.n, 2)
        return np.asarray(pairs[:, :, 0] - pairs[:, :, 1])

    @property
    def degenerate(self) -> NDArray[np.bool_]:
        """Where some capacitor holds no voltage, shape (N,)."""
        return np.asarray(np.any(self.voltages == 0, axis=1))

    @property
    def triples(self) -> NDArray[np.int32]:
        """Absolute port charges over their common divisor, sorted, shape (N, 3)."""
        magnitudes = np.sort(np.abs(self.port_charges), axis=1)
        divisor = np.gcd.reduce(magnitudes, axis=1, keepdims=True)
        return np.asarray(magnitudes // divisor)


@lru_cache(maxsize=CENSUS_REACH)
def census(n: int) -> CellTable:
    """Return every irreducible cell of exactly ``n`` flying capacitors, degenerate and unity cells included.

    Five capacitors take seconds and half a gigabyte; `capmuster.enumerate.store` keeps them in a file.

    Raises
    ------
    CapmusterError
        When ``n`` is beyond the reach of the census.
    """
    check_reach(n)
    return cells_at(addresses(n))


def check_reach(n: int, most: int = CENSUS_REACH) -> None:
    """Refuse a number of capacitors that the census does not reach.

    Raises
    ------
    CapmusterError
        When it is below 1 or above ``most``.
    """
    if not 1 <= n <= most:
        raise CapmusterError(f"capacitors: {n} is beyond the census", accepted=f"1 to {most}")


def addresses(n: int, triple: Triple | None = None) -> Addresses:
    """List the cells in which two or three ports exchange charge, skeleton by skeleton.

    Parameters
    ----------
    n
        Number of flying capacitors.
    triple
        If given, only cells whose port charges are in this proportion.
    """
    table = skeletons(n)
    law = laws(table)
    parts = []
    for row in range(len(table)):
        outer = attachments(table, row)
        weights = law.weights[row, : law.slots[row]]
        a, b = (weights @ (outer.letters == port) for port in (0, 1))
        wanted = np.flatnonzero((a != 0) | (b != 0) if triple is None else _in_proportion(a, b, triple))
        parts.append(outer.take(wanted))
    return Addresses(
        n,
        np.repeat(np.arange(len(table), dtype=np.int32), [len(part.values) for part in parts]),
        np.concatenate([part.values for part in parts]),
        np.concatenate([part.stabiliser for part in parts]),
        np.concatenate([part.mirror for part in parts]),
    )


def _in_proportion(a: NDArray[np.int64], b: NDArray[np.int64], triple: Triple) -> NDArray[np.bool_]:
    """Where port charges a, b and -a - b are, but for order and signs, in the proportion of a triple."""
    charges = np.sort(np.abs(np.stack([a, b, a + b])), axis=0)
    small, middle, large = charges
    return np.asarray(
        (large > 0) & (small * triple[2] == large * triple[0]) & (middle * triple[2] == large * triple[1])
    )


def cells_at(where: Addresses, table: SkeletonTable | None = None) -> CellTable:
    """Work out wiring, charges and potentials of cells by their addresses.

    Parameters
    ----------
    where
        The addresses.
    table
        The skeletons that they refer to, if not the whole list of `skeletons`.
    """
    n, rows = where.n, len(where)
    table = skeletons(n) if table is None else table
    law = laws(table)
    result = CellTable(
        words=np.empty((rows, n, 4), np.int8),
        charges=table.charges[where.skeleton].astype(np.int32),
        port_charges=np.empty((rows, N_PORTS), np.int32),
        potentials=np.zeros((rows, 2, n + 2), np.int32),
        nodes=table.nodes[where.skeleton],
        stabiliser=where.stabiliser.astype(np.int32),
        mirror=EXCHANGES[where.mirror],
    )
    slots = law.weights.shape[1]
    for start in range(0, rows, _ROWS_AT_ONCE):
        part = slice(start, start + _ROWS_AT_ONCE)
        s = where.skeleton[part]
        letters = _letters(where.attachment[part], law.slots[s], slots)
        slot = law.slot_of[s].astype(np.intp)
        ports = np.take_along_axis(letters, np.maximum(slot, 0), axis=1)
        inner = table.words[s].reshape(len(s), 4 * n) + np.int8(N_PORTS - 1)
        result.words[part] = np.where(slot < 0, inner, ports).reshape(len(s), n, 4)

        # U is orthogonal to the port charges: U_A = 0, U_B = g_C, U_C = -g_B, times the determinant that the
        # internal potentials are divided by.
        weights = law.weights[s]
        g = np.stack([((letters == port) * weights).sum(axis=1) for port in range(N_PORTS)], axis=1)
        u = np.stack([np.zeros(len(s), np.int64), g[:, 2], -g[:, 1]], axis=1)
        result.port_charges[part] = g
        result.potentials[part, :, :N_PORTS] = (law.determinant[s, None] * u)[:, None]
        at_places = np.take_along_axis(u, letters.astype(np.intp), axis=1)
        internal = np.einsum("ris,rs->ri", law.potentials[s], at_places)
        for node in range(n - 1):
            # Internal nodes of phase 1 come first; how many there are depends on the skeleton.
            in_second = node >= result.nodes[part, 0]
            vertex = N_PORTS + node - np.where(in_second, result.nodes[part, 0], 0)
            result.potentials[start + np.arange(len(s)), in_second.astype(np.intp), vertex] = internal[
                :, node
            ]
    return result


def _letters(values: NDArray[np.int32], slots: NDArray[np.int8], most: int) -> NDArray[np.int8]:
    """Digits in base 3, first place most significant, shape (N, most); places beyond a row's slots hold 0."""
    letters = np.zeros((len(values), most), dtype=np.int8)
    rest = values * N_PORTS ** (most - slots.astype(np.int64))
    for slot in range(most - 1, -1, -1):
        rest, letters[:, slot] = np.divmod(rest, N_PORTS)
    return letters
