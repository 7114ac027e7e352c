"""The canonical form of many converters at once; the same definition as `capmuster.enumerate.canonical`.

Invariants are sorted for all rows together. Rows in which capacitors tie in every invariant try all orders of
their capacitors, still in one batch.
"""

from __future__ import annotations

from dataclasses import replace
from itertools import permutations
from typing import TYPE_CHECKING, TypeVar

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from capmuster.enumerate.converters import ConverterTable

_PORTS = 3
_T = TypeVar("_T", bound=np.generic)


def canonical_batch(table: ConverterTable) -> ConverterTable:
    """Bring every row into canonical form.

    The arrays of ``table`` may stand in any capacitor order, polarity, phase order and node names.
    """
    if not len(table):
        return table
    ahead, behind = (_Ordered(table, first) for first in (0, 1))
    comparison = _compare(ahead.keys, behind.keys)
    comparison = np.where(comparison == 0, _compare(ahead.packed(), behind.packed()), comparison)
    swap = comparison > 0

    def pick(a: NDArray[_T], b: NDArray[_T]) -> NDArray[_T]:
        return np.where(swap.reshape(-1, *[1] * (a.ndim - 1)), b, a)

    return replace(
        table,
        words=pick(ahead.words, behind.words),
        charges=pick(ahead.charges, behind.charges),
        potentials=pick(ahead.potentials, behind.potentials),
        nodes=pick(ahead.nodes, behind.nodes),
    )


class _Ordered:
    """All rows with phase ``first`` put first, capacitors sorted, nodes renamed."""

    def __init__(self, table: ConverterTable, first: int) -> None:
        columns = [0, 1, 2, 3] if first == 0 else [2, 3, 0, 1]
        self.nodes = table.nodes[:, [first, 1 - first]]
        self.potentials = table.potentials[:, [first, 1 - first]]
        words = table.words[:, :, columns]
        charges = table.charges if first == 0 else -table.charges
        voltages = table.voltages
        flip = (voltages < 0) | ((voltages == 0) & (charges < 0))
        words = np.where(flip[:, :, None], words[:, :, [1, 0, 3, 2]], words)
        charges = np.where(flip, -charges, charges)
        minus = [
            np.take_along_axis(self.potentials[:, phase], words[:, :, 2 * phase + 1].astype(np.intp), axis=1)
            for phase in (0, 1)
        ]
        keys = _combined([np.abs(voltages), *minus, charges])
        order = np.argsort(keys, axis=1, kind="stable")
        self.keys = np.take_along_axis(keys, order, axis=1)
        words = np.take_along_axis(words, order[:, :, None], axis=1)
        self.charges = np.take_along_axis(charges, order, axis=1)
        self.words, names = _nodes_named(words)
        tied = np.flatnonzero(np.any(self.keys[:, 1:] == self.keys[:, :-1], axis=1))
        if len(tied):
            self.words[tied], chosen_names = _least_order(words[tied], self.keys[tied])
            for phase in (0, 1):
                names[phase][tied] = chosen_names[phase]
        for phase in (0, 1):
            moved = np.zeros_like(self.potentials[:, phase])
            np.put_along_axis(moved, names[phase].astype(np.intp), self.potentials[:, phase], axis=1)
            self.potentials[:, phase] = moved

    def packed(self) -> NDArray[np.uint64]:
        return _packed(self.words)


def _combined(parts: list[NDArray[np.int64]]) -> NDArray[np.int64]:
    """Fold integers into one sortable number; the parts are bounded, so the fold is exact."""
    span = 2 * max(int(np.abs(part).max()) for part in parts) + 1
    if span ** len(parts) >= 2**63:  # ranks of the distinct values sort alike and stay small
        parts = [np.unique(part, return_inverse=True)[1].reshape(part.shape) for part in parts]
        span = max(int(part.max()) for part in parts) + 1
    result = np.zeros_like(parts[0])
    for part in parts:
        result = result * span + part
    return result


def _nodes_named(words: NDArray[np.int8]) -> tuple[NDArray[np.int8], list[NDArray[np.int8]]]:
    """Name internal nodes in their order of appearance; also the new number of each vertex, two (N, n + 2)."""
    rows, n, _ = words.shape
    result = words.copy()
    names = []
    for phase in (0, 1):
        sequence = words[:, :, 2 * phase : 2 * phase + 2].reshape(rows, 2 * n)
        nodes = np.arange(_PORTS, n + 2, dtype=np.int8)
        seen = sequence[:, None, :] == nodes[:, None]
        first = np.where(seen.any(axis=2), seen.argmax(axis=2), 2 * n)
        rank = np.argsort(np.argsort(first, axis=1, kind="stable"), axis=1, kind="stable")
        new = np.concatenate([np.tile(np.arange(_PORTS), (rows, 1)), rank + _PORTS], axis=1).astype(np.int8)
        renamed = np.take_along_axis(new, sequence.astype(np.intp), axis=1)
        result[:, :, 2 * phase : 2 * phase + 2] = renamed.reshape(rows, n, 2)
        names.append(new)
    return result, names


def _least_order(
    words: NDArray[np.int8], keys: NDArray[np.int64]
) -> tuple[NDArray[np.int8], list[NDArray[np.int8]]]:
    """Least words among the capacitor orders that keep the keys sorted."""
    n = words.shape[1]
    best, best_names = _nodes_named(words)
    for order in permutations(range(n)):
        index = list(order)
        rows = np.flatnonzero(np.all(keys[:, index] == keys, axis=1))
        if not len(rows):
            continue
        candidate, names = _nodes_named(words[rows][:, index])
        better = _compare(_packed(candidate), _packed(best[rows])) < 0
        best[rows[better]] = candidate[better]
        for phase in (0, 1):
            best_names[phase][rows[better]] = names[phase][better]
    return best, best_names


def _packed(words: NDArray[np.int8]) -> NDArray[np.uint64]:
    """Words as a few sortable numbers per row, most significant first, 5 bits per vertex."""
    rows, n, _ = words.shape
    flat = words.reshape(rows, 4 * n).astype(np.uint64)
    per_number = 12
    parts = []
    for start in range(0, 4 * n, per_number):
        number = np.zeros(rows, dtype=np.uint64)
        for column in range(start, min(start + per_number, 4 * n)):
            number = (number << np.uint64(5)) | flat[:, column]
        parts.append(number)
    return np.stack(parts, axis=1)


def _compare(left: NDArray[np.generic], right: NDArray[np.generic]) -> NDArray[np.int64]:
    """Compare rows lexicographically: -1, 0 or 1 for each, shape (N,)."""
    result = np.zeros(len(left), dtype=np.int64)
    for column in reversed(range(left.shape[1])):
        a, b = left[:, column], right[:, column]
        result = np.where(a < b, -1, np.where(a > b, 1, result))
    return result
