"""Cells counted while they are listed, degenerate ones included."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from math import factorial, gcd
from typing import TYPE_CHECKING, TypeAlias

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

Triple: TypeAlias = tuple[int, int, int]
PORT_ORDERS = 6
_PHASE_ORDERS = 2
_MOST_CHARGE = 40
"""Above the largest port charge of six capacitors; a larger one is refused, never miscounted."""
_SPAN = 2 * _MOST_CHARGE + 1


@dataclass(slots=True)
class Tally:
    """Cells per pair of port charges (g_B, g_C).

    Attributes
    ----------
    n
        Number of flying capacitors.
    held, degenerate
        Shape (81 * 81,), int64: cells whose capacitors all hold a voltage, and the others.
    labelled
        Shape (81 * 81,), int64: labelled cells that both stand for.
    """

    n: int
    held: NDArray[np.int64]
    degenerate: NDArray[np.int64]
    labelled: NDArray[np.int64]

    @classmethod
    def empty(cls, n: int) -> Tally:
        """Start counting."""
        return cls(n, *(np.zeros(_SPAN**2, dtype=np.int64) for _ in range(3)))

    def add(
        self,
        order: int,
        stabiliser: NDArray[np.int8],
        g_b: NDArray[np.float32],
        g_c: NDArray[np.float32],
        held: NDArray[np.bool_],
    ) -> None:
        """Count cells of one skeleton.

        Parameters
        ----------
        order
            Number of renamings that keep the skeleton.
        stabiliser
            Number of them that keep the cell, shape (N,).
        g_b, g_c
            Port charges, whole numbers, shape (N,).
        held
            Whether every capacitor holds a voltage, shape (N,).
        """
        key = ((g_b + _MOST_CHARGE) * _SPAN + (g_c + _MOST_CHARGE)).astype(np.intp)
        if max(np.abs(g_b).max(), np.abs(g_c).max()) > _MOST_CHARGE:
            raise OverflowError("a port charge is larger than the tally counts")
        counted = np.bincount(key, minlength=_SPAN**2)
        with_voltage = np.bincount(key[held], minlength=_SPAN**2)
        self.held += with_voltage
        self.degenerate += counted - with_voltage
        ways = labellings(self.n) * PORT_ORDERS
        if order == 1:
            self.labelled += counted * ways
        else:
            for fixed in np.unique(stabiliser).tolist():
                self.labelled += np.bincount(key[stabiliser == fixed], minlength=_SPAN**2) * (ways // fixed)

    def merge(self, other: Tally) -> None:
        """Add what another tally has counted."""
        self.held += other.held
        self.degenerate += other.degenerate
        self.labelled += other.labelled

    def per_triple(self, counts: NDArray[np.int64]) -> dict[Triple, int]:
        """Add up one of the counts per triple; (0, 1, 1) are unity cells."""
        totals: dict[Triple, int] = {}
        for key in np.flatnonzero(counts).tolist():
            b, c = divmod(key, _SPAN)
            triple = triple_of(b - _MOST_CHARGE, c - _MOST_CHARGE)
            if triple != (0, 0, 0):
                totals[triple] = totals.get(triple, 0) + int(counts[key])
        return dict(sorted(totals.items()))


@lru_cache(maxsize=1 << 16)
def triple_of(g_a: int, g_b: int) -> Triple:
    """Absolute port charges over their common divisor, sorted; two of the charges are enough."""
    divisor = gcd(g_a, g_b) or 1
    small, middle, large = sorted((abs(g_a) // divisor, abs(g_b) // divisor, abs(g_a + g_b) // divisor))
    return small, middle, large


def triple_numbers(
    charge_b: NDArray[np.integer], charge_c: NDArray[np.integer]
) -> tuple[tuple[Triple, ...], NDArray[np.intp]]:
    """Sort the triples of cells, and give each cell the place of its own, shape (N,)."""
    key = (charge_b.astype(np.intp) + _MOST_CHARGE) * _SPAN + charge_c + _MOST_CHARGE
    present = np.flatnonzero(np.bincount(key, minlength=_SPAN**2))
    of_key = [triple_of(k // _SPAN - _MOST_CHARGE, k % _SPAN - _MOST_CHARGE) for k in present.tolist()]
    triples = tuple(sorted(set(of_key)))
    place = np.zeros(_SPAN**2, dtype=np.intp)
    place[present] = [triples.index(triple) for triple in of_key]
    return triples, place[key]


def labellings(n: int) -> int:
    """Ways to tell capacitors, plates and phases apart."""
    return factorial(n) * (1 << n) * _PHASE_ORDERS
