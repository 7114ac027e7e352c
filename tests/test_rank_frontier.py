"""The Pareto set against its definition."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays

from capmuster.rank.frontier import frontier


def by_definition(costs):
    """Pair by pair: a row is out when another is as good everywhere and better somewhere."""
    return np.array(
        [not any((other <= row).all() and (other < row).any() for other in costs) for row in costs],
        dtype=bool,
    )


@given(
    st.integers(1, 4).flatmap(
        lambda d: arrays(
            np.float64, st.tuples(st.integers(0, 40), st.just(d)), elements=st.integers(0, 6).map(float)
        )
    )
)
def test_frontier_is_what_nothing_beats(costs):
    assert frontier(costs).tolist() == by_definition(costs).tolist()


@pytest.mark.parametrize("dimensions", [2, 5])
def test_frontier_over_many_blocks(dimensions):
    costs = np.random.default_rng(1).integers(0, 30, (1500, dimensions)).astype(float)
    assert frontier(costs).tolist() == by_definition(costs).tolist()


def test_equal_rows_stay_together():
    costs = np.array([[1.0, 2.0], [1.0, 2.0], [2.0, 2.0], [0.0, 3.0]])
    assert frontier(costs).tolist() == [True, True, False, True]


def test_order_does_not_matter():
    rng = np.random.default_rng(2)
    costs = rng.integers(0, 9, (300, 4)).astype(float)
    order = rng.permutation(300)
    assert frontier(costs[order]).tolist() == frontier(costs)[order].tolist()
