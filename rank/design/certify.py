"""The best classes and switch trees of the finalists, and proof that no other topology belongs among them."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from capmuster.rank.design.exactchoice import ExactChoice, exact_choice, out_of_reach
from capmuster.rank.design.screening import can_be_exact, within_reach
from capmuster.rank.evaluation import evaluation_of
from capmuster.rank.pool import Pool, efficiency_floor, reordered
from capmuster.rank.structs import placed

if TYPE_CHECKING:
    from collections.abc import Collection

    from numpy.typing import NDArray

    from capmuster.rank.inputs.brief import Brief

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


def certify(
    pool: Pool, brief: Brief, top: int, families: Collection[str] = (), chosen: Collection[str] = ()
) -> Certified:
    """Find the exact choices of the first candidates and of all that could belong among them.

    Parameters
    ----------
    pool
        Candidates by the merit of their usual classes.
    brief
        The job.
    top
        How many places are of interest.
    families
        Ids of family members, the best of which is found exactly too.
    chosen
        Ids of candidates that are found exactly wherever they stand.
    """
    places = min(top, len(pool))
    if not can_be_exact(brief) or not places:
        return Certified(pool, (None,) * places, None)
    search = _Search.of(pool, brief)
    for place in range(places):
        search.look(place, np.inf)
    by_bound = np.argsort(search.bound, kind="stable").tolist()
    survivors = [k for k in by_bound if k >= places and search.bound[k] < search.limit(places)]
    for place in survivors[:_MOST_SURVIVORS]:
        search.look(place, search.limit(places))
    ids = pool.ids.tolist()
    for place in [k for k in by_bound if ids[k] in families]:
        others = [search.merit[k] for k in search.found if ids[k] in families]
        search.look(place, min(others, default=np.inf))
    for place in [k for k in by_bound if ids[k] in chosen]:
        search.look(place, np.inf)
    limit, found = search.limit(places), search.found
    better = _could_be_better(search, limit)
    unsized = _unsized_within_reach(pool, brief, limit)
    order = reordered(pool, search.merit)
    certificate = Certificate(
        places=places,
        exact=len(found),
        proven=sum(one.proven for one in found.values()),
        screened=len(pool) - len(found) - better,
        open=better + unsized,
    )
    finalists = tuple(found.get(int(k)) for k in order[:places])
    return Certified(_with_exact(pool, found).in_order(order), finalists, certificate)


@dataclass(frozen=True, slots=True)
class _Search:
    """What is known so far; `merit` and `least` (lower bounds) are improved in place."""

    pool: Pool
    brief: Brief
    merit: NDArray[np.float64]
    bound: NDArray[np.float64]
    least: NDArray[np.float64]
    found: dict[int, ExactChoice]

    @classmethod
    def of(cls, pool: Pool, brief: Brief) -> _Search:
        figures = pool.evaluation
        bound = figures.bound if figures.bound is not None else np.full(len(pool), -np.inf)
        return cls(pool, brief, figures.merit.copy(), bound, bound.copy(), {})

    def limit(self, places: int) -> float:
        """Merit of the last of so many places."""
        return float(np.sort(self.merit)[places - 1])

    def look(self, place: int, enough: float) -> None:
        """Find the exact choice of a candidate, if it can be better than a merit."""
        # An idle switch costs what no element of the bound stands for.
        if (
            place in self.found
            or self.least[place] >= enough * (1 - _MARGIN)
            or not self.pool.evaluation.clean[place]
        ):
            return
        one = exact_choice(self.pool.converter(place), self.brief, enough)
        if one is None:
            return
        self.least[place] = max(self.least[place], one.least)
        merit = float(one.sized.merit[0])
        holds_floor = one.sized.worst_efficiency[0] >= efficiency_floor(self.brief)
        if merit < enough and merit <= self.merit[place] * (1 + _MARGIN) and holds_floor:
            self.found[place] = one
            self.merit[place] = merit


def _could_be_better(search: _Search, limit: float) -> int:
    """Count the sized topologies behind the last place that no bound keeps behind it."""
    behind = search.merit > limit * (1 + _MARGIN)
    settled = ~search.pool.evaluation.clean
    for place, one in search.found.items():
        settled[place] |= one.proven
    open_ = behind & ~settled & (search.least < limit * (1 - _MARGIN))
    return int(np.count_nonzero(open_))


def _unsized_within_reach(pool: Pool, brief: Brief, limit: float) -> int:
    """Count the topologies without sizes for their usual classes that might have better ones for others."""
    open_ = [
        table.converter(row)
        for table, bounds in zip(pool.unsized, pool.unsized_bounds, strict=True)
        for row in np.flatnonzero(bounds < limit * (1 - _MARGIN)).tolist()
    ]
    if len(open_) > _MOST_SURVIVORS:
        return len(open_)
    count = 0
    for converter in open_:
        if within_reach(converter, brief):
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
