"""The complete census of irreducible cells, as structure-of-arrays tables.

Everything that a skeleton fixes is computed once; ports, charges and potentials of all its attachments follow in
a few matrix products on exact small integers.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from typing import TYPE_CHECKING

import numpy as np

from capmuster.enumerate.attachments import attachments
from capmuster.enumerate.errors import CapmusterError
from capmuster.enumerate.skeletons import skeletons

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator

    from numpy.typing import NDArray

    from capmuster.enumerate.attachments import Attachments
    from capmuster.enumerate.skeletons import Skeleton

CENSUS_REACH = 4
"""Most flying capacitors that the census lists."""
_N_PORTS = 3


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
        Shape (N, 2, n + 2), int32: potentials of the vertices of phase 1 and 2, up to one positive or negative
        factor and one constant per cell; unused vertices are 0.
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
        """Number of cells."""
        return len(self.words)

    @property
    def n(self) -> int:
        """Number of flying capacitors."""
        return self.words.shape[1]

    def take(self, rows: NDArray[np.bool_] | NDArray[np.intp] | slice) -> CellTable:
        """Return the chosen rows as a table."""
        return CellTable(*(getattr(self, name)[rows] for name in self.__slots__))

    @property
    def unity(self) -> NDArray[np.bool_]:
        """Where one port charge is zero, shape (N,)."""
        return np.any(self.port_charges == 0, axis=1)

    @property
    def voltages(self) -> NDArray[np.int32]:
        """Capacitor voltages in the unit of `potentials`, shape (N, n)."""
        plates = np.take_along_axis(
            self.potentials[:, 0, :], self.words[:, :, :2].reshape(len(self), -1).astype(np.intp), 1
        )
        pairs = plates.reshape(len(self), self.n, 2)
        return np.asarray(pairs[:, :, 0] - pairs[:, :, 1])

    @property
    def degenerate(self) -> NDArray[np.bool_]:
        """Where some capacitor holds no voltage, shape (N,)."""
        return np.any(self.voltages == 0, axis=1)

    @property
    def triples(self) -> NDArray[np.int32]:
        """Absolute port charges over their common divisor, sorted, shape (N, 3)."""
        magnitudes = np.sort(np.abs(self.port_charges), axis=1)
        divisor = np.gcd.reduce(magnitudes, axis=1, keepdims=True)
        return np.asarray(magnitudes // divisor)


def concatenate(tables: list[CellTable]) -> CellTable:
    """Put tables of the same number of capacitors behind each other."""
    return CellTable(*(np.concatenate([getattr(t, name) for t in tables]) for name in CellTable.__slots__))


@lru_cache(maxsize=CENSUS_REACH)
def census(n: int) -> CellTable:
    """Return every irreducible cell of exactly ``n`` flying capacitors, degenerate and unity cells included.

    Raises
    ------
    CapmusterError
        When ``n`` is beyond the reach of the census.
    """
    check_reach(n)
    return concatenate(list(cells_by_skeleton(n)))


def check_reach(n: int) -> None:
    """Refuse a number of capacitors that the census does not reach.

    Raises
    ------
    CapmusterError
        When it is below 1 or above `CENSUS_REACH`.
    """
    if not 1 <= n <= CENSUS_REACH:
        raise CapmusterError(f"capacitors: {n} is beyond the census", accepted=f"1 to {CENSUS_REACH}")


def cells_by_skeleton(n: int, progress: Callable[[int], None] = lambda _: None) -> Iterator[CellTable]:
    """Yield one table per skeleton; ``progress`` is told the number of cells so far."""
    done = 0
    for skeleton in skeletons(n):
        table = cells_of(skeleton, attachments(skeleton))
        done += len(table)
        progress(done)
        if len(table):
            yield table


def cells_of(skeleton: Skeleton, outer: Attachments) -> CellTable:
    """Work out charges and potentials of all attachments of one skeleton."""
    n, rows = skeleton.n, len(outer.letters)
    flat = np.tile((skeleton.words + (_N_PORTS - 1)).reshape(-1), (rows, 1))
    flat[:, outer.places] = outer.letters
    words = flat.reshape(rows, n, 4)

    # U is orthogonal to the port charges: U_A = 0, U_B = g_C, U_C = -g_B, times the determinant that the
    # internal potentials are divided by.
    g = outer.port_charges
    port_potentials = np.stack([np.zeros(rows, np.int64), g[:, 2], -g[:, 1]], axis=1)
    inverse, determinant = _left_inverse(skeleton)
    signs = np.zeros((n, len(outer.places)))
    for slot, place in enumerate(outer.places):
        signs[place // 4, slot] = -1 if place % 4 in (0, 3) else 1
    outer_potentials = np.take_along_axis(port_potentials, outer.letters.astype(np.intp), axis=1).astype(
        np.float64
    )
    internal = np.rint(outer_potentials @ (inverse @ signs).T).astype(np.int64)
    potentials = np.zeros((rows, 2, n + 2), dtype=np.int64)
    potentials[:, :, :_N_PORTS] = (determinant * port_potentials)[:, None, :]
    potentials[:, 0, _N_PORTS : _N_PORTS + skeleton.m1] = internal[:, : skeleton.m1]
    potentials[:, 1, _N_PORTS : _N_PORTS + skeleton.m2] = internal[:, skeleton.m1 :]
    return CellTable(
        words=words,
        charges=np.tile(skeleton.charges.astype(np.int32), (rows, 1)),
        port_charges=g.astype(np.int32),
        potentials=potentials.astype(np.int32),
        nodes=np.tile(np.array([skeleton.m1, skeleton.m2], dtype=np.int8), (rows, 1)),
        stabiliser=outer.stabiliser.astype(np.int32),
        mirror=outer.mirror,
    )


def _left_inverse(skeleton: Skeleton) -> tuple[NDArray[np.float64], int]:
    """Integer matrix and divisor that turn one residual voltage per capacitor into internal potentials.

    Kirchhoff's voltage law gives one line per capacitor, ``[D1', -D2'] x = r``, one more than there are unknowns;
    the line of the last capacitor follows from the others and is left out.
    """
    n = skeleton.n
    law = np.zeros((n, n - 1))
    for column in range(4):
        sign = 1 if column in (0, 3) else -1
        for i, node in enumerate(skeleton.words[:, column]):
            if node:
                law[i, node - 1 + (skeleton.m1 if column > 1 else 0)] += sign
    determinant = round(np.linalg.det(law[:-1]))
    inverse = np.zeros((n - 1, n))
    inverse[:, :-1] = np.rint(np.linalg.inv(law[:-1]) * determinant)
    return inverse, determinant
