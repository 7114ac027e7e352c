"""An exact dynamic programme over the elements of a converter.

A label is what some elements of a converter add up to; elements are added one after the other. A label that
another one beats in every sum need not go on (Bellman's principle of optimality), nor one whose Lagrangian
bound is above a choice that is known. A first pass that keeps few labels finds such a choice.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Final

import numpy as np

from capmuster.rank.discrete.problem import SLACK
from capmuster.rank.discrete.relaxed import Multipliers, Relaxed, relax
from capmuster.rank.frontier import frontier

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from capmuster.rank.discrete.problem import Group, Problem, Selection, Totals

    Floats = NDArray[np.float64]
    Integers = NDArray[np.int64]

_NARROW: Final = 32
_WIDE: Final = 20_000
_BLOCK: Final = 500_000  # labels made at once
_COMPARED: Final = 12_000  # comparing labels with each other takes the square of their number
_TIE: Final = 1e-12  # relative
_SLOW, _FAST, _FIXED, _FOOTPRINT, _PRICE = range(5)


@dataclass(frozen=True, slots=True)
class Outcome:
    """What a search for the best choice came to.

    Attributes
    ----------
    selection
        The best choice found, or None.
    totals
        Its sums.
    objective
        Its value of what is made least; infinite without a choice.
    bound
        No choice is below it; infinite if it is proven that there is no choice.
    proven
        Whether no better choice exists, but for rounding.
    """

    selection: Selection | None
    totals: Totals | None
    objective: float
    bound: float
    proven: bool


@dataclass(frozen=True, slots=True)
class _Labels:
    """What the elements so far add up to, and where that comes from.

    Attributes
    ----------
    sums
        Shape (labels, 5): R_SSL, R_FSL [ohm], fixed loss [W], footprint and price [whole units].
    parent, option
        Shape (labels,): label before the last element, and that element's option.
    """

    sums: Floats
    parent: Integers
    option: Integers

    def __len__(self) -> int:
        return len(self.sums)

    def take(self, rows: NDArray[np.generic]) -> _Labels:
        return _Labels(self.sums[rows], self.parent[rows], self.option[rows])


@dataclass(frozen=True, slots=True)
class _Step:
    """One element to add.

    Attributes
    ----------
    group
        Its group.
    options
        Shape (options, 5): what each of its options adds, columns as in `_Labels`.
    repeats
        Whether the element before it is of the same group; `repeated`: whether the one after it is.
    rest
        Shape (5,): least that the elements after it add to each sum.
    rest_cost
        Least priced cost of the elements after it.
    """

    group: int
    options: Floats
    repeats: bool
    repeated: bool
    rest: Floats
    rest_cost: float


def search(problem: Problem, relaxed: Relaxed | None = None, *, widest: int = _WIDE) -> Outcome:
    """Find the best choice of a problem.

    Parameters
    ----------
    problem
        The problem.
    relaxed
        Its continuous bound, if it is known already.
    widest
        Most labels; where there are more, the result is the best of those kept, and not proven.

    Returns
    -------
    Outcome
    """
    relaxed = relaxed or relax(problem)
    if relaxed.multipliers is None:
        return Outcome(None, None, math.inf, math.inf, proven=True)
    programme = _Programme(problem, relaxed.multipliers)
    best, complete = programme.run(math.inf, min(_NARROW, widest))
    if not complete:
        known = math.inf if best is None else problem.objective(problem.totals(best))
        again, complete = programme.run(known, widest)
        best = again or best
    if best is None:
        return Outcome(None, None, math.inf, math.inf if complete else relaxed.bound, proven=complete)
    totals = problem.totals(best)
    objective = problem.objective(totals)
    return Outcome(
        best, totals, objective, objective if complete else min(relaxed.bound, objective), proven=complete
    )


class _Programme:
    """The passes over the elements of one problem."""

    def __init__(self, problem: Problem, multipliers: Multipliers) -> None:
        self._problem = problem
        m = multipliers
        self._limits = m.limits(problem)
        self._prices = np.array([m.slow, m.fast, m.fixed, m.footprint, m.price])
        self._weight = 1.0 if problem.least == "loss" else problem.share
        self._square = problem.square_current if problem.conducts else 0.0
        self._steps = self._plan()

    def _plan(self) -> list[_Step]:
        """Elements of many options first: the later ones then meet few labels."""
        groups = sorted(enumerate(self._problem.groups), key=lambda pair: -len(pair[1].options))
        steps: list[_Step] = []
        rest, rest_cost = np.zeros(5), 0.0
        for g, group in reversed(groups):
            options = _columns(group)
            last = len(group.names) - 1
            for k in range(last, -1, -1):
                steps.append(_Step(g, options, k > 0, k < last, rest, rest_cost))
                rest = rest + options.min(axis=0)
                rest_cost += float((options @ self._prices).min())
        return steps[::-1]

    def run(self, known: float, widest: int) -> tuple[Selection | None, bool]:
        """Find the best choice no worse than ``known``, and whether no label was dropped for want of room."""
        complete = True
        labels = _Labels(np.zeros((1, 5)), np.zeros(1, dtype=np.int64), np.zeros(1, dtype=np.int64))
        stages: list[_Labels] = []
        for step in self._steps:
            labels = self._extended(labels, step, known)
            labels = labels.take(self._unbeaten(labels, step))
            if len(labels) > widest:
                complete = False
                order = np.argsort(self._priced(labels, step), kind="stable")
                labels = labels.take(np.sort(order[:widest]))
            stages.append(labels)
            if not len(labels):
                return None, complete
        return self._traced(stages), complete

    def _extended(self, labels: _Labels, step: _Step, known: float) -> _Labels:
        """Add every option of an element to every label, and keep what can still become a choice."""
        number = len(step.options)
        parts = []
        for start in range(0, len(labels), max(1, _BLOCK // number)):
            rows = np.arange(start, min(start + max(1, _BLOCK // number), len(labels)))
            parent, option = np.repeat(rows, number), np.tile(np.arange(number), len(rows))
            if step.repeats:
                # Alike elements take rising options: which of them takes which does not matter.
                rising = option >= labels.option[parent]
                parent, option = parent[rising], option[rising]
            made = _Labels(labels.sums[parent] + step.options[option], parent, option)
            parts.append(made.take(self._alive(made, step, known)))
        return _Labels(*(np.concatenate([getattr(one, name) for one in parts]) for name in _Labels.__slots__))

    def _priced(self, labels: _Labels, step: _Step) -> Floats:
        """Lagrangian bound on every completion of each label."""
        return np.asarray(labels.sums @ self._prices + (step.rest_cost - self._limits))

    def _alive(self, labels: _Labels, step: _Step, known: float) -> NDArray[np.bool_]:
        """Where a label can still become a choice within the limits that is no worse than a known one."""
        p = self._problem
        least = labels.sums + step.rest
        alive = np.ones(len(labels), dtype=bool)
        for column, budget in ((_FOOTPRINT, p.footprint), (_PRICE, p.price)):
            if budget is not None:
                alive &= least[:, column] <= budget
        blend = p.blend.value(least[:, _SLOW], least[:, _FAST])
        alive &= blend <= p.impedance_limit * (1 + SLACK)
        cost = self._square * blend + self._weight * least[:, _FIXED]
        if p.limit < math.inf:
            alive &= cost <= p.limit * (1 + SLACK)
        if known < math.inf:
            known += SLACK * abs(known)
            reached = {"loss": cost, "footprint": least[:, _FOOTPRINT], "price": least[:, _PRICE]}[p.least]
            alive &= (reached <= known) & (self._priced(labels, step) <= known)
        return np.asarray(alive)

    def _unbeaten(self, labels: _Labels, step: _Step) -> NDArray[np.intp]:
        """Places of the labels that no other one beats; all of them where there are too many to compare."""
        if len(labels) > _COMPARED:
            return np.arange(len(labels))
        p = self._problem
        counts = [_SLOW, _FAST, _FIXED]
        counts += [_FOOTPRINT] if p.footprint is not None or p.least == "footprint" else []
        counts += [_PRICE] if p.price is not None or p.least == "price" else []
        sums = labels.sums[:, counts]
        if step.repeated:
            # A label of a lower option has more ways to go on.
            sums = np.column_stack([sums, labels.option])
        _, distinct = np.unique(sums, axis=0, return_index=True)
        distinct = np.sort(distinct)
        return np.asarray(distinct[frontier(sums[distinct])])

    def _traced(self, stages: list[_Labels]) -> Selection:
        """Follow the best complete label back to the option of every element."""
        p, sums = self._problem, stages[-1].sums
        values = self._square * p.blend.value(sums[:, _SLOW], sums[:, _FAST]) + self._weight * sums[:, _FIXED]
        if p.least != "loss":
            values = sums[:, _FOOTPRINT if p.least == "footprint" else _PRICE]
        near = np.flatnonzero(values <= values.min() + _TIE * abs(values.min()))
        row = int(near[np.lexsort((sums[near, _FOOTPRINT], sums[near, _PRICE]))[0]])
        chosen: list[list[int]] = [[] for _ in p.groups]
        for step, labels in zip(reversed(self._steps), reversed(stages), strict=True):
            chosen[step.group].append(int(labels.option[row]))
            row = int(labels.parent[row])
        return tuple(tuple(sorted(options)) for options in chosen)


def _columns(group: Group) -> Floats:
    o = group.options
    return np.column_stack([o.slow, o.fast, o.fixed, o.footprint, o.price]).astype(np.float64)
