"""The certificate of completeness: the census counted a second time, by a route that lists nothing.

The number of *labelled* cells (capacitors, plates, phases and ports told apart, internal nodes not) follows
from each skeleton by a convolution of what its outer plates bring to the port charges. The orbits of the
listed cells must add up to it, for every triple. Both routes share the list of skeletons, which is counted
on its own by `capmuster.enumerate.skeletoncount`.
"""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from capmuster.enumerate.attached import tally_cells
from capmuster.enumerate.census import check_reach
from capmuster.enumerate.skeletoncount import MOST_CAPACITORS, labelled_skeletons
from capmuster.enumerate.skeletons import skeletons
from capmuster.enumerate.tally import Tally, labellings, triple_of

if TYPE_CHECKING:
    from collections.abc import Mapping

    from numpy.typing import NDArray

    from capmuster.enumerate.skeletons import SkeletonTable
    from capmuster.enumerate.tally import Triple

COUNT_REACH = MOST_CAPACITORS
"""Most flying capacitors that are counted."""
_BOTH_PLATES = 64


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
    """Count the census of ``n`` capacitors both ways; six take a minute.

    Raises
    ------
    CapmusterError
        When ``n`` is beyond the reach of the count.
    """
    check_reach(n, COUNT_REACH)
    tally = Tally.empty(n)
    tally_cells(skeletons(n), tally)
    return certificate_of(tally)


def certificate_of(tally: Tally) -> Certificate:
    """Hold the tally of a complete listing against the counts that list nothing."""
    table = skeletons(tally.n)
    return Certificate(
        n=tally.n,
        cells=_with_three_ports(tally.per_triple(tally.held + tally.degenerate)),
        labelled_listed=_with_three_ports(tally.per_triple(tally.labelled)),
        labelled_counted=labelled_cells(table),
        skeletons_listed=int((labellings(tally.n) // table.order).sum()),
        skeletons_counted=labelled_skeletons(tally.n),
    )


def _with_three_ports(counts: Mapping[Triple, int]) -> dict[Triple, int]:
    return {triple: count for triple, count in counts.items() if triple[0]}


def labelled_cells(table: SkeletonTable) -> dict[Triple, int]:
    """Count the labelled cells of skeletons per triple, by convolution over (g_A, g_B).

    Skeletons whose outer plates bring the same charges share one convolution; so do those in which every
    charge has the other sign.
    """
    steps, which = np.unique(_steps(table), axis=0, return_inverse=True)
    weights = np.zeros(len(steps), dtype=np.int64)
    np.add.at(weights, which.reshape(-1), labellings(table.n) // table.order)
    total: Counter[Triple] = Counter()
    for step, weight in zip(steps.tolist(), weights.tolist(), strict=True):
        for triple, strings in attachments_counted(step).items():
            total[triple] += weight * strings
    return dict(sorted(total.items()))


def _steps(table: SkeletonTable) -> NDArray[np.int8]:
    """List what each capacitor brings to the ports in each phase, sorted per skeleton, shape (S, 2 n).

    An outer plate alone brings its charge, with its sign; 0 stands for none; 64 + |charge| for a capacitor
    between two ports.
    """
    outer = table.words == 0
    parts = []
    for phase, sign in ((0, 1), (1, -1)):
        plus, minus = outer[:, :, 2 * phase], outer[:, :, 2 * phase + 1]
        alone = sign * table.charges * (plus.astype(np.int64) - minus)
        parts.append(np.where(plus & minus, _BOTH_PLATES + np.abs(table.charges), alone))
    steps = np.concatenate(parts, axis=1)
    turned = np.where(steps < _BOTH_PLATES // 2, -steps, steps)
    steps, turned = np.sort(steps, axis=1), np.sort(turned, axis=1)
    differ = steps != turned
    first = np.take_along_axis(steps - turned, differ.argmax(axis=1)[:, None], axis=1)
    return np.where(first <= 0, steps, turned).astype(np.int8)


def attachments_counted(steps: list[int]) -> Counter[Triple]:
    """Count the port strings with given steps (as in ``_steps``) per triple."""
    moves = []
    for step in steps:
        if step > _BOTH_PLATES // 2:
            w = step - _BOTH_PLATES
            moves.append([(w, -w), (-w, w), (w, 0), (-w, 0), (0, w), (0, -w)])
        elif step:
            moves.append([(step, 0), (0, step), (0, 0)])
    reach = sum(max(max(abs(a), abs(b)) for a, b in move) for move in moves)
    strings = np.zeros((2 * reach + 1, 2 * reach + 1), dtype=np.int64)
    strings[reach, reach] = 1
    for move in moves:
        strings = sum((np.roll(strings, shift, axis=(0, 1)) for shift in move), np.zeros_like(strings))
    found: Counter[Triple] = Counter()
    rows, columns = np.nonzero(strings)
    for a, b, count in zip(
        (rows - reach).tolist(), (columns - reach).tolist(), strings[rows, columns].tolist(), strict=True
    ):
        if a and b and a + b:
            found[triple_of(a, b)] += count
    return found
