"""The best classes and switch trees of the finalists, and proof that no other topology belongs among them."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from capmuster.rank.evaluation import evaluation_of
from capmuster.rank.exactchoice import ExactChoice, exact_choice, out_of_reach
from capmuster.rank.pool import Pool, reordered
from capmuster.rank.screening import can_be_exact, droop_within_reach
from capmuster.rank.structs import placed

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from capmuster.rank.brief import Brief

_MARGIN = 1e-9
_MOST_SURVIVORS = 300


@dataclass(frozen=True, slots=True)
class Certificate:
    """What is proven about a ranking.

    Attributes
    ----------
    places
        K: no other topology is better than the candidate at this place, whatever classes and trees it is
        given.
    exact
        How many topologies had their best classes, trees and sizes found.
    proven
        How many of these are proven to be the best for their topology.
    screened
        How many were screened out by a lower bound.
    open
        How many could not be told: with any, the claim of `places` is not proven.
    """

    places: int
    exact: int
    proven: int
    screened: int
    open: int

    @property
    def holds(self) -> bool:
        """Whether the claim is proven."""
        return self.open == 0 and self.places > 0


@dataclass(frozen=True, slots=True)
class Certified:
    """A pool whose best candidates have their best classes and trees.

    Attributes
    ----------
    pool
        The candidates in their new order.
    finalists
        The exact choices of the first places, None where there is none.
    certificate
        What is proven, or None where nothing can be for this brief.
    """

    pool: Pool
    finalists: tuple[ExactChoice | None, ...]
    certificate: Certificate | None


def certify(pool: Pool, brief: Brief, top: int) -> Certified:
    """Find the exact choices of the first candidates and of all that could belong among them.

    Parameters
    ----------
    pool
        Candidates by the merit of their usual classes.
    brief
        The job.
    top
        How many places are of interest.
    """
    places = min(top, len(pool))
    if not can_be_exact(brief) or not places:
        return Certified(pool, (None,) * places, None)
    merit = pool.evaluation.merit.copy()
    bound = pool.evaluation.bound if pool.evaluation.bound is not None else np.full(len(pool), -np.inf)
    found: dict[int, ExactChoice] = {}
    least = bound.copy()

    def look(place: int, enough: float) -> None:
        one = exact_choice(pool.converter(place), brief, enough)
        if one is None:
            return
        least[place] = max(least[place], one.least)
        if one.sized.merit[0] < enough and one.sized.merit[0] <= merit[place] * (1 + _MARGIN):
            found[place] = one
            merit[place] = float(one.sized.merit[0])

    for place in range(places):
        look(place, np.inf)
    limit = float(np.sort(merit)[places - 1])
    survivors = [k for k in np.argsort(bound, kind="stable").tolist() if k >= places and bound[k] < limit]
    for place in survivors[:_MOST_SURVIVORS]:
        limit = float(np.sort(merit)[places - 1])
        if least[place] < limit * (1 - _MARGIN):
            look(place, limit)
    limit = float(np.sort(merit)[places - 1])
    better = _could_be_better(pool, merit, least, found, limit)
    unsized = _unsized_within_reach(pool, brief, limit)
    order = reordered(pool, merit)
    replaced = _with_exact(pool, found)
    certificate = Certificate(
        places=places,
        exact=len(found),
        proven=sum(one.proven for one in found.values()),
        screened=len(pool) - len(found) - better,
        open=better + unsized,
    )
    finalists = tuple(found.get(int(k)) for k in order[:places])
    return Certified(replaced.in_order(order), finalists, certificate)


def _could_be_better(
    pool: Pool,
    merit: NDArray[np.float64],
    least: NDArray[np.float64],
    found: dict[int, ExactChoice],
    limit: float,
) -> int:
    """Count the sized topologies behind the last place that no bound keeps behind it."""
    behind = merit > limit * (1 + _MARGIN)
    settled = np.array([k in found and found[k].proven for k in range(len(pool))], dtype=bool)
    open_ = behind & ~settled & (least < limit * (1 - _MARGIN))
    return int(np.count_nonzero(open_))


def _unsized_within_reach(pool: Pool, brief: Brief, limit: float) -> int:
    """Count the topologies without sizes for their usual classes that might have better ones for others."""
    count = 0
    for table, bounds in zip(pool.unsized, pool.unsized_bounds, strict=True):
        for row in np.flatnonzero(bounds < limit * (1 - _MARGIN)).tolist():
            converter = table.converter(row)
            if droop_within_reach(converter, brief):
                one = exact_choice(converter, brief, limit)
                if one is None:
                    count += not out_of_reach(converter, brief)
                else:
                    count += one.least < limit * (1 - _MARGIN)
    return count


def _with_exact(pool: Pool, found: dict[int, ExactChoice]) -> Pool:
    figures = pool.evaluation
    for place, one in found.items():
        row = evaluation_of(one.candidate, one.sized, np.array([one.least]))
        figures = placed(figures, np.array([place]), row)
    return replace(pool, evaluation=figures)
