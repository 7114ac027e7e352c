"""The certificate of completeness: the census counted a second time, by a route that lists nothing.

The number of *labelled* cells (capacitors, plates, phases and ports told apart, internal nodes not) follows from
each skeleton by a convolution of what its outer plates bring to the port charges. The orbits of the listed cells
must add up to it, for every triple. Both routes share the list of skeletons, which is counted on its own by
`capmuster.enumerate.skeletoncount`.
"""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass
from math import factorial, gcd
from typing import TYPE_CHECKING, TypeAlias

import numpy as np

from capmuster.enumerate.census import CENSUS_REACH, census
from capmuster.enumerate.skeletoncount import labelled_skeletons
from capmuster.enumerate.skeletons import skeletons

if TYPE_CHECKING:
    from collections.abc import Mapping

    from numpy.typing import NDArray

    from capmuster.enumerate.skeletons import Skeleton

Triple: TypeAlias = tuple[int, int, int]
_PORT_ORDERS = 6
_PHASE_ORDERS = 2


@dataclass(frozen=True, slots=True)
class Certificate:
    """Two counts of everything, for exactly ``n`` capacitors.

    Attributes
    ----------
    n
        Number of flying capacitors.
    cells
        Cells with three non-zero port charges, per triple, degenerate ones included.
    labelled_listed
        Labelled cells per triple, from the orbits of the listed cells.
    labelled_counted
        The same number from the convolution.
    skeletons_listed, skeletons_counted
        Labelled skeletons from the list, and from the separate generator.
    """

    n: int
    cells: Mapping[Triple, int]
    labelled_listed: Mapping[Triple, int]
    labelled_counted: Mapping[Triple, int]
    skeletons_listed: int
    skeletons_counted: int

    @property
    def differences(self) -> tuple[str, ...]:
        """What the two routes disagree on, in words; empty when the census is certified."""
        found = [
            f"triple {a},{b},{c}: {self.labelled_listed.get((a, b, c), 0)} labelled cells listed, "
            f"{self.labelled_counted.get((a, b, c), 0)} counted"
            for a, b, c in sorted({*self.labelled_listed, *self.labelled_counted})
            if self.labelled_listed.get((a, b, c), 0) != self.labelled_counted.get((a, b, c), 0)
        ]
        if self.skeletons_listed != self.skeletons_counted:
            found.append(
                f"labelled skeletons: {self.skeletons_listed} listed, {self.skeletons_counted} counted"
            )
        return tuple(found)

    @property
    def holds(self) -> bool:
        """Whether both routes agree on everything."""
        return not self.differences


def certify(n: int) -> Certificate:
    """Count the census of ``n`` capacitors both ways.

    Raises
    ------
    CapmusterError
        When ``n`` is beyond the reach of the census.
    """
    table = census(n)
    table = table.take(~table.unity)
    cells: Counter[Triple] = Counter()
    listed: Counter[Triple] = Counter()
    triples, row_of = np.unique(table.triples, axis=0, return_inverse=True)
    orbits = labellings(n) * _PORT_ORDERS // table.stabiliser.astype(np.int64)
    for k, (a, b, c) in enumerate(triples.tolist()):
        cells[a, b, c] = int(np.count_nonzero(row_of == k))
        listed[a, b, c] = int(orbits[row_of == k].sum())
    counted: Counter[Triple] = Counter()
    skeletons_listed = 0
    for skeleton in skeletons(n):
        orbit = labellings(n) // len(skeleton.symmetries)
        skeletons_listed += orbit
        for triple, strings in attachments_counted(skeleton).items():
            counted[triple] += orbit * strings
    return Certificate(n, cells, listed, counted, skeletons_listed, labelled_skeletons(n))


def labellings(n: int) -> int:
    """Ways to tell capacitors, plates and phases apart."""
    return factorial(n) * 2**n * _PHASE_ORDERS


def attachments_counted(skeleton: Skeleton) -> Counter[Triple]:
    """Number of port strings of a skeleton per triple, by convolution over (g_A, g_B)."""
    steps = _steps(skeleton)
    reach = sum(max(max(abs(a), abs(b)) for a, b in step) for step in steps)
    strings = np.zeros((2 * reach + 1, 2 * reach + 1), dtype=np.int64)
    strings[reach, reach] = 1
    for step in steps:
        strings = sum((np.roll(strings, shift, axis=(0, 1)) for shift in step), np.zeros_like(strings))
    return _by_triple(strings, reach)


def _steps(skeleton: Skeleton) -> list[list[tuple[int, int]]]:
    """What each capacitor can bring to (g_A, g_B) in each phase."""
    steps = []
    for word, charge in zip(skeleton.words.tolist(), skeleton.charges.tolist(), strict=True):
        for phase, taken in ((word[:2], charge), (word[2:], -charge)):
            plates = [weight for vertex, weight in zip(phase, (taken, -taken), strict=True) if vertex == 0]
            if len(plates) == 1:
                (w,) = plates
                steps.append([(w, 0), (0, w), (0, 0)])
            elif plates:
                w, _ = plates
                steps.append([(w, -w), (-w, w), (w, 0), (-w, 0), (0, w), (0, -w)])
    return steps


def _by_triple(strings: NDArray[np.int64], reach: int) -> Counter[Triple]:
    found: Counter[Triple] = Counter()
    for row, column in zip(*np.nonzero(strings), strict=True):
        a, b = int(row) - reach, int(column) - reach
        if a and b and a + b:
            small, middle, large = sorted((abs(a), abs(b), abs(a + b)))
            divisor = gcd(small, middle)
            found[small // divisor, middle // divisor, large // divisor] += int(strings[row, column])
    return found


__all__ = ["CENSUS_REACH", "Certificate", "attachments_counted", "certify", "labellings"]
