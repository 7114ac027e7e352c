"""Bounds on the optimum from any set of prices: a lower one by duality, an upper one by scaled areas."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from capmuster.rank.sizing.case import ABSENT
from capmuster.rank.sizing.task import Objective

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import NDArray

    from capmuster.rank.sizing.problem import Problem, Snapshot

    Floats = NDArray[np.float64]

__all__ = ["Design", "cannot_be_met", "lower_bound", "upper_bound"]

_TOLERANCE = 1e-10  # relative excess over a limit that counts as rounding
_ROUNDING = 2e-15  # what the arithmetic may have added to the Lagrangian, relative to its terms
_SMALL = 1e-6  # relative step of a slope by difference


def lower_bound(problem: Problem, at: Snapshot) -> Floats:
    """Return a lower bound on the objective that holds whatever the prices.

    Parameters
    ----------
    problem : Problem
        The task.
    at : Snapshot
        Any set of prices.

    Returns
    -------
    (B,) float array
        Lower bound: loss [W], area [mm2], or area per watt of output [mm2/W] (per ampere where the output is
        held).
    """
    bound = _least_lagrangian(problem, at)
    if "density" in problem.names:
        # area >= tau (V - droop) + bound, and V >= V - droop >= efficiency x V
        case = problem.case
        least_output = case.ideal**2 / (case.ideal + case.budget)
        bound = at.density + np.minimum(bound / least_output, bound / case.ideal)
    return bound


def cannot_be_met(problem: Problem, values: Floats) -> NDArray[np.bool_]:
    """Return where the prices prove that the limits cannot be met together.

    If the Lagrangian of the limits alone is positive at its least, some limit is exceeded whatever the areas.

    Parameters
    ----------
    problem : Problem
        The task.
    values : (d, B) float array
        Unknowns.

    Returns
    -------
    (B,) bool array
    """
    case, names = problem.case, problem.names
    if case.objective is Objective.LOSS:
        if not any(name in names for name in ("area", "area_c", "area_s")) or "impedance" not in names:
            return np.zeros(values.shape[1], dtype=bool)
        values = values.copy()
        if case.held:
            # All of the present prices of both limits, put on the hardest point.
            _, at = problem.conditions(values)
            by_slow = at.slow * np.exp(case.log_f_most)
            by_fast = at.fast_s[0] if len(at.fast_s) == 1 else at.fast_s[0] * at.duty_1
            values[names.index("steep")] = np.log(by_fast / by_slow)
            k = names.index("impedance")
            values[k] = np.log(np.hypot(by_slow, by_fast) / problem.reference[k])
        elif "log_f" in names:
            values[names.index("log_f")] = case.log_f_most
    _, at = problem.conditions(values, weight=0.0)
    scale = at.capacitors.total + sum(group.total for group in at.switches)
    return _least_lagrangian(problem, at) > 1e-9 * scale


def _least_lagrangian(problem: Problem, at: Snapshot) -> Floats:
    """Return a lower bound on the Lagrangian over all areas, frequencies, duties and loads.

    At its least over all areas it is a convex function of log f, of the share of phase 1 and of the logarithm
    of a free load, so its tangent bounds it over the whole interval. Along log f alone a parabola is sharper.
    """
    case = problem.case
    least, most = case.log_f_least, case.log_f_most
    if case.held:
        # Slower than that, the capacitors would have to be 26 orders of magnitude larger.
        least = most - 60.0
    log_f = np.log(at.f)
    room = np.maximum(np.where(at.slope_f > 0.0, log_f - least, most - log_f), 0.0)
    correction = -np.abs(at.slope_f) * room
    if "duty" not in problem.names and "log_load" not in problem.names:
        correction = np.fmax(correction, _parabola(at))
    bound = at.dual + correction
    if "duty" in problem.names:
        bound = bound - np.abs(at.slope_duty) * np.where(at.slope_duty > 0.0, at.duty_1, 1.0 - at.duty_1)
    if "log_load" in problem.names:
        log_load = np.log(at.current)
        room = np.where(at.slope_load > 0.0, log_load - case.log_load_least, case.log_load_most - log_load)
        bound = bound - np.abs(at.slope_load) * np.maximum(room, 0.0)
    total: Any = at.capacitors.total + sum(group.total for group in at.switches)
    return np.asarray(bound - _ROUNDING * (total + np.abs(at.dual - 2.0 * total)))


def _parabola(at: Snapshot) -> Floats:
    """Return what the Lagrangian can fall at most along log f, by its own curvature.

    Within a distance w of log f every T_i falls by at most the factor exp(-w/2), the curvature of its
    logarithm by exp(-w), and its slope changes by at most w/4; that bounds the curvature of the sum from
    below.
    """
    kinds = (at.capacitors, *at.switches)
    total: Any = sum(kind.total for kind in kinds)
    a, aa, ag, g, gg = (sum(part) for part in zip(*(kind.curvature for kind in kinds), strict=True))
    nu, rho = at.nu, at.falling
    bend = nu * (g - nu * gg) + rho * (a - rho * aa)
    tilt = 0.5 * (nu * nu * gg - 2.0 * nu * rho * ag + rho * rho * aa)
    slope = np.abs(at.slope_f)
    width = 2.0 * slope / (bend + tilt)
    curvature = np.exp(-1.5 * width) * bend
    curvature = curvature + np.exp(-0.5 * width) * np.maximum(tilt - 0.5 * width * total, 0.0)
    return np.asarray(np.where(curvature * width >= slope, -0.5 * slope * slope / curvature, -np.inf))


@dataclass(frozen=True, slots=True)
class Design:
    """A sizing that meets every limit, and what it is worth.

    Attributes
    ----------
    value : (B,) float array
        Objective, as in `lower_bound`; inf where a limit is missed.
    scale_c, scale_s : (B,) float array
        Factors on the capacitor and switch areas that answer the prices.
    f : (B,) float array
        Frequency [Hz].
    """

    value: Floats
    scale_c: Floats
    scale_s: Floats
    f: Floats


def upper_bound(problem: Problem, at: Snapshot) -> Design:
    """Return a sizing near the prices' answer that meets every limit.

    The least loss takes areas down to their budgets, then mends the impedance by frequency; the other
    objectives take all areas up or down together until loss and impedance are just met. A limit that is
    missed after that by more than rounding makes the value infinite.

    Parameters
    ----------
    problem : Problem
        The task.
    at : Snapshot
        Any set of prices.

    Returns
    -------
    Design
    """
    answer = _Answer(problem, at)
    if problem.case.objective is Objective.LOSS:
        return _scaled_to_budgets(answer)
    return _scaled_to_limits(answer)


@dataclass(frozen=True, slots=True)
class _Scaled:
    """Candidates at scaled areas; all (B,) arrays, per ampere where the load is free.

    `hardest` is the impedance at the hardest operating point, without the series resistance, and `met`
    whether it keeps to its limit.
    """

    f: Floats
    droop: Floats
    hardest: Floats
    met: NDArray[np.bool_]
    loss: Floats
    area_c: Floats
    area_s: Floats


class _Answer:
    """The elements' answer to the prices, at any scale of its areas."""

    def __init__(self, problem: Problem, at: Snapshot) -> None:
        case, capacitors = problem.case, at.capacitors
        self.case, self.names, self.current, self.f = case, problem.names, at.current, at.f
        y_c, y_s = capacitors.Y.value, [group.Y.value for group in at.switches]
        if "duty" in self.names:
            y_c = y_c / (at.duty_1 * (1.0 - at.duty_1))
            y_s = [y_s[0] / at.duty_1, y_s[1] / (1.0 - at.duty_1)]
        self.X: Floats = capacitors.X.value
        self.y_c, self.y_s = y_c, sum(y_s)
        self.area_c, self.area_s = capacitors.area.value, sum(group.area.value for group in at.switches)
        cycling_c, cycling_s = capacitors.cycling.value, sum(group.cycling.value for group in at.switches)
        self.cycle_c, self.cycle_s = cycling_c / at.f, cycling_s / at.f
        self.leakage_c = capacitors.loss.value - cycling_c
        self.leakage_s = sum(group.loss.value for group in at.switches) - cycling_s
        self.limit = case.impedance - case.lead * at.current
        self.f_most = np.exp(case.log_f_most)

    def scaled(self, scale_c: Floats, scale_s: Floats) -> _Scaled:
        """Return the candidates with both kinds of area scaled."""
        case, current = self.case, self.current
        X, y = self.X / scale_c, self.y_c / scale_c + self.y_s / scale_s + case.loop * current
        f = self._frequency(X, y)
        blend = np.hypot(X / f, y)
        hardest = np.hypot(X / self.f_most, y) if case.held else blend
        loss = f * (self.cycle_c * scale_c + self.cycle_s * scale_s + case.cycle / current)
        loss = loss + self.leakage_c * scale_c + self.leakage_s * scale_s + case.controller / current
        droop = blend + case.lead * current
        return _Scaled(
            f=f,
            droop=droop,
            hardest=hardest,
            met=(hardest <= self.limit * (1.0 + _TOLERANCE)) | (case.impedance >= ABSENT),
            loss=loss + case.conduction * droop,
            area_c=self.area_c * scale_c,
            area_s=self.area_s * scale_s,
        )

    def _frequency(self, X: Floats, y: Floats) -> Floats:
        """Return the frequency for given areas: what a held output wants, or near that of the prices."""
        case, limit = self.case, self.limit
        if case.held:
            wanted = case.wanted - case.lead * self.current
            rates = np.fmin(X / np.sqrt((wanted - y) * (wanted + y)), self.f_most)
            return np.asarray((case.share * rates).sum(axis=0))
        if case.objective is Objective.LOSS and "impedance" in self.names:
            return np.fmin(np.fmax(X / np.sqrt((limit - y) * (limit + y)), self.f), self.f_most)
        return self.f


def _scaled_to_budgets(answer: _Answer) -> Design:
    """Return the least-loss design with all areas inside of their budgets."""
    case, current = answer.case, answer.current
    both = np.minimum(1.0, case.area / (answer.area_c + answer.area_s) / current)
    scale_c = np.minimum(both, case.area_c / answer.area_c / current)
    scale_s = np.minimum(both, case.area_s / answer.area_s / current)
    point = answer.scaled(scale_c, scale_s)
    return Design(np.where(point.met, point.loss, np.inf), scale_c, scale_s, point.f)


def _scaled_to_limits(answer: _Answer) -> Design:
    """Return the least common scale of all areas that meets loss and impedance."""
    case, current = answer.case, answer.current
    scale = np.zeros_like(answer.f)
    if "impedance" in answer.names:
        scale = _scale_to(answer.limit, lambda s: answer.scaled(s, s).hardest, np.ones_like(scale))
    most_loss = case.budget * (1.0 + _TOLERANCE)
    enough = (scale > 0.0) & (answer.scaled(scale, scale).loss <= most_loss)
    # The fixed part of the loss takes no part in the scaling, but it does not disturb Newton's method either.
    by_loss = _scale_to(case.budget, lambda s: answer.scaled(s, s).loss, np.ones_like(scale))
    scale = np.where(enough, scale, np.fmax(by_loss, scale))
    point = answer.scaled(scale, scale)
    area = point.area_c + point.area_s
    met = point.met & (point.loss <= most_loss)
    for used, most in ((area, case.area), (point.area_c, case.area_c), (point.area_s, case.area_s)):
        met &= used * current <= most * (1.0 + _TOLERANCE)
    value = area / (case.ideal - point.droop) if "density" in answer.names else area
    return Design(np.where(met, value, np.inf), scale, scale, point.f)


def _scale_to(target: Floats, value_at: Callable[[Floats], Floats], ones: Floats) -> Floats:
    """Return a scale at which a falling value comes down to its target: two steps from 1, with one slope."""
    value = np.log(value_at(ones))
    slope = (np.log(value_at(ones * (1.0 + _SMALL))) - value) / _SMALL
    slope = np.where(slope < 0.0, slope, np.nan)
    scale = np.exp(np.clip((np.log(target) - value) / slope, -0.5, 0.5))
    again = (np.log(target) - np.log(value_at(scale))) / slope
    return np.asarray(scale * np.exp(np.clip(again, -0.5, 0.5)))
