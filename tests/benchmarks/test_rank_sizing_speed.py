"""Time of the batch sizing, and of a general-purpose solver at the same tasks, core for core.

The general solvers are scipy's, with analytic gradients, on the logarithms of all areas and of the frequency
(and of a free load), where every task is smooth and convex. They start where a designer would: equal areas,
the middle of the frequency band. Both sides are measured in processor time of one core, in the same run. Run
with `-s` to see the figures.
"""

from __future__ import annotations

import sys
import time

import numpy as np
import pytest
from scipy.optimize import Bounds, NonlinearConstraint, minimize

from capmuster.rank.sizing import LossModel, Objective, Status, Task, Use, size

F = (1e5, 1e9)
V, ETA = 3.0, 0.75
MANY = 100_000

pytestmark = pytest.mark.benchmark


def candidates(seed, count):
    """Return converters of one to four capacitors with 3 n + 1 switches, and a load and an area for each."""
    rng = np.random.default_rng(seed)
    n = rng.integers(1, 5, count)[:, None]
    there_c, there_s = np.arange(4) < n, np.arange(13) < 3 * n + 1
    q = rng.integers(1, 6, count)[:, None]
    a_c, a_r = (rng.integers(1, 6, there.shape) / q * there for there in (there_c, there_s))
    density = 10.0 ** rng.uniform(-9, -7, there_c.shape)
    model = LossModel.build(
        a_c**2 / density,
        a_r**2 * 10.0 ** rng.uniform(-3.5, -2, there_s.shape),
        np.where(np.arange(13) % 2, 1, 2),
        series=a_c**2 * 10.0 ** rng.uniform(-4, -2, there_c.shape),
        plate=10.0 ** rng.uniform(-2.5, -1, there_c.shape) * density * there_c,
        leakage_c=10.0 ** rng.uniform(-9, -6, there_c.shape) * there_c,
        gate=10.0 ** rng.uniform(-9.5, -8, there_s.shape) * there_s,
        output_charge=10.0 ** rng.uniform(-10, -8.5, there_s.shape) * there_s,
        leakage_s=10.0 ** rng.uniform(-9, -6, there_s.shape) * there_s,
        controller=10.0 ** rng.uniform(-6, -5, count),
    )
    return model, 10.0 ** rng.uniform(-2.5, -1, count), 10.0 ** rng.uniform(-0.5, 1, count)


def tasks(current, area):
    common = {"frequency": F, "ideal_output": V, "efficiency": ETA}
    held = common | {"use": Use.FREQUENCY, "output": 0.9 * V, "most_impedance": 0.08 * V / current}
    return {
        "least loss": Task(objective=Objective.LOSS, frequency=F, current=current, most_area=area),
        "least area": Task(objective=Objective.AREA, current=current, **common),
        "greatest density": Task(
            objective=Objective.DENSITY, current_range=(0.3 * current, 3.0 * current), **common
        ),
        "least loss, impedance limited": Task(
            objective=Objective.LOSS,
            frequency=F,
            current=current,
            most_area=area,
            most_impedance=0.2 * V / current,
        ),
        "least area, output held by frequency": Task(objective=Objective.AREA, current=current, **held),
    }


def say(line):
    sys.stdout.write(f"\n{line}\n")


def seconds_for(model, task):
    best = np.inf
    for _ in range(3):
        start = time.process_time()
        ours = size(model, task)
        best = min(best, time.process_time() - start)
    return best, ours


@pytest.mark.parametrize("name", tasks(1.0, 1.0))
def test_a_hundred_thousand_candidates(name):
    """Every candidate to a gap of 1e-9 or proven infeasible, in 1 s of one core; two are allowed."""
    model, current, area = candidates(1, MANY)
    seconds, ours = seconds_for(model, tasks(current, area)[name])
    counts = np.bincount(ours.status, minlength=3)
    worst = ours.gap[ours.status == Status.OPTIMAL].max()
    say(f"{name}: {seconds:.2f} s, {counts} optimal, infeasible and open, gap {worst:.1e}")
    assert worst <= 1e-9
    assert counts[Status.OPTIMAL] > MANY // 2
    assert counts[Status.UNRESOLVED] == 0
    assert seconds < 1.0


class Convex:
    """One task of one candidate, as functions of the logarithms of areas, frequency and, where free, load."""

    def __init__(self, model, k, objective, current, area):
        c, s = model.alpha[k] > 0, model.beta[k] > 0
        self.n, self.objective, self.current, self.area = c.sum(), objective, current, area
        self.alpha, self.slope_c, self.beta = model.alpha[k][c], 4 * model.series[k][c], 2 * model.beta[k][s]
        self.cycle = np.r_[model.plate[k][c], (model.gate + model.output_charge)[k][s]]
        self.leakage = np.r_[model.leakage_c[k][c], model.leakage_s[k][s]]
        self.controller = model.controller[k]
        parts, load = len(self.cycle), objective is Objective.DENSITY
        least = np.r_[np.full(parts, -40.0), np.log(F[0]), [np.log(0.3 * current)] * load]
        most = np.r_[np.full(parts, 20.0), np.log(F[1]), [np.log(3.0 * current)] * load]
        self.bounds = Bounds(least, most)
        self.start = np.r_[
            np.full(parts, np.log(area / parts)), np.log(np.sqrt(F[0] * F[1])), [np.log(current)] * load
        ]

    def _sums(self, z):
        """Impedance, fixed loss and area, each with its gradient."""
        n, parts = self.n, len(self.cycle)
        a, f = np.exp(z[:parts]), np.exp(z[parts])
        slow, fast_c, fast_s = self.alpha / a[:n] / f, self.slope_c / a[:n], self.beta / a[n:]
        x, y = slow.sum(), fast_c.sum() + fast_s.sum()
        R = np.hypot(x, y)
        spent, cycling = (f * self.cycle + self.leakage) * a, f * (self.cycle * a).sum()
        dR, dQ, dA = np.zeros((3, len(z)))
        dR[:n], dR[n:parts], dR[parts] = -(x * slow + y * fast_c) / R, -y * fast_s / R, -x * x / R
        dQ[:parts], dQ[parts], dA[:parts] = spent, cycling, a
        return (R, dR), (spent.sum() + self.controller, dQ), (a.sum(), dA)

    def _load(self, z):
        return (
            (np.exp(z[-1]), np.eye(len(z))[-1])
            if self.objective is Objective.DENSITY
            else (self.current, 0.0)
        )

    def goal(self, z):
        """Logarithm of the objective."""
        (R, dR), (Q, dQ), (A, dA) = self._sums(z)
        current, d_current = self._load(z)
        if self.objective is Objective.LOSS:
            loss = current**2 * R + Q
            return np.log(loss), (current**2 * dR + dQ) / loss
        if self.objective is Objective.AREA:
            return np.log(A), dA / A
        droop, d_droop = current * R, current * (R * d_current + dR)
        # The limit keeps the droop below (1 - eta) V; beyond half of V the logarithm goes on as its tangent.
        near = min(droop, 0.5 * V)
        log_output = np.log(V - near) - (droop - near) / (V - near)
        return np.log(A / current) - log_output, dA / A - d_current + d_droop / (V - near)

    def limit(self, z):
        """Logarithm of what is used of the limit: at most 0."""
        (R, dR), (Q, dQ), (A, dA) = self._sums(z)
        if self.objective is Objective.LOSS:
            return np.log(A / self.area), dA / A
        current, d_current = self._load(z)
        used = current * R + ETA * Q / current
        d_used = current * (R * d_current + dR) + ETA * (dQ - Q * d_current) / current
        return np.log(used / ((1 - ETA) * V)), d_used / used

    def solve(self, method):
        """Best objective that the solver finds, and by how much its limit is exceeded."""
        if method == "SLSQP":
            limit = {"type": "ineq", "fun": lambda z: -self.limit(z)[0], "jac": lambda z: -self.limit(z)[1]}
            options = {"ftol": 1e-13, "maxiter": 2000}
        else:
            limit = NonlinearConstraint(
                lambda z: self.limit(z)[0], -np.inf, 0.0, jac=lambda z: self.limit(z)[1][None]
            )
            options = {"gtol": 1e-10, "xtol": 1e-13, "barrier_tol": 1e-11, "maxiter": 3000}
        found = minimize(
            self.goal,
            self.start,
            jac=True,
            method=method,
            bounds=self.bounds,
            constraints=[limit],
            options=options,
        )
        return np.exp(found.fun), self.limit(found.x)[0]


@pytest.mark.filterwarnings("ignore:delta_grad")
@pytest.mark.parametrize(
    ("method", "name", "few", "times"),
    [
        ("trust-constr", "least loss", 24, 3000),
        ("trust-constr", "least area", 24, 3000),
        ("trust-constr", "greatest density", 24, 3000),
        ("SLSQP", "least loss", 60, 100),
        ("SLSQP", "least area", 60, 100),
        ("SLSQP", "greatest density", 60, 100),
    ],
)
def test_against_a_general_solver(method, name, few, times):
    """Many times faster per candidate on one core, and never worse than what the general solver comes to."""
    model, current, area = candidates(1, MANY)
    seconds, ours = seconds_for(model, tasks(current, area)[name])
    objective = tasks(1.0, 1.0)[name].objective
    chosen = np.flatnonzero(ours.status == Status.OPTIMAL)[:few]
    start = time.process_time()
    theirs = [Convex(model, k, objective, current[k], area[k]).solve(method) for k in chosen]
    ratio = (time.process_time() - start) / len(chosen) / (seconds / MANY)
    value, excess = np.array(theirs).T
    best = 1.0 / ours.value[chosen] if objective is Objective.DENSITY else ours.value[chosen]
    kept = excess <= 1e-9
    lead = best / value - 1.0
    say(f"{name}: {ratio:.0f} times faster than {method}, and better by {-np.median(lead):.1e}")
    assert kept.sum() >= few // 2
    assert lead[kept].max() <= 1e-8
    assert ratio >= times
