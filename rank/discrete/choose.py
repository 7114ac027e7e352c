"""Screen the candidates of a brief, search the parts of the best ones, and prove what was found.

The continuous bound puts the candidates in order; the exact dynamic programme finds the best parts of one
after the other, until the next bound is above the last finalist; CP-SAT proves each finalist.
"""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass
from typing import TYPE_CHECKING, Final

from capmuster.enumerate.errors import CapmusterError
from capmuster.rank.discrete.blends import QUADRATIC
from capmuster.rank.discrete.certify import certify
from capmuster.rank.discrete.design import condition, exact_impedance, fill
from capmuster.rank.discrete.finalists import Finalist, PartsShortlist
from capmuster.rank.discrete.labels import search
from capmuster.rank.discrete.options import NoPartError, OptionBook, Units
from capmuster.rank.discrete.problem import operating_input, pose, resolved
from capmuster.rank.discrete.relaxed import relax
from capmuster.rank.discrete.slots import slots_of

if TYPE_CHECKING:
    from collections.abc import Sequence

    from capmuster.enumerate.wiring import Converter
    from capmuster.rank.brief import Brief
    from capmuster.rank.discrete.blends import Blend
    from capmuster.rank.discrete.design import Condition
    from capmuster.rank.discrete.labels import Outcome
    from capmuster.rank.discrete.problem import Problem
    from capmuster.rank.discrete.relaxed import Relaxed
    from capmuster.rank.discrete.slots import Slot
    from capmuster.rank.parts_request import PartsRequest

MOST_SCREENED: Final = 500
"""Candidates that get a continuous bound: the first ones by area."""

_TIE: Final = 1e-9  # relative: objectives this close are equal
_NO_PART: Final = "no part of the stock stands a voltage"
_NO_CHOICE: Final = "no choice of parts keeps the limits"


@dataclass(frozen=True, slots=True)
class _Case:
    """A candidate's problem at one frequency, with its continuous bound; values in what is reported."""

    converter: Converter
    place: int
    slots: tuple[Slot, ...]
    book: OptionBook
    problem: Problem
    relaxed: Relaxed

    def reported(self, value: float) -> float:
        """Bring a value of what is made least to W with the loss that no choice changes, mm2 or EUR."""
        units = self.book.units
        if self.problem.least == "loss":
            return value + self.problem.offset
        return value / (units.per_mm2 if self.problem.least == "footprint" else units.per_eur)

    @property
    def bound(self) -> float:
        return self.reported(self.relaxed.bound)


@dataclass(frozen=True, slots=True)
class _Found:
    """A candidate's best parts, at its best frequency."""

    cases: tuple[_Case, ...]
    case: _Case
    outcome: Outcome

    @property
    def objective(self) -> float:
        return self.case.reported(self.outcome.objective)

    def order(self) -> tuple[float, int, int, str]:
        """Order by what is made least; equal ones by fewer switches, fewer capacitors, then id."""
        converter = self.case.converter
        rounded = float(f"{self.objective:.9e}")
        return rounded, len(self.case.slots) - converter.n, converter.n, converter.id


def choose_parts(
    brief: Brief,
    request: PartsRequest,
    *,
    top: int = 5,
    include: Sequence[Converter] = (),
    blend: Blend = QUADRATIC,
    screened: int = MOST_SCREENED,
) -> PartsShortlist:
    """Find the candidates of a brief that are best when built from parts, and the parts for each.

    Parameters
    ----------
    brief
        What is asked for; its candidates are those of continuous sizing.
    request
        What is asked of the parts.
    top
        Most finalists.
    include
        Converters of the user's own, ranked with the rest.
    blend
        How R_SSL and R_FSL are joined.
    screened
        Most candidates to look at, the first by area, besides the included ones.

    Raises
    ------
    CapmusterError
        If ``top`` is below 1, or the request has no end.
    """
    from capmuster.rank.pool import gather  # noqa: PLC0415 -- slow to import

    if top < 1:
        raise CapmusterError(f"top: {top} is too small", accepted="1 or more")
    request = resolved(request, brief)
    pool = gather(brief, include)
    wanted = {one.id for one in include}
    places = [k for k in range(len(pool)) if k < screened or str(pool.ids[k]) in wanted]
    books = _books(request)
    left_out: Counter[str] = Counter()
    entrants = []
    for k in places:
        try:
            entrants.append(_cases(pool.converter(k), k + 1, brief, books, blend))
        except NoPartError:
            left_out[_NO_PART] += 1
    entrants.sort(key=lambda cases: (min(case.bound for case in cases), cases[0].place))
    ranked: list[_Found] = []
    searched, exact = 0, True
    for cases in entrants:
        # Best bound first: once a bound is above the last place, so are all that follow.
        if len(ranked) >= top and min(case.bound for case in cases) > ranked[-1].objective * (1 + _TIE):
            break
        searched += 1
        found, complete = _searched(cases)
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
        screened=len(places),
        searched=searched,
        exact=exact,
        left_out=dict(left_out),
    )


def _books(request: PartsRequest) -> tuple[OptionBook, ...]:
    """One book for each frequency, shared by all candidates."""
    units = Units.of(request)
    counts = (
        request.footprint is not None or request.least == "footprint",
        request.price is not None or request.least == "price",
    )
    return tuple(OptionBook(request, units, frequency, counts) for frequency in request.frequencies)


def _cases(
    converter: Converter, place: int, brief: Brief, books: Sequence[OptionBook], blend: Blend
) -> tuple[_Case, ...]:
    """Pose and relax the problems of one candidate."""
    slots = slots_of(converter, brief)
    problems = [pose(slots, converter.ratio, brief, book, blend) for book in books]
    return tuple(
        _Case(converter, place, slots, book, problem, relax(problem))
        for book, problem in zip(books, problems, strict=True)
    )


def _searched(cases: tuple[_Case, ...]) -> tuple[_Found | None, bool]:
    """Find the best parts over all frequencies, and say whether the search was exhaustive."""
    best: _Found | None = None
    complete = True
    for case in sorted(cases, key=lambda one: one.bound):
        if best is not None and case.bound >= best.objective:
            break
        outcome = search(case.problem, case.relaxed)
        complete = complete and outcome.proven
        if outcome.selection is not None:
            found = _Found(cases, case, outcome)
            if best is None or found.objective < best.objective:
                best = found
    return best, complete


def _finished(found: _Found, brief: Brief, blend: Blend) -> Finalist:
    """Prove a candidate's parts at every frequency that could be better, and work out what it does."""
    proofs = []
    case, best = found.case, found.outcome
    for other in found.cases:
        if other is case or other.bound < found.objective:
            outcome = certify(other.problem, best if other is case else search(other.problem, other.relaxed))
            proofs.append((other, outcome))
            if other.reported(outcome.objective) < case.reported(best.objective):
                case, best = other, outcome
    assert best.selection is not None  # noqa: S101 -- only candidates with a choice are finalists
    objective = case.reported(best.objective)
    book = case.book
    fillings = fill(case.slots, case.problem, best.selection, book)
    ratio = float(case.converter.ratio)

    def at(volts: float) -> Condition:
        return condition(
            fillings,
            ratio,
            brief,
            request=book.request,
            frequency=book.frequency,
            input_voltage=volts,
            blend=blend,
        )

    return Finalist(
        converter=case.converter,
        pool_place=case.place,
        frequency=book.frequency,
        fillings=fillings,
        operating=at(operating_input(brief)),
        exact_impedance=exact_impedance(
            case.converter,
            fillings,
            brief,
            request=book.request,
            frequency=book.frequency,
            input_voltage=operating_input(brief),
        ),
        conditions=(at(brief.input_minimum), at(brief.input_nominal), at(brief.input_maximum)),
        objective=objective,
        bound=min(objective, *(other.reported(outcome.bound) for other, outcome in proofs)),
        relaxed=min(other.bound for other in found.cases),
        proven=all(outcome.proven for _, outcome in proofs),
    )
