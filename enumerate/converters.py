"""Converters of the census: cells in all their roles, in canonical form, as structure-of-arrays tables."""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction
from functools import lru_cache
from itertools import permutations
from math import gcd
from typing import TYPE_CHECKING

import numpy as np

from capmuster.enumerate.canonicalbatch import canonical_batch
from capmuster.enumerate.census import census
from capmuster.enumerate.identity import MOST_READABLE, converter_id, id_of_number, wiring_number
from capmuster.enumerate.wiring import Converter, format_words

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from capmuster.enumerate.census import CellTable

_G, _I, _O = range(3)


@dataclass(frozen=True, slots=True)
class ConverterTable:
    """Non-degenerate converters of ``n`` flying capacitors in canonical form, one row each.

    Attributes
    ----------
    words
        Shape (N, n, 4), int8: plus and minus vertex in phase 1, then phase 2; G, I, O = 0, 1, 2.
    charges
        Shape (N, n), int64: charge into each plus plate in phase 1; the input delivers charge.
    port_charges
        Shape (N, 3), int64: charge that G, I, O send into the converter per cycle.
    potentials
        Shape (N, 2, n + 2), int64: potentials of the vertices in phases 1 and 2, U_G = 0, U_I = `scale`.
    scale
        Shape (N,), int64: the unit of `potentials`, as a number per volt of input.
    nodes
        Shape (N, 2), int8: internal nodes in phases 1 and 2.
    """

    words: NDArray[np.int8]
    charges: NDArray[np.int64]
    port_charges: NDArray[np.int64]
    potentials: NDArray[np.int64]
    scale: NDArray[np.int64]
    nodes: NDArray[np.int8]

    def __len__(self) -> int:
        """Number of converters."""
        return len(self.words)

    @property
    def n(self) -> int:
        """Number of flying capacitors."""
        return int(self.words.shape[1])

    def take(self, rows: NDArray[np.bool_] | NDArray[np.intp] | slice) -> ConverterTable:
        """Return the chosen rows as a table."""
        return ConverterTable(*(getattr(self, name)[rows] for name in self.__slots__))

    @property
    def voltages(self) -> NDArray[np.int64]:
        """Capacitor voltages in the unit of `potentials`, shape (N, n)."""
        return (
            _plate_potentials(self.words, self.potentials, 0)[..., 0]
            - _plate_potentials(self.words, self.potentials, 0)[..., 1]
        )

    def ratio(self, row: int) -> Fraction:
        """M of one converter."""
        return Fraction(-int(self.port_charges[row, _I]), int(self.port_charges[row, _O]))

    @property
    def ratios(self) -> NDArray[np.float64]:
        """M of every converter, shape (N,)."""
        return np.asarray(-self.port_charges[:, _I] / self.port_charges[:, _O])

    def code(self, row: int) -> str:
        """Wiring code of one converter."""
        return format_words(self.words[row].tolist())

    def ids(self) -> list[str]:
        """Id of every converter."""
        if self.n > MOST_READABLE:
            return [converter_id([tuple(word) for word in words]) for words in self.words.tolist()]
        numbers = wiring_number(self.words, self.nodes[:, 0].astype(np.int64))
        return [id_of_number(number, self.n) for number in numbers.tolist()]

    def converter(self, row: int) -> Converter:
        """One row as an object."""
        return Converter.of(self.words[row].tolist())


def _plate_potentials(
    words: NDArray[np.int8], potentials: NDArray[np.int64], phase: int
) -> NDArray[np.int64]:
    """Potentials of plus and minus plates in a phase, shape (N, n, 2)."""
    rows, n, _ = words.shape
    vertices = words[:, :, 2 * phase : 2 * phase + 2].reshape(rows, 2 * n).astype(np.intp)
    return np.take_along_axis(potentials[:, phase], vertices, axis=1).reshape(rows, n, 2)


@lru_cache(maxsize=64)
def converters(n: int, ratio: Fraction | None = None) -> ConverterTable:
    """Return the census converters of exactly ``n`` capacitors, of one ratio or of all.

    Raises
    ------
    CapmusterError
        When ``n`` is beyond the census.
    """
    return converters_of(census(n), ratio)


def converters_of(cells: CellTable, ratio: Fraction | None = None) -> ConverterTable:
    """Give cells all their roles (of one ratio or of all); a role that a symmetry repeats is given once."""
    tables = [_in_role(cells, role, ratio) for role in permutations(range(3))]
    return canonical_batch(
        ConverterTable(
            *(np.concatenate([getattr(t, name) for t in tables]) for name in ConverterTable.__slots__)
        )
    )


def _in_role(cells: CellTable, role: tuple[int, ...], ratio: Fraction | None) -> ConverterTable:
    """Cells with ports A, B, C named ``role`` (0 = G, 1 = I, 2 = O), in no canonical form yet."""
    port = [role.index(name) for name in (_G, _I, _O)]
    names = np.array(role, dtype=np.int8)
    g = cells.port_charges[:, port]
    wanted = (g[:, _I] != 0) & (g[:, _O] != 0)
    if ratio is not None:
        wanted &= g[:, _I] * ratio.denominator == -ratio.numerator * g[:, _O]
    # A symmetry of the cell sends this role to another one: the lesser of the two stands for both.
    image = names[cells.mirror] @ np.array([9, 3, 1])
    wanted &= int(names @ np.array([9, 3, 1])) <= image
    wanted &= ~cells.degenerate
    kept = cells.take(wanted)
    g = kept.port_charges[:, port].astype(np.int64)
    words = kept.words
    new = np.concatenate([names, np.arange(3, kept.n + 3, dtype=np.int8)])[words]
    potentials = kept.potentials.astype(np.int64)
    order = port + list(range(3, kept.n + 2))
    potentials = potentials[:, :, order]
    ground = potentials[:, :, :1].copy()
    used = np.arange(kept.n + 2) < (kept.nodes[:, :, None] + 3)
    potentials = np.where(used, potentials - ground, 0)
    sign = np.sign(potentials[:, 0, _I])
    flow = np.sign(g[:, _I])
    return ConverterTable(
        words=new,
        charges=kept.charges.astype(np.int64) * flow[:, None],
        port_charges=g * flow[:, None],
        potentials=potentials * sign[:, None, None],
        scale=potentials[:, 0, _I] * sign,
        nodes=kept.nodes,
    )


def table_of(members: Sequence[Converter]) -> ConverterTable:
    """Put converters of one size into a table, in their order."""
    n = members[0].n
    rows = len(members)
    potentials = np.zeros((rows, 2, n + 2), dtype=np.int64)
    scale = np.ones(rows, dtype=np.int64)
    for row, member in enumerate(members):
        both = member.balance.potentials
        divisor = 1
        for value in (*both[0], *both[1]):
            divisor = divisor * value.denominator // gcd(divisor, value.denominator)
        scale[row] = divisor
        for phase in (0, 1):
            potentials[row, phase, : len(both[phase])] = [int(value * divisor) for value in both[phase]]
    return ConverterTable(
        words=np.array([member.words for member in members], dtype=np.int8),
        charges=np.array([member.balance.charges for member in members], dtype=np.int64),
        port_charges=np.array([member.balance.port_charges for member in members], dtype=np.int64),
        potentials=potentials,
        scale=scale,
        nodes=np.array(
            [[member.internal_nodes(1), member.internal_nodes(2)] for member in members], dtype=np.int8
        ),
    )
