"""The number of labelled skeletons, from a plain generator that the census does not use.

The certificate of the census counts cells skeleton by skeleton, so it cannot notice a skeleton that is
missing. This module counts the skeletons another way. It lists what one phase can do with the plates, keeps
of each such structure only the space of charge constraints that it imposes, and counts the pairs of spaces
that leave one charge vector. No skeleton is ever built, renamed or compared with another.

Labelled means: capacitors, their plates and the phases are told apart, internal nodes are not, and the three
ports are one vertex.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from typing import TYPE_CHECKING

import numpy as np

from capmuster.enumerate.errors import CapmusterError

if TYPE_CHECKING:
    from numpy.typing import NDArray

MOST_CAPACITORS = 6
"""Largest number of capacitors that :func:`labelled_skeletons` counts."""

_LEAST_PLATES = 2
"""A vertex with one plate leaves that capacitor idle: its charge has nowhere to go."""


@dataclass(frozen=True, slots=True)
class _Constraints:
    """The distinct constraint spaces of all one-phase structures with ``m`` internal nodes.

    Attributes
    ----------
    rows
        Shape (spaces, m, n): the reduced row echelon form of each space, entries -1, 0, 1.
    structures
        Shape (spaces,): number of labelled structures that impose the space.
    """

    rows: NDArray[np.int8]
    structures: NDArray[np.int64]


def labelled_skeletons(n: int) -> int:
    """Count the labelled skeletons of irreducible cells with ``n`` flying capacitors.

    Parameters
    ----------
    n
        Number of flying capacitors, 1 to 6.

    Returns
    -------
    int
        1, 8, 240, 33408, 13392000, ... for n = 1, 2, 3, 4, 5, ...

    Raises
    ------
    CapmusterError
        If `n` is out of reach.
    """
    return sum(labelled_skeletons_by_split(n))


def labelled_skeletons_by_split(n: int) -> tuple[int, ...]:
    """Count the labelled skeletons apart by the number of internal nodes in phase 1.

    Parameters
    ----------
    n
        Number of flying capacitors, 1 to 6.

    Returns
    -------
    tuple of int
        Entry ``m1`` counts the skeletons with ``m1`` internal nodes in phase 1 and ``n - 1 - m1`` in phase 2.

    Raises
    ------
    CapmusterError
        If `n` is out of reach.
    """
    if not 1 <= n <= MOST_CAPACITORS:
        raise CapmusterError(
            f"the number of capacitors is {n}", accepted=f"a whole number from 1 to {MOST_CAPACITORS}"
        )
    return _count_by_split(n)


@lru_cache(maxsize=MOST_CAPACITORS)
def _count_by_split(n: int) -> tuple[int, ...]:
    # Exchanging the phases maps the split (m1, m2) to (m2, m1), so half of them are counted.
    fewer = tuple(_count_pairs(_constraints(n, n - 1 - m), _constraints(n, m)) for m in range((n + 1) // 2))
    return fewer + fewer[: n // 2][::-1]


def _structures(n: int, m: int) -> NDArray[np.int8]:
    """List what one phase can do with the plates: set partitions of the ``2n`` plates.

    Block 0 is the merged port, blocks 1 to `m` (at least one) are internal nodes, numbered in the order in
    which the plates meet them, so that each set of unnamed nodes comes once. No internal node holds both
    plates of a capacitor, and every vertex holds at least two plates.

    Returns
    -------
    ndarray
        Shape (structures, 2n): the block of plus plate 0, minus plate 0, plus plate 1, ...
    """
    blocks = np.zeros((1, 0), dtype=np.int8)
    for plate in range(2 * n):
        used = blocks.max(axis=1, initial=0)
        parts = []
        for block in range(m + 1):
            fits = block <= used + 1
            if block > 0 and plate % 2 == 1:
                fits &= blocks[:, -1] != block
            kept = blocks[fits]
            parts.append(np.hstack([kept, np.full((len(kept), 1), block, dtype=np.int8)]))
        blocks = np.vstack(parts)
        missing = np.zeros(len(blocks), dtype=np.int64)
        for block in range(m + 1):
            missing += np.maximum(_LEAST_PLATES - (blocks == block).sum(axis=1), 0)
        blocks = blocks[missing <= 2 * n - 1 - plate]
    return blocks


def _constraints(n: int, m: int) -> _Constraints:
    """Tally the constraint spaces of the one-phase structures that may leave every capacitor in use."""
    if m == 0:
        return _Constraints(np.zeros((1, 0, n), dtype=np.int8), np.ones(1, dtype=np.int64))
    blocks = _structures(n, m)
    nodes = np.arange(1, m + 1, dtype=np.int8)[None, :, None]
    plus, minus = blocks[:, None, 0::2], blocks[:, None, 1::2]
    rows = (plus == nodes).astype(np.int8) - (minus == nodes).astype(np.int8)
    rows = _row_echelon(rows)
    # An empty row: some group of capacitors meets no port. A row with one entry: that capacitor is idle.
    rows = rows[(np.count_nonzero(rows, axis=2) >= _LEAST_PLATES).all(axis=1)]
    weights = 3 ** np.arange(m * n, dtype=np.int64)  # at most 3^30, well inside 64 bits
    keys = (rows.reshape(len(rows), m * n) + 1) @ weights
    _, first, counts = np.unique(keys, return_index=True, return_counts=True)
    return _Constraints(rows[first], counts)


def _row_echelon(rows: NDArray[np.int8]) -> NDArray[np.int8]:
    """Reduced row echelon form of a batch of incidence matrices.

    An incidence matrix is totally unimodular and pivoting keeps it so, hence every entry stays -1, 0 or 1 and
    the integers of one byte are exact (Schrijver, "Theory of Linear and Integer Programming", 1986,
    chapter 19).

    Parameters
    ----------
    rows
        Shape (batch, m, n), entries -1, 0, 1.

    Returns
    -------
    ndarray
        Shape (batch, m, n), empty rows last.
    """
    rows = rows.copy()
    batch, m, n = rows.shape
    rank = np.zeros(batch, dtype=np.int64)
    for column in range(n):
        free = (np.arange(m) >= rank[:, None]) & (rows[:, :, column] != 0)
        found = np.flatnonzero(free.any(axis=1))
        source, target = free[found].argmax(axis=1), rank[found]
        pivot = rows[found, source] * rows[found, source, column][:, None]
        rows[found, source] = rows[found, target]
        rows[found, target] = pivot
        factor = rows[found, :, column]
        factor[np.arange(len(found)), target] = 0
        rows[found] -= factor[:, :, None] * pivot[:, None, :]
        rank[found] += 1
    return rows


def _count_pairs(more: _Constraints, fewer: _Constraints) -> int:
    """Count the pairs of structures whose joint constraints leave one charge vector without a zero.

    Turning the polarity of a capacitor turns it in both phases, so one space per polarity class is enough on
    one side. Totally unimodular matrices with the same support differ by row and column signs only (Camion,
    "Characterization of totally unimodular matrices", Proc. AMS, 1965), so the support names the class.
    """
    spaces, m, n = more.rows.shape
    keys = (more.rows.reshape(spaces, m * n) != 0) @ (1 << np.arange(m * n, dtype=np.int64))
    _, first, which = np.unique(keys, return_index=True, return_inverse=True)
    weights = np.zeros(len(first), dtype=np.int64)
    np.add.at(weights, which, more.structures)

    # Entries of a product are at most n, their minors at most 2 n^2: exact in single precision.
    others = fewer.rows.reshape(-1, n).astype(np.float32)
    shape = (*fewer.rows.shape[:2], n - m)
    total = 0
    for space, weight in zip(first, weights, strict=True):
        cycles = _null_basis(more.rows[space])
        charges = _signed_minors((others @ cycles.T).reshape(shape)) @ cycles
        total += int(weight) * int(fewer.structures[(charges != 0).all(axis=1)].sum())
    return total


def _null_basis(rows: NDArray[np.int8]) -> NDArray[np.float32]:
    """Null space of one reduced row echelon form of full rank, shape (n - m, n), entries -1, 0, 1."""
    m, n = rows.shape
    pivots = (rows != 0).argmax(axis=1)
    others = np.setdiff1d(np.arange(n), pivots)
    basis = np.zeros((n - m, n), dtype=np.float32)
    basis[np.arange(n - m), others] = 1
    basis[:, pivots] = -rows[:, others].T
    return basis


def _signed_minors(blocks: NDArray[np.float32]) -> NDArray[np.float32]:
    """Vector orthogonal to the ``k`` rows of each block (batch, k, k + 1): its signed minors, by Laplace."""
    batch, k, columns = blocks.shape
    if k == 0:
        return np.ones((batch, 1), dtype=np.float32)
    minors = np.zeros((batch, columns), dtype=np.float32)
    for left_out in range(columns):
        kept = np.delete(blocks, left_out, axis=2)
        minors[:, left_out] = (-1) ** left_out * (kept[:, 0] * _signed_minors(kept[:, 1:])).sum(axis=1)
    return minors
