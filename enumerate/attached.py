"""Cells of many skeletons in passing: attached, balanced, counted, and never all in memory at once."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from capmuster.enumerate.attachments import attachments
from capmuster.enumerate.laws import laws
from capmuster.enumerate.threads import one_thread

if TYPE_CHECKING:
    from collections.abc import Iterator

    from numpy.typing import NDArray

    from capmuster.enumerate.attachments import Attachments
    from capmuster.enumerate.laws import LawTable
    from capmuster.enumerate.skeletons import SkeletonTable
    from capmuster.enumerate.tally import Tally

MOST_AT_ONCE = 1 << 14
"""Most cells in one batch."""


@dataclass(frozen=True, slots=True)
class AttachedCells:
    """Non-degenerate cells of one skeleton, one per column; all numbers are whole and exact.

    Attributes
    ----------
    row
        Row of the skeleton in its table.
    outer
        The attachments.
    charges
        Shape (2, N), float32: charge that ports B and C send per cycle.
    first
        Shape (2, N), float32: the part of it sent in phase 1.
    potentials
        Shape (n - 1, N), float32: potentials of the internal nodes, phase 1 first. The ports' are U_A = 0,
        U_B = D g_C, U_C = -D g_B, with D the skeleton's determinant.
    voltages
        Shape (n, N), float32: capacitor voltages in the same unit.
    """

    row: int
    outer: Attachments
    charges: NDArray[np.float32]
    first: NDArray[np.float32]
    potentials: NDArray[np.float32]
    voltages: NDArray[np.float32]


def attached_cells(table: SkeletonTable, law: LawTable, tally: Tally) -> Iterator[AttachedCells]:
    """Attach the ports to every skeleton in all ways, at most `MOST_AT_ONCE` cells at a time.

    Parameters
    ----------
    table
        Skeletons.
    law
        Their laws.
    tally
        Is told of every cell, degenerate ones included; these are not yielded.
    """
    n = table.n
    # One form per internal potential and capacitor voltage, then charge per cycle, then charge in phase 1.
    forms = np.concatenate(
        [law.potentials, law.voltages, law.weights[:, None], (law.weights * law.first_phase)[:, None]], axis=1
    ).astype(np.float32)
    for row in range(len(table)):
        outer = attachments(table, row)
        own = np.ascontiguousarray(forms[row, :, : law.slots[row]])
        for start in range(0, len(outer.values), MOST_AT_ONCE):
            part = outer.take(slice(start, start + MOST_AT_ONCE))
            at_b = own @ (part.letters == 1).astype(np.float32)
            at_c = own @ (part.letters == 2).astype(np.float32)  # noqa: PLR2004 -- port C
            volts = at_b[:-2] * at_c[-2] - at_c[:-2] * at_b[-2]
            held = np.all(volts[n - 1 :], axis=0)
            tally.add(int(table.order[row]), part.stabiliser, at_b[-2], at_c[-2], held)
            kept = np.flatnonzero(held)
            yield AttachedCells(
                row=row,
                outer=part.take(kept),
                charges=np.stack([at_b[-2, kept], at_c[-2, kept]]),
                first=np.stack([at_b[-1, kept], at_c[-1, kept]]),
                potentials=volts[: n - 1, kept],
                voltages=volts[n - 1 :, kept],
            )


def tally_cells(table: SkeletonTable, tally: Tally) -> None:
    """Count the cells of skeletons, and do nothing else with them."""
    block = 1024
    with one_thread():
        for start in range(0, len(table), block):
            part = table.take(slice(start, start + block))
            for _ in attached_cells(part, laws(part), tally):
                pass
