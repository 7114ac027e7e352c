r"""Proof with an integer solver that a choice of parts is the best (OR-Tools CP-SAT).

The solver knows whole numbers and linear sums only. Every tangent of the blend bounds the loss from
below by a sum that is linear in the choice; coefficients are rounded down to whole steps, so what the
solver proves of such sums holds for the loss. Where its best choice comes out dearer than the tangents
say, the tangent at that choice is added and it is asked again (outer approximation: Duran and Grossmann,
Mathematical Programming 36, 1986).
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Final

import numpy as np

from capmuster.rank.discrete.labels import Outcome
from capmuster.rank.discrete.problem import SLACK

if TYPE_CHECKING:
    from ortools.sat.python import cp_model

    from capmuster.rank.discrete.problem import Problem, Selection, Totals

_STEPS: Final = 2**32  # whole steps that the largest total is divided into
_LEAST: Final = 1e-9  # a loss that nobody counts [W]
_ANGLES: Final = np.linspace(0.0, np.pi / 2, 9)[1:-1]
_PROVEN: Final = 1e-7
"""Relative gap below which a choice counts as proven: the rounding of the coefficients takes up to 1e-8."""


@dataclass
class _Model:
    """The linear model of a problem, to which tangents are added."""

    problem: Problem
    model: cp_model.CpModel
    counts: list[list[cp_model.IntVar]]
    loss: cp_model.IntVar
    step: float
    most: int
    directions: list[float] = field(default_factory=list)

    def add_tangent(self, angle: float) -> None:
        """Say that conduction loss is not below its tangent in one direction of the (R_SSL, R_FSL) plane."""
        p = self.problem
        by_slow, by_fast = (float(one) for one in p.blend.slopes(math.cos(angle), math.sin(angle)))
        self.directions.append(angle)
        if p.conducts:
            weight = 1.0 if p.least == "loss" else p.share
            loss = self._sum(p.square_current * by_slow, p.square_current * by_fast, weight, self.step)
            self.model.add(loss <= self.loss)
        if p.impedance_limit < math.inf:
            step = p.impedance_limit / _STEPS
            self.model.add(self._sum(by_slow, by_fast, 0.0, step) <= math.floor(_STEPS * (1 + SLACK)))

    def add_fixed(self) -> None:
        """Say what no tangent says where the output is held: the loss is the fixed loss."""
        weight = 1.0 if self.problem.least == "loss" else self.problem.share
        self.model.add(self._sum(0.0, 0.0, weight, self.step) <= self.loss)

    def _sum(self, slow: float, fast: float, fixed: float, step: float) -> cp_model.LinearExprT:
        """Weighted sum of a choice in whole steps, every coefficient rounded down."""
        total: list[cp_model.LinearExprT] = []
        for group, counts in zip(self.problem.groups, self.counts, strict=True):
            o = group.options
            # A coefficient beyond what may be reached at all is cut there, which is rounding down as well.
            value = np.minimum((slow * o.slow + fast * o.fast + fixed * o.fixed) / step, 2.0 * self.most)
            whole = np.floor(value * (1 - 1e-14)).astype(np.int64).tolist()
            total += [c * n for c, n in zip(whole, counts, strict=True) if c]
        return sum(total, start=0)


def certify(
    problem: Problem, known: Outcome, *, seed: int = 1, effort: float = 60.0, rounds: int = 60
) -> Outcome:
    """Search a problem with CP-SAT, without what another search knows but for a first choice.

    Parameters
    ----------
    problem
        The problem.
    known
        What another search came to; its choice is a hint, its bound is not used.
    seed
        Seed of the solver, which runs with one worker: the same problem gives the same result.
    effort
        Most work of each round, in the solver's deterministic seconds.
    rounds
        Most rounds; each adds a tangent.

    Returns
    -------
    Outcome
        The better of the known choice and the solver's, with the solver's bound.
    """
    from ortools.sat.python import cp_model  # noqa: PLC0415 -- slow to import

    if problem.impedance_limit <= 0 or problem.limit < 0:
        return Outcome(None, None, math.inf, math.inf, proven=True)
    model = _model(problem, known)
    solver = cp_model.CpSolver()
    solver.parameters.num_workers = 1
    solver.parameters.random_seed = seed
    solver.parameters.max_deterministic_time = effort
    best, bound = _judged(problem, known.selection), -math.inf
    for _ in range(rounds):
        status = solver.solve(model.model)
        if status == cp_model.INFEASIBLE:
            return Outcome(best[0], best[1], best[2], best[2], proven=True)
        if status not in {cp_model.OPTIMAL, cp_model.FEASIBLE}:
            break
        reached = solver.best_objective_bound
        bound = max(bound, reached * model.step if problem.least == "loss" else math.ceil(reached - 1e-6))
        selection = tuple(
            tuple(k for k, n in enumerate(counts) for _ in range(solver.value(n))) for counts in model.counts
        )
        found = _judged(problem, selection)
        best = min(best, found, key=lambda one: one[2])
        if _closed(best[2], bound) or status == cp_model.FEASIBLE:
            break
        totals = problem.totals(selection)
        angle = math.atan2(totals.fast, totals.slow)
        if angle in model.directions:
            break
        model.add_tangent(angle)
    if known.selection is None and best[0] is not None and problem.least == "loss":
        # Steps were as coarse as the dearest choice; ask again with steps that fit.
        first = Outcome(*best, bound, proven=False)
        return certify(problem, first, seed=seed, effort=effort, rounds=rounds)
    return Outcome(best[0], best[1], best[2], min(bound, best[2]), proven=_closed(best[2], bound))


def _closed(value: float, bound: float) -> bool:
    """Whether a choice of this value is proven best by a bound; without a choice nothing is."""
    return value < math.inf and value - bound <= _PROVEN * abs(value)


def _model(problem: Problem, known: Outcome) -> _Model:
    from ortools.sat.python import cp_model  # noqa: PLC0415 -- slow to import

    model = cp_model.CpModel()
    counts = []
    for g, group in enumerate(problem.groups):
        row = [model.new_int_var(0, len(group.names), f"{g} {k}") for k in range(len(group.options))]
        model.add(sum(row) == len(group.names))
        for k, variable in enumerate(row):
            if known.selection is not None:
                model.add_hint(variable, known.selection[g].count(k))
        counts.append(row)
    scale = _scale(problem, known)
    step = scale / _STEPS
    most = _STEPS if problem.least == "loss" else math.floor(_STEPS * (1 + SLACK))
    loss = model.new_int_var(0, most, "loss")
    made = _Model(problem, model, counts, loss, step, most)
    made.add_fixed()
    for angle in _ANGLES.tolist():
        made.add_tangent(angle)
    units: dict[str, cp_model.LinearExprT] = {}
    for name, budget in (("footprint", problem.footprint), ("price", problem.price)):
        units[name] = sum(
            int(c) * n
            for group, row in zip(problem.groups, counts, strict=True)
            for c, n in zip(getattr(group.options, name).tolist(), row, strict=True)
        )
        if budget is not None:
            model.add(units[name] <= budget)
    model.minimize(loss if problem.least == "loss" else units[problem.least])
    return made


def _scale(problem: Problem, known: Outcome) -> float:
    """Loss that all whole steps together stand for [W]: the limit, or what is surely enough."""
    if problem.limit < math.inf:
        return max(problem.limit, _LEAST)
    if known.selection is not None and problem.least == "loss":
        return max(known.objective * (1 + 1e-6), _LEAST)
    return math.fsum(
        len(g.names)
        * float(np.max(problem.square_current * (g.options.slow + g.options.fast) + g.options.fixed))
        for g in problem.groups
    )


def _judged(problem: Problem, selection: Selection | None) -> tuple[Selection | None, Totals | None, float]:
    """Return a choice with its sums and its value, infinite where there is none or it breaks a limit."""
    if selection is None:
        return None, None, math.inf
    totals = problem.totals(selection)
    if not problem.fits(totals):
        return None, None, math.inf
    return selection, totals, problem.objective(totals)
