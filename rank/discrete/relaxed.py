r"""The continuous bound: what mixtures of options would reach, with a multiplier for each limit.

The choice is relaxed to shares of options, a linear programme. Its dual values are multipliers; whatever they
are, Lagrangian relaxation with them gives a bound that holds, and that sum is what is reported: with prices
``rho`` on the slopes of the blend, ``sigma`` on fixed loss, ``alpha`` on footprint and ``beta`` on price,

.. math:: \sum_g m_g \min_o (\rho \cdot (x_o, y_o) + \sigma q_o + \alpha w_o + \beta p_o) - \text{limits}

(Geoffrion, "Lagrangean relaxation for integer programming", Mathematical Programming Study 2, 1974).
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Final

import numpy as np

from capmuster.rank.discrete.problem import stacked

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from capmuster.rank.discrete.problem import Problem

    Floats = NDArray[np.float64]

_ANGLES: Final = np.linspace(0.0, np.pi / 2, 9)[1:-1]
_SOLVED, _INFEASIBLE = 0, 2  # status of scipy.optimize.linprog


@dataclass(frozen=True, slots=True)
class Multipliers:
    """Prices of a Lagrangian relaxation, none negative.

    Attributes
    ----------
    slow, fast
        On R_SSL and on R_FSL [per ohm].
    fixed
        On the loss by gate drive and output charge [per W].
    footprint, price
        On whole units.
    impedance
        On the limit of the blend [per ohm].
    target
        On the limit of loss or efficiency [per W].
    """

    slow: float
    fast: float
    fixed: float
    footprint: float
    price: float
    impedance: float
    target: float

    def limits(self, problem: Problem) -> float:
        """Return what the prices make of the limits of a problem, to be subtracted from priced costs."""
        priced = [(self.impedance, problem.impedance_limit), (self.target, problem.limit)]
        # What is made least has its own value as a price, and a budget only what is beyond that.
        for price, budget, name in (
            (self.footprint, problem.footprint, "footprint"),
            (self.price, problem.price, "price"),
        ):
            if budget is not None:
                priced.append((price - (problem.least == name), float(budget)))
        return math.fsum(price * limit for price, limit in priced if price)

    def cost(self, problem: Problem) -> list[Floats]:
        """Priced cost of every option of each group."""
        return [
            self.slow * g.options.slow
            + self.fast * g.options.fast
            + self.fixed * g.options.fixed
            + self.footprint * g.options.footprint
            + self.price * g.options.price
            for g in problem.groups
        ]

    def bound(self, problem: Problem) -> float:
        """Return a value that no choice within the limits goes below.

        The prices may come from another problem with the same request and brief: what is made least, current
        and blend are the same.
        """
        costs = zip(self.cost(problem), problem.groups, strict=True)
        return math.fsum(len(g.names) * float(c.min()) for c, g in costs) - self.limits(problem)


@dataclass(frozen=True, slots=True)
class Relaxed:
    """The continuous bound of a problem.

    Attributes
    ----------
    bound
        No choice is below it, in the measure of what is made least; infinite if no choice keeps the limits.
    multipliers
        Where it comes from; None if it is infinite.
    slow, fast
        Limits of the output impedance of the relaxed choice [ohm].
    """

    bound: float
    multipliers: Multipliers | None
    slow: float
    fast: float


def tangents(problem: Problem, angles: Floats) -> tuple[Floats, Floats]:
    """Slopes of the blend by R_SSL and R_FSL along directions in the (R_SSL, R_FSL) plane [rad]."""
    return problem.blend.slopes(np.cos(angles), np.sin(angles))


def relax(problem: Problem) -> Relaxed:
    """Find the continuous bound.

    The blend is replaced by its tangents, first along fixed directions and then close to where they lead.
    """
    first = _solved(problem, _ANGLES)
    if math.isnan(first.slow):
        return first
    close = math.atan2(first.fast, first.slow) + np.linspace(-0.05, 0.05, 9)
    second = _solved(problem, np.clip(close, 1e-3, np.pi / 2 - 1e-3))
    return second if second.multipliers is not None and second.bound > first.bound else first


@dataclass(frozen=True, slots=True)
class _Budget:
    """A limit on whole units: which, what every option takes, and how much there is."""

    name: str
    used: Floats
    most: int

    @property
    def unit(self) -> float:
        """What the rows of the linear programme are divided by, so that their numbers are near 1."""
        return float(max(self.most, 1))


def _solved(problem: Problem, angles: Floats) -> Relaxed:
    """Bound with the tangents along some directions."""
    from scipy.optimize import linprog  # noqa: PLC0415 -- slow to import

    by_slow, by_fast = tangents(problem, angles)
    slow, fast, fixed = (stacked(problem, name) for name in ("slow", "fast", "fixed"))
    square, least_loss = problem.square_current, problem.least == "loss"
    budgets = [
        _Budget(name, stacked(problem, name), most)
        for name, most in (("footprint", problem.footprint), ("price", problem.price))
        if most is not None
    ]
    # Unknowns: how much of each option, then I^2 x blend [W].
    rows = [np.append(square * (a * slow + b * fast), -1.0) for a, b in zip(by_slow, by_fast, strict=True)]
    rows += [np.append(budget.used, 0.0) / budget.unit for budget in budgets]
    most = [0.0] * len(angles) + [budget.most / budget.unit for budget in budgets]
    loss = np.append(fixed * (1.0 if least_loss else problem.share), float(problem.conducts))
    unit, objective = 1.0, loss
    limited = not least_loss and problem.limit < math.inf
    if limited:
        rows.append(loss)
        most.append(problem.limit)
    if not least_loss:
        taken = stacked(problem, problem.least)
        unit = max(1.0, float(taken.mean()))
        objective = np.append(taken, 0.0) / unit
    sizes = [len(g.options) for g in problem.groups]
    highest = square * problem.impedance_limit
    result = linprog(
        objective,
        A_ub=np.array(rows),
        b_ub=most,
        A_eq=np.hstack([np.repeat(np.eye(len(sizes)), sizes, axis=1), np.zeros((len(sizes), 1))]),
        b_eq=[len(g.names) for g in problem.groups],
        bounds=[(0, None)] * sum(sizes) + [(min(0.0, highest), highest)],
        method="highs",
    )
    if result.status == _INFEASIBLE:
        return Relaxed(math.inf, None, math.nan, math.nan)
    if result.status != _SOLVED:
        # The solver gave up: without prices on any limit a bound is poor, and holds.
        poor = Multipliers(
            slow=0.0,
            fast=0.0,
            fixed=float(least_loss),
            footprint=float(problem.least == "footprint"),
            price=float(problem.least == "price"),
            impedance=0.0,
            target=0.0,
        )
        return Relaxed(poor.bound(problem), poor, math.nan, math.nan)
    prices = unit * np.maximum(-np.asarray(result.ineqlin.marginals, dtype=np.float64), 0.0)
    on_tangents, on_budgets = prices[: len(angles)], prices[len(angles) :]
    on_loss = 1.0 if least_loss else float(prices[-1]) if limited else 0.0
    per_unit = {b.name: float(price) / b.unit for b, price in zip(budgets, on_budgets, strict=False)}
    # What the tangents weigh beyond the conduction loss is the price of the impedance limit.
    beyond = max(0.0, float(on_tangents.sum()) - on_loss * problem.conducts)
    multipliers = Multipliers(
        slow=square * float(on_tangents @ by_slow),
        fast=square * float(on_tangents @ by_fast),
        fixed=on_loss * (1.0 if least_loss else problem.share),
        footprint=per_unit.get("footprint", 0.0) + (problem.least == "footprint"),
        price=per_unit.get("price", 0.0) + (problem.least == "price"),
        impedance=beyond * square,
        target=0.0 if least_loss else on_loss,
    )
    share = np.asarray(result.x, dtype=np.float64)[:-1]
    return Relaxed(multipliers.bound(problem), multipliers, float(share @ slow), float(share @ fast))
