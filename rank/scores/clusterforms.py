"""The cluster matrix of a skeleton, linear in the ports that its outer plates meet.

A cluster is a pair (vertex of phase 1, vertex of phase 2). How many plates it holds, and how much charge
flows into them in phase 1, are sums over plates. A plate between internal nodes is constant; a plate that
meets a port in one phase is linear in "which port is it"; a plate that meets ports in both phases needs
products of two such indicators. So the matrices of all attachments of a skeleton are one matrix product:
forms x indicators.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import permutations
from typing import TYPE_CHECKING, TypeAlias

import numpy as np

from capmuster.enumerate.attachments import N_PORTS

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from capmuster.enumerate.laws import LawTable
    from capmuster.enumerate.skeletons import SkeletonTable

    _At: TypeAlias = tuple[NDArray[np.intp], ...]
    _Index: TypeAlias = NDArray[np.intp] | int

COUNT_BITS = 6
"""A cluster's charge and its number of plates travel in one integer: charge x 2^6 + plates."""
_PAIRS = np.array(list(permutations(range(N_PORTS), 2)))


@dataclass(frozen=True, slots=True)
class ClusterForms:
    """Forms of S skeletons with m1 and m2 internal nodes each.

    Attributes
    ----------
    forms
        Shape (S, (m1 + 3) (m2 + 3), F), float32, whole numbers. Entries of a port with itself are 0: a port's
        own cluster follows from Kirchhoff's current law. Indicators of a skeleton with s outer places and d
        plates that meet ports in both phases: the constant 1; then for each port "this place meets it" for
        all places; then for each ordered pair of different ports "it meets these" for all those plates.
        Forms beyond its 1 + 3 s + 6 d indicators are 0.
    doubles
        Shape (S, 2, D), int: places in phase 1 and in phase 2 of the plates that meet ports in both.
    count
        Shape (S,), int: d.
    """

    forms: NDArray[np.float32]
    doubles: NDArray[np.intp]
    count: NDArray[np.intp]

    def codes(self, row: int, letters: NDArray[np.int8]) -> NDArray[np.float32]:
        """Cluster matrices for the attachments of one skeleton, ``letters`` of shape (s, N).

        Returns
        -------
        Array of float32, shape ((m1 + 3) (m2 + 3), N), whole numbers: charge x 2^6 + plates.
        """
        s, d = len(letters), int(self.count[row])
        indicators = np.empty((1 + N_PORTS * s + len(_PAIRS) * d, letters.shape[1]), dtype=np.float32)
        indicators[0] = 1
        meets = indicators[1 : 1 + N_PORTS * s].reshape(N_PORTS, s, letters.shape[1])
        for port in range(N_PORTS):
            meets[port] = letters == port
        first, second = self.doubles[row, :, :d]
        pairs = indicators[1 + N_PORTS * s :].reshape(len(_PAIRS), d, letters.shape[1])
        for pair, (one, two) in zip(pairs, _PAIRS, strict=True):
            for k in range(d):
                np.multiply(meets[one, first[k]], meets[two, second[k]], out=pair[k])
        return self.forms[row, :, : len(indicators)] @ indicators


def cluster_forms(skeletons: SkeletonTable, law: LawTable) -> ClusterForms:
    """Build the forms of skeletons that have equally many internal nodes in each phase."""
    size, n = skeletons.words.shape[:2]
    rows, columns = (skeletons.nodes[0].astype(np.intp) + N_PORTS).tolist()
    s = law.slots.astype(np.intp)
    vertex = skeletons.words.astype(np.intp) + N_PORTS - 1
    slot = law.slot_of.reshape(size, n, 4).astype(np.intp)
    # Per plate, shape (S, n, 2): vertex and slot in either phase, and what it brings to its cluster.
    first, second = vertex[:, :, :2], vertex[:, :, 2:]
    slot1, slot2 = slot[:, :, :2], slot[:, :, 2:]
    load = skeletons.charges[:, :, None] * np.array([1, -1]) * 2**COUNT_BITS + 1
    both = (slot1 >= 0) & (slot2 >= 0)
    count = both.sum(axis=(1, 2))
    place_of = np.cumsum(both.reshape(size, -1), axis=1).reshape(both.shape) - 1

    forms = np.zeros((size, rows, columns, 1 + int((N_PORTS * s + len(_PAIRS) * count).max())), np.float32)

    def add(at: _At, row: _Index, column: _Index, indicator: _Index) -> None:
        index = np.broadcast_arrays(at[0], row, column, indicator)
        np.add.at(forms, tuple(index), load[at])

    at = np.nonzero((slot1 < 0) & (slot2 < 0))
    add(at, first[at], second[at], 0)
    for port in range(N_PORTS):
        at = np.nonzero((slot1 >= 0) & (slot2 < 0))
        add(at, port, second[at], 1 + port * s[at[0]] + slot1[at])
        at = np.nonzero((slot1 < 0) & (slot2 >= 0))
        add(at, first[at], port, 1 + port * s[at[0]] + slot2[at])
    at = np.nonzero(both)
    for k, (one, two) in enumerate(_PAIRS.tolist()):
        add(at, one, two, 1 + N_PORTS * s[at[0]] + k * count[at[0]] + place_of[at])
    doubles = np.zeros((size, 2, max(int(count.max()), 1)), dtype=np.intp)
    doubles[at[0], 0, place_of[at]] = slot1[at]
    doubles[at[0], 1, place_of[at]] = slot2[at]
    return ClusterForms(forms.reshape(size, rows * columns, -1), doubles, count)
