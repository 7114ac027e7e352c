"""Converters of the census: cells in all their roles, in canonical form, as structure-of-arrays tables."""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction
from functools import lru_cache
from math import lcm
from typing import TYPE_CHECKING

import numpy as np

from capmuster.enumerate.attachments import EXCHANGES
from capmuster.enumerate.canonicalbatch import canonical_batch
from capmuster.enumerate.census import addresses, cells_at, census, check_reach
from capmuster.enumerate.errors import CapmusterError
from capmuster.enumerate.identity import MOST_READABLE, converter_id, id_of_number, wiring_number
from capmuster.enumerate.tally import triple_of
from capmuster.enumerate.wiring import Converter, format_words

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from capmuster.enumerate.census import CellTable
    from capmuster.enumerate.tally import Triple

_I, _O = 1, 2
_MOST_REMEMBERED = 4  # five capacitors can take a hundred megabytes for a single ratio
ROLES = EXCHANGES
"""The names that ports A, B, C take: 0 = G, 1 = I, 2 = O; row k is role k of `capmuster.enumerate.wiring`."""
_ORDER = np.array([9, 3, 1])
_LETTERS = np.frombuffer(b"GIOabcdefghijklmnopqrstuvwxyz", dtype=np.uint8)


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
        """Count the converters."""
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

    def codes(self) -> list[str]:
        """Wiring code of every converter."""
        count, n = len(self), self.n
        if n + 2 > len(_LETTERS):
            return [self.code(row) for row in range(count)]
        # Every vertex is one letter, so all codes are equally long and can be set like type.
        text = np.full((count, n, 8), ord(" "), dtype=np.uint8)
        text[:, :, [0, 2, 4, 6]] = _LETTERS[self.words]
        text[:, :, [1, 5]] = ord("-")
        text[:, :, 3] = ord("/")
        width = 8 * n - 1
        return [
            code.decode()
            for code in np.ascontiguousarray(text.reshape(count, 8 * n)[:, :width])
            .view(f"S{width}")
            .reshape(-1)
            .tolist()
        ]

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


def converters(n: int, ratio: Fraction | None = None) -> ConverterTable:
    """Return the census converters of exactly ``n`` capacitors, of one ratio or of all.

    All converters of five capacitors are some eight million; a census file gives them ratio by ratio.

    Raises
    ------
    CapmusterError
        When ``n`` is beyond the census.
    """
    check_reach(n)
    return _remembered(n, ratio) if n <= _MOST_REMEMBERED else _listed(n, ratio)


def _listed(n: int, ratio: Fraction | None) -> ConverterTable:
    cells = census(n) if ratio is None else cells_at(addresses(n, triple_of_ratio(ratio)))
    return converters_of(cells, ratio)


_remembered = lru_cache(maxsize=64)(_listed)


def triple_of_ratio(ratio: Fraction) -> Triple:
    """Triple of the cells that reach a ratio other than 0; (0, 1, 1) for M = 1."""
    return triple_of(ratio.numerator, -ratio.denominator)


def ratios_of_triple(triple: Triple) -> tuple[Fraction, ...]:
    """Ratios that the cells of a triple reach, ascending; (0, 1, 1) reaches 1."""
    a, b, c = triple
    if a == 0:
        return (Fraction(1),)
    found = {Fraction(-a, b), Fraction(-b, a)}
    found |= {Fraction(p, q) for p, q in ((a, c), (c, a), (b, c), (c, b))}
    return tuple(sorted(found))


def converters_of(cells: CellTable, ratio: Fraction | None = None) -> ConverterTable:
    """Give cells all their roles (of one ratio or of all); a role that a symmetry repeats is given once."""
    cells = cells.take(~cells.degenerate)
    rows, roles = roles_of(cells.port_charges, cells.mirror, ratio)
    return in_roles(cells.take(rows), roles)


def roles_of(
    port_charges: NDArray[np.integer], mirror: NDArray[np.int8], ratio: Fraction | None = None
) -> tuple[NDArray[np.intp], NDArray[np.int8]]:
    """List the distinct roles of cells, of one ratio or of all.

    Parameters
    ----------
    port_charges
        Charges of ports A, B, C, shape (N, 3).
    mirror
        Where the cell's symmetries send A, B, C, shape (N, 3).
    ratio
        The ratio, or None.

    Returns
    -------
    rows, roles
        Row of the cell, and row of `ROLES`, for each converter.
    """
    found_rows, found_roles = [], []
    for index, role in enumerate(ROLES):
        g_in, g_out = (port_charges[:, int(np.flatnonzero(role == name)[0])] for name in (_I, _O))
        wanted = (g_in != 0) & (g_out != 0)
        if ratio is not None:
            wanted &= g_in * ratio.denominator == -ratio.numerator * g_out
        rows = np.flatnonzero(wanted)
        # A symmetry of the cell sends this role to another one: the lesser of the two stands for both.
        rows = rows[int(role @ _ORDER) <= role[mirror[rows]] @ _ORDER]
        found_rows.append(rows)
        found_roles.append(np.full(len(rows), index, dtype=np.int8))
    return np.concatenate(found_rows), np.concatenate(found_roles)


def in_roles(cells: CellTable, roles: NDArray[np.int8]) -> ConverterTable:
    """Name the ports of each cell by its row of `ROLES`; the converters come in canonical form."""
    count, n = len(cells), cells.n
    names = np.concatenate([ROLES[roles], np.tile(np.arange(3, n + 3, dtype=np.int8), (count, 1))], axis=1)
    words = np.take_along_axis(names, cells.words.reshape(count, 4 * n).astype(np.intp), axis=1)
    port = np.argsort(ROLES, axis=1)[roles]
    order = np.concatenate([port, np.tile(np.arange(3, n + 2), (count, 1))], axis=1)
    potentials = np.take_along_axis(cells.potentials, order[:, None, :], axis=2).astype(np.int64)
    used = np.arange(n + 2) < (cells.nodes[:, :, None] + 3)
    potentials = np.where(used, potentials - potentials[:, :, :1], 0)
    sign = np.sign(potentials[:, 0, _I])
    g = np.take_along_axis(cells.port_charges, port, axis=1).astype(np.int64)
    flow = np.sign(g[:, _I])
    return canonical_batch(
        ConverterTable(
            words=words.reshape(count, n, 4),
            charges=cells.charges.astype(np.int64) * flow[:, None],
            port_charges=g * flow[:, None],
            potentials=potentials * sign[:, None, None],
            scale=potentials[:, 0, _I] * sign,
            nodes=cells.nodes,
        )
    )


def table_of(members: Sequence[Converter]) -> ConverterTable:
    """Put converters of one size into a table, in their order.

    Raises
    ------
    CapmusterError
        When charges and potentials of one are too large for sums of their products to be exact in 64 bits.
    """
    n = members[0].n
    rows = len(members)
    potentials = np.zeros((rows, 2, n + 2), dtype=np.int64)
    scale = np.ones(rows, dtype=np.int64)
    for row, member in enumerate(members):
        both = member.balance.potentials
        divisor = lcm(*(value.denominator for value in (*both[0], *both[1])))
        _refuse_overflow(member, divisor)
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


def _refuse_overflow(member: Converter, scale: int) -> None:
    """Bound the largest sum that is formed: charge x blocking voltage over at most 3 n + 1 switches."""
    charge = sum(map(abs, member.balance.charges))
    highest = max(abs(value) for phase in member.balance.potentials for value in phase) * scale
    if (3 * member.n + 1) * charge * 2 * highest >= 1 << 63:
        raise CapmusterError(
            f"converter {member.id}: its charges and potentials are too large to rank",
            accepted="converters whose charges and potentials have fewer digits",
        )
