"""Time of the separate skeleton count: it is part of every certificate."""

from __future__ import annotations

import time

import pytest

from capmuster.enumerate import skeletoncount


@pytest.mark.benchmark
@pytest.mark.parametrize(("n", "seconds"), [(4, 0.1), (5, 1.0), (6, 10.0)])
def test_speed(n: int, seconds: float) -> None:
    skeletoncount._count_by_split.cache_clear()
    start = time.perf_counter()
    skeletoncount.labelled_skeletons(n)
    assert time.perf_counter() - start < seconds
