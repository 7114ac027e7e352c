"""The number of labelled skeletons against two counts that work otherwise.

The first is brute force: every pair of set partitions, ranks from ``numpy.linalg``. The second goes by the
charges: for each charge vector that Cramer's rule allows, the pairs of structures whose internal nodes it
leaves neutral, with the rank read off a Laplace expansion. Neither reduces a matrix to echelon form, and
neither classes structures by the space of their constraints, as the tested generator does.
"""

from __future__ import annotations

from collections import Counter
from itertools import combinations, combinations_with_replacement
from math import comb, factorial, gcd, prod
from typing import TYPE_CHECKING

import numpy as np
import pytest

from capmuster.enumerate.errors import CapmusterError
from capmuster.enumerate.skeletoncount import labelled_skeletons, labelled_skeletons_by_split

if TYPE_CHECKING:
    from collections.abc import Iterator


def partitions(items: list[int]) -> Iterator[list[list[int]]]:
    """All set partitions, by inserting the last item into each block of the smaller partitions."""
    if not items:
        yield []
        return
    for smaller in partitions(items[:-1]):
        for k, block in enumerate(smaller):
            yield [*smaller[:k], [*block, items[-1]], *smaller[k + 1 :]]
        yield [*smaller, [items[-1]]]


def incidence(n: int, block: list[int]) -> list[int]:
    """Row of an internal node; plate 2i is the plus plate of capacitor i, plate 2i + 1 its minus plate."""
    row = [0] * n
    for plate in block:
        row[plate // 2] += 1 if plate % 2 == 0 else -1
    return row


def count_by_brute_force(n: int) -> tuple[int, ...]:
    """Every pair of phase structures, accepted by rank alone."""
    structures: dict[int, list[list[list[int]]]] = {m: [] for m in range(n)}
    port = 2 * n  # one item more marks the block of the merged port
    for partition in partitions(list(range(2 * n + 1))):
        internal = [block for block in partition if port not in block]
        shorted = any({2 * i, 2 * i + 1} <= set(block) for block in internal for i in range(n))
        if len(internal) < n and not shorted:
            structures[len(internal)].append([incidence(n, block) for block in internal])
    counts = []
    for m1 in range(n):
        pairs = [first + second for first in structures[m1] for second in structures[n - 1 - m1]]
        rows = np.array(pairs, dtype=float).reshape(len(pairs), n - 1, n)
        # Rank n - 1 without column i as well: the null vector has no zero at i.
        in_use = [
            np.abs(np.linalg.det(np.delete(rows, i, axis=2))) > 0.5  # a determinant of integers
            for i in range(n)
        ]
        counts.append(int(np.all(in_use, axis=0).sum()))
    return tuple(counts)


def neutral_structures(charges: tuple[int, ...]) -> dict[int, list[list[list[int]]]]:
    """Phase structures with every internal node neutral, by number of internal nodes."""
    n = len(charges)
    blocks = []
    for size in range(2, n + 1):
        for chosen in combinations(range(n), size):
            for signs in range(2**size):
                plates = [2 * i + (signs >> k & 1) for k, i in enumerate(chosen)]
                if sum(charges[p // 2] * (1 - 2 * (p % 2)) for p in plates) == 0:
                    blocks.append(plates)
    masks = [sum(1 << plate for plate in block) for block in blocks]
    found: dict[int, list[list[list[int]]]] = {m: [] for m in range(n)}

    def extend(start: int, taken: int, rows: list[list[int]]) -> None:
        found[len(rows)].append(rows)
        if len(rows) < n - 1:
            for k in range(start, len(blocks)):
                if not taken & masks[k]:
                    extend(k + 1, taken | masks[k], [*rows, incidence(n, blocks[k])])

    extend(0, 0, [])
    return found


def minors(rows: np.ndarray, columns: list[tuple[int, ...]]) -> np.ndarray:
    """All minors of full height, rounded to the integers that they are."""
    return np.stack([np.rint(np.linalg.det(rows[:, :, list(c)])) for c in columns], axis=1)


def count_by_charges(n: int) -> tuple[int, ...]:
    """For each charge vector, the pairs of structures that leave it and nothing else."""
    # Cramer: a charge is a minor of n - 1 rows. Expanded by Laplace over the rows of phase 1 it is a sum of
    # up to C(n - 1, m1) products of two minors, -1, 0 or 1 each (an incidence matrix is totally unimodular).
    largest = comb(n - 1, (n - 1) // 2)
    counts = [0] * n
    for charges in combinations_with_replacement(range(1, largest + 1), n):
        if gcd(*charges) > 1:
            continue
        # Charges in another order or with other polarities have as many pairs; q and -q are one vector.
        same = factorial(n) // prod(map(factorial, Counter(charges).values())) * 2 ** (n - 1)
        structures = neutral_structures(charges)
        for m1 in range(n):
            first, second = structures[m1], structures[n - 1 - m1]
            if not first or not second:
                continue
            # [D1; D2; q] is regular exactly when q spans the null space of [D1; D2].
            upper = np.array(first, dtype=float).reshape(len(first), m1, n)
            lower = np.array([[*rows, list(charges)] for rows in second], dtype=float)
            left = list(combinations(range(n), m1))
            right = [tuple(i for i in range(n) if i not in c) for c in left]
            sign = np.array([(-1) ** (sum(c) + m1 * (m1 - 1) // 2) for c in left])
            a, b = minors(upper, left) * sign, minors(lower, right)
            counts[m1] += same * sum(
                int(np.count_nonzero(a[k : k + 4096] @ b.T)) for k in range(0, len(a), 4096)
            )
    return tuple(counts)


@pytest.mark.parametrize("n", [1, 2, 3])
def test_against_every_pair_of_partitions(n: int) -> None:
    assert labelled_skeletons_by_split(n) == count_by_brute_force(n)


@pytest.mark.parametrize("n", [1, 2, 3, 4, 5, pytest.param(6, marks=pytest.mark.long)])
def test_against_the_count_by_charges(n: int) -> None:
    assert labelled_skeletons_by_split(n) == count_by_charges(n)


@pytest.mark.parametrize("n", [2, 3, 4, 5, 6])
def test_all_internal_nodes_in_one_phase_make_a_ring(n: int) -> None:
    # Identity: with all n - 1 nodes in phase 2, no capacitor is idle only if the n capacitors make one ring
    # through the port. From the port on, they come in n! orders, two for each ring; each has 2 polarities.
    assert labelled_skeletons_by_split(n)[0] == factorial(n) // 2 * 2**n


def test_totals_are_the_sums_over_the_splits() -> None:
    for n in range(1, 6):
        by_split = labelled_skeletons_by_split(n)
        assert labelled_skeletons(n) == sum(by_split)
        assert by_split == by_split[::-1]


@pytest.mark.parametrize("n", [0, -1, 7])
def test_out_of_reach_is_refused(n: int) -> None:
    with pytest.raises(CapmusterError, match=f"{n}.*from 1 to 6"):
        labelled_skeletons(n)
