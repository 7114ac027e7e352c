"""What Kirchhoff's laws fix for a whole skeleton: linear forms in the ports that its outer plates meet.

With U the port potentials and P(place) the port at an outer place, internal potentials and capacitor
voltages are ``sum over places of coefficient x U[P(place)]``, and port charges are sums of weights over the
places of a port.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from capmuster.enumerate.skeletons import SkeletonTable

PLUS_LIKE = (0, 3)
"""Columns whose plate brings +q to its port over a cycle: plus in phase 1, minus in phase 2."""


@dataclass(frozen=True, slots=True)
class LawTable:
    """Laws of S skeletons with at most s outer places; integers throughout, unused slots hold 0.

    Attributes
    ----------
    slot_of
        Shape (S, 4 n), int8: slot of each flattened place, -1 where it meets an internal node.
    slots
        Shape (S,), int8: number of outer places.
    determinant
        Shape (S,), int32, positive: the divisor of all coefficients.
    potentials
        Shape (S, n - 1, s), int32: coefficients of the internal potentials, phase 1 first.
    voltages
        Shape (S, n, s), int32: coefficients of the capacitor voltages.
    weights
        Shape (S, s), int32: charge that each place sends per cycle.
    first_phase
        Shape (S, s), bool: places of phase 1.
    """

    slot_of: NDArray[np.int8]
    slots: NDArray[np.int8]
    determinant: NDArray[np.int32]
    potentials: NDArray[np.int32]
    voltages: NDArray[np.int32]
    weights: NDArray[np.int32]
    first_phase: NDArray[np.bool_]


def laws(skeletons: SkeletonTable) -> LawTable:
    """Solve the potentials of every skeleton.

    Kirchhoff's voltage law gives one line per capacitor, ``[D1', -D2'] x = r``, one more than there are
    unknowns; the line of the last capacitor follows from the others and is left out.
    """
    count, n = skeletons.words.shape[:2]
    flat = skeletons.words.reshape(count, 4 * n)
    outer = flat == 0
    slots = outer.sum(axis=1)
    slot_of = np.where(outer, np.cumsum(outer, axis=1) - 1, -1)
    row, place = np.nonzero(outer)
    slot = slot_of[row, place]
    capacitor, column = place // 4, place % 4
    plus_like = np.isin(column, PLUS_LIKE)
    shape = (count, int(slots.max(initial=0)))

    law = np.zeros((count, n, n - 1))
    inner_row, inner_place = np.nonzero(~outer)
    phase2 = inner_place % 4 > 1
    node = flat[inner_row, inner_place] - 1 + np.where(phase2, skeletons.nodes[inner_row, 0], 0)
    np.add.at(law, (inner_row, inner_place // 4, node), np.where(np.isin(inner_place % 4, PLUS_LIKE), 1, -1))
    determinant = np.rint(np.linalg.det(law[:, :-1]))
    inverse = np.rint(np.linalg.inv(law[:, :-1]) * determinant[:, None, None])
    inverse *= np.sign(determinant)[:, None, None]
    right = np.zeros((count, n, shape[1]))
    right[row, capacitor, slot] = np.where(plus_like, -1, 1)
    potentials = np.rint(inverse @ right[:, :-1])
    determinant = np.abs(determinant)

    voltages = np.zeros((count, n, shape[1]))
    for which, sign in ((0, 1), (1, -1)):
        vertex = skeletons.words[:, :, which]
        inside, i = np.nonzero(vertex)
        voltages[inside, i] += sign * potentials[inside, vertex[inside, i] - 1]
        here = column == which
        voltages[row[here], capacitor[here], slot[here]] += sign * determinant[row[here]]
    weights = np.zeros(shape, dtype=np.int32)
    weights[row, slot] = np.where(plus_like, 1, -1) * skeletons.charges[row, capacitor]
    first_phase = np.zeros(shape, dtype=bool)
    first_phase[row, slot] = column < 2  # noqa: PLR2004 -- two columns per phase
    return LawTable(
        slot_of=slot_of.astype(np.int8),
        slots=slots.astype(np.int8),
        determinant=determinant.astype(np.int32),
        potentials=potentials.astype(np.int32),
        voltages=voltages.astype(np.int32),
        weights=weights,
        first_phase=first_phase,
    )
