"""The Pareto set: rows that no other row beats."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

_BLOCK = 512


def frontier(costs: NDArray[np.float64]) -> NDArray[np.bool_]:
    """Mark the rows that no other row beats: as good in every column, and better in one.

    Equal rows do not beat each other.

    Parameters
    ----------
    costs
        Shape (N, d), the less the better; no NaN.

    Returns
    -------
    Array of bool, shape (N,).
    """
    distinct, row_of = np.unique(costs, axis=0, return_inverse=True)
    # Sorted lexicographically, a row can be beaten by earlier rows only.
    kept = np.zeros((0, costs.shape[1]))
    marked = np.zeros(len(distinct), dtype=bool)
    for start in range(0, len(distinct), _BLOCK):
        block = distinct[start : start + _BLOCK]
        alive = np.flatnonzero(~_beaten(block, kept))
        alive = alive[~_beaten(block[alive], block[alive])]
        marked[start + alive] = True
        kept = np.concatenate([kept, block[alive]])
    return np.asarray(marked[row_of.reshape(-1)])


def _beaten(rows: NDArray[np.float64], by: NDArray[np.float64]) -> NDArray[np.bool_]:
    """Where some row of ``by`` is no worse everywhere and differs."""
    no_worse = np.ones((len(rows), len(by)), dtype=bool)
    for column in range(rows.shape[1]):
        no_worse &= by[None, :, column] <= rows[:, None, column]
    differs = np.zeros_like(no_worse)
    for column in range(rows.shape[1]):
        differs |= by[None, :, column] != rows[:, None, column]
    return np.asarray((no_worse & differs).any(axis=1))
