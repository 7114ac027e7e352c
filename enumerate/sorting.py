"""Sorting many short columns together: a network of comparisons that does not depend on the data."""

from __future__ import annotations

from functools import lru_cache
from typing import TYPE_CHECKING, TypeVar

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

_T = TypeVar("_T", bound=np.integer)


@lru_cache(maxsize=32)
def comparators(size: int) -> tuple[tuple[int, int], ...]:
    """Return pairs of places to compare and exchange, in order, that sort ``size`` values.

    Batcher's merge exchange (Knuth, The Art of Computer Programming, vol. 3, 5.2.2, algorithm M).
    """
    found: list[tuple[int, int]] = []
    top = 1 << max((size - 1).bit_length() - 1, 0)
    p = top if size > 1 else 0
    while p:
        q, r, d = top, 0, p
        while True:
            found += [(i, i + d) for i in range(size - d) if i & p == r]
            if q == p:
                break
            d, q, r = q - p, q // 2, p
        p //= 2
    return tuple(found)


def sort_columns(values: NDArray[_T]) -> None:
    """Sort along the first axis, in place."""
    for i, j in comparators(len(values)):
        low = np.minimum(values[i], values[j])
        np.maximum(values[i], values[j], out=values[j])
        values[i] = low
