"""Screen the candidates of a brief, search the parts of the best ones, and prove what was found.

Bounds put the candidates in order; the exact dynamic programme finds the best parts of one after the
other, until the next bound is above the last finalist; CP-SAT helps out where that has no room, and
proves each finalist.
"""

from __future__ import annotations

import math
from collections import Counter
from contextlib import suppress
from dataclasses import dataclass, replace
from heapq import heapify, heappop, heappush
from typing import TYPE_CHECKING, Final

import numpy as np

from capmuster.enumerate.errors import CapmusterError
from capmuster.rank.discrete.blends import QUADRATIC
from capmuster.rank.discrete.bulk import pool_bounds
from capmuster.rank.discrete.certify import certify
from capmuster.rank.discrete.design import condition, exact_impedance, fill, holding_frequency
from capmuster.rank.discrete.finalists import Finalist, PartsShortlist
from capmuster.rank.discrete.labels import search
from capmuster.rank.discrete.options import NoPartError, OptionBook, Units
from capmuster.rank.discrete.problem import operating_input, pose, reported, resolved
from capmuster.rank.discrete.relaxed import relax
from capmuster.rank.discrete.slots import slots_of

if TYPE_CHECKING:
    from collections.abc import Sequence

    from capmuster.enumerate.wiring import Converter
    from capmuster.rank.discrete.blends import Blend
    from capmuster.rank.discrete.design import Condition
    from capmuster.rank.discrete.labels import Outcome
    from capmuster.rank.discrete.problem import Problem
    from capmuster.rank.discrete.relaxed import Relaxed
    from capmuster.rank.discrete.slots import Slot
    from capmuster.rank.inputs.brief import Brief
    from capmuster.rank.inputs.parts_request import PartsRequest
    from capmuster.rank.pool import Pool

_SEEDS: Final = 16  # candidates, each of another ratio, whose multipliers bound all others at first
_HALF: Final = 0.5
_TIE: Final = 1e-9  # relative: objectives this close are equal
_NO_PART: Final = "no part of the stock stands a voltage"
_NO_CHOICE: Final = "no choice of parts keeps the limits"


@dataclass(frozen=True, slots=True)
class _Case:
    """A candidate's problem at one frequency."""

    book: OptionBook
    problem: Problem

    def reported(self, value: float) -> float:
        """Bring a value of what is made least to what is reported."""
        return reported(self.problem, self.book.units, value)


@dataclass(frozen=True, slots=True)
class _Entrant:
    """A candidate with its problems, and what is known of them.

    Attributes
    ----------
    relaxed
        The continuous bound of each problem.
    """

    converter: Converter
    place: int
    slots: tuple[Slot, ...]
    cases: tuple[_Case, ...]
    relaxed: tuple[Relaxed, ...]

    @property
    def bound(self) -> float:
        """No choice of its parts is below it, in what is reported."""
        return min(case.reported(one.bound) for case, one in zip(self.cases, self.relaxed, strict=True))


@dataclass(frozen=True, slots=True)
class _Found:
    """A candidate's best parts, at its best frequency."""

    entrant: _Entrant
    case: _Case
    outcome: Outcome

    @property
    def objective(self) -> float:
        return self.case.reported(self.outcome.objective)

    def order(self) -> tuple[float, int, int, str]:
        """Order by what is made least; equal ones by fewer switches, fewer capacitors, then id."""
        converter = self.entrant.converter
        rounded = float(f"{self.objective:.9e}")
        return rounded, len(self.entrant.slots) - converter.n, converter.n, converter.id


def choose_parts(
    brief: Brief,
    request: PartsRequest,
    *,
    top: int = 5,
    include: Sequence[Converter] = (),
    blend: Blend = QUADRATIC,
) -> PartsShortlist:
    """Find the candidates of a brief that are best when built from parts, and the parts for each.

    Parameters
    ----------
    brief
        What is asked for. Every converter that holds its output is a candidate, and keeps its floor of
        efficiency where that counts conduction only; area budgets are left out, since what counts here is
        the footprint of parts.
    request
        What is asked of the parts.
    top
        Most finalists.
    include
        Converters of the user's own, ranked with the rest.
    blend
        How R_SSL and R_FSL are joined.

    Raises
    ------
    CapmusterError
        If ``top`` is below 1, or the request has no end.
    """
    from capmuster.rank.pool import gather  # noqa: PLC0415 -- slow to import

    if top < 1:
        raise CapmusterError(f"top: {top} is too small", accepted="1 or more")
    request = resolved(request, brief)
    pool = gather(_without_areas(brief), include)
    books = _books(request)
    seeds = _seeds(pool, brief, books, blend)
    prices = [
        [one.multipliers for one in at_frequency if one.multipliers is not None]
        for at_frequency in zip(*(seed.relaxed for seed in seeds), strict=True)
    ] or [[] for _ in books]
    known = pool_bounds(pool, brief, books, prices, blend)
    # A wiring of the user's own may have idle switches, whose order the batch does not settle.
    included = np.isin(pool.ids, [one.id for one in include])
    bounds = np.where(included, -np.inf, known.bounds)
    left_out = Counter(
        {
            _NO_PART: int((known.lacking & ~included).sum()),
            _NO_CHOICE: int((np.isposinf(bounds) & ~known.lacking).sum()),
        }
    )
    queue = [(bound, place) for place, bound in enumerate(bounds.tolist()) if bound < math.inf]
    heapify(queue)
    looked_at: dict[int, _Entrant] = {}
    ranked: list[_Found] = []
    searched, exact = 0, True
    while queue:
        # Best bound first: once a bound is above the last place, so are all that are left.
        bound, place = heappop(queue)
        if len(ranked) >= top and bound > ranked[-1].objective * (1 + _TIE):
            break
        if place not in looked_at:
            try:
                looked_at[place] = _entered(pool.converter(place), place + 1, brief, books, blend)
            except NoPartError:
                left_out[_NO_PART] += 1
            else:
                heappush(queue, (max(bound, looked_at[place].bound), place))
            continue
        searched += 1
        found, complete = _searched(looked_at[place])
        exact = exact and complete
        if found is None:
            left_out[_NO_CHOICE] += 1
        else:
            ranked = sorted([*ranked, found], key=_Found.order)[:top]
    return PartsShortlist(
        brief=brief,
        request=request,
        blend=blend,
        finalists=tuple(_finished(found, brief, blend) for found in ranked),
        candidates=len(pool),
        searched=searched,
        exact=exact,
        left_out={reason: count for reason, count in left_out.items() if count},
    )


def _without_areas(brief: Brief) -> Brief:
    """Return the brief of which every converter that can hold the output is a candidate."""
    return replace(
        brief,
        objective="conduction-area",
        area=None,
        silicon_area=None,
        capacitor_area=None,
        frequency_minimum=None,
        duty=_HALF,
        profile=(),
        efficiency_floor=None if brief.counts_losses else brief.efficiency_floor,
    )


def _seeds(pool: Pool, brief: Brief, books: Sequence[OptionBook], blend: Blend) -> list[_Entrant]:
    """Look at the first candidate of each of a few ratios."""
    _, first = np.unique(pool.evaluation.ratio, return_index=True)
    few = np.unique(np.linspace(0, len(first) - 1, min(_SEEDS, len(first))).round().astype(int))
    seeds = []
    for place in first[few].tolist():
        with suppress(NoPartError):
            seeds.append(_entered(pool.converter(place), place + 1, brief, books, blend))
    return seeds


def _books(request: PartsRequest) -> tuple[OptionBook, ...]:
    """One book for each frequency, shared by all candidates."""
    units = Units.of(request)
    counts = (
        request.footprint is not None or request.least == "footprint",
        request.price is not None or request.least == "price",
    )
    return tuple(OptionBook(request, units, frequency, counts) for frequency in request.frequencies)


def _entered(
    converter: Converter, place: int, brief: Brief, books: Sequence[OptionBook], blend: Blend
) -> _Entrant:
    """Pose and relax the problems of one candidate."""
    slots = slots_of(converter, brief)
    cases = tuple(_Case(book, pose(slots, converter.ratio, brief, book, blend)) for book in books)
    return _Entrant(converter, place, slots, cases, tuple(relax(case.problem) for case in cases))


def _solved(problem: Problem, relaxed: Relaxed) -> Outcome:
    """Find the best choice by the dynamic programme, and where that has no room by the integer solver."""
    outcome = search(problem, relaxed)
    return outcome if outcome.proven else certify(problem, outcome)


def _searched(entrant: _Entrant) -> tuple[_Found | None, bool]:
    """Find the best parts over all frequencies, and say whether the search was exhaustive."""
    best: _Found | None = None
    complete = True
    pairs = zip(entrant.cases, entrant.relaxed, strict=True)
    for case, relaxed in sorted(pairs, key=lambda pair: pair[1].bound):
        if best is not None and case.reported(relaxed.bound) >= best.objective:
            break
        outcome = _solved(case.problem, relaxed)
        complete = complete and outcome.proven
        if outcome.selection is not None:
            found = _Found(entrant, case, outcome)
            if best is None or found.objective < best.objective:
                best = found
    return best, complete


def _finished(found: _Found, brief: Brief, blend: Blend) -> Finalist:
    """Prove a candidate's parts at every frequency that could be better, and work out what it does."""
    entrant, case, best = found.entrant, found.case, found.outcome
    proofs = []
    for other, relaxed in zip(entrant.cases, entrant.relaxed, strict=True):
        if other is found.case or other.reported(relaxed.bound) < found.objective:
            known = found.outcome if other is found.case else _solved(other.problem, relaxed)
            outcome = certify(other.problem, known)
            proofs.append((other, outcome))
            if other.reported(outcome.objective) < case.reported(best.objective):
                case, best = other, outcome
    assert best.selection is not None  # noqa: S101 -- only candidates with a choice are finalists
    objective = case.reported(best.objective)
    book = case.book
    fillings = fill(entrant.slots, case.problem, best.selection, book)
    ratio = float(entrant.converter.ratio)

    def at(volts: float, frequency: float = book.frequency) -> Condition:
        return condition(
            fillings,
            ratio,
            brief,
            request=book.request,
            frequency=frequency,
            input_voltage=volts,
            blend=blend,
        )

    def held(volts: float) -> Condition:
        frequency = holding_frequency(
            fillings,
            ratio,
            brief,
            request=book.request,
            frequency=book.frequency,
            input_voltage=volts,
            blend=blend,
        )
        return at(volts, frequency)

    return Finalist(
        converter=entrant.converter,
        area_place=entrant.place,
        frequency=book.frequency,
        fillings=fillings,
        operating=at(operating_input(brief)),
        exact_impedance=exact_impedance(
            entrant.converter,
            fillings,
            brief,
            request=book.request,
            frequency=book.frequency,
            input_voltage=operating_input(brief),
        ),
        conditions=(held(brief.input_minimum), held(brief.input_nominal), held(brief.input_maximum)),
        objective=objective,
        bound=min(objective, *(other.reported(outcome.bound) for other, outcome in proofs)),
        relaxed=entrant.bound,
        proven=all(outcome.proven for _, outcome in proofs),
    )
