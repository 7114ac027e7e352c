"""The sizing tasks as geometric programmes over every single area, for a general convex solver.

Nothing is shared with the project: each programme is written down from the definitions (theory sections 5 and
6) in disciplined geometric programming (Agrawal, Diamond and Boyd, "Disciplined geometric programming",
Optimization Letters 2019; cvxpy) and solved by the interior-point solver Clarabel. Candidates of one shape
share a compiled programme with parameters.
"""

from __future__ import annotations

import contextlib
import warnings

import cvxpy
import numpy as np

#: What `PlainSizing.solve` says where the solver fails.
UNDECIDED = "undecided"

PHASES = (1, 2, 1, 2, 1, 1, 2)
CAPACITORS, SWITCHES = 3, len(PHASES)
# Tried in turn: where limits can just be met, the solver may stall short of the tighter tolerance.
_TOLERANCES = [{"tol_gap_abs": t, "tol_gap_rel": t, "tol_feas": t} for t in (1e-9, 1e-8, 1e-7)]


def random_figures(rng, count):
    """Coefficients of `count` invented candidates: those of a chip, over a few decades."""
    n, m = (count, CAPACITORS), (count, SWITCHES)
    a_c, a_r = rng.uniform(0.2, 2.0, n), rng.uniform(0.2, 2.0, m)
    density = 10.0 ** rng.uniform(-9, -7, n)
    gate, output_charge = 10.0 ** rng.uniform(-9.5, -7.5, m), 10.0 ** rng.uniform(-10, -8, m)
    return {
        "alpha": a_c**2 / density,
        "series": a_c**2 * 10.0 ** rng.uniform(-4, -2, n),
        "cycle_c": 10.0 ** rng.uniform(-2.5, -1, n) * density * rng.uniform(0.2, 3.0, n) ** 2,
        "leak_c": 10.0 ** rng.uniform(-9, -5, n),
        "beta": a_r**2 * 10.0 ** rng.uniform(-3.5, -1.5, m),
        "gate": gate,
        "output_charge": output_charge,
        "cycle_s": gate + output_charge,
        "leak_s": 10.0 ** rng.uniform(-8, -5, m),
        "controller": 10.0 ** rng.uniform(-6, -4, count),
        "cycle": 10.0 ** rng.uniform(-14, -12, count),
        "loop": 10.0 ** rng.uniform(-4, -2, count),
        "lead": 10.0 ** rng.uniform(-4, -2, count),
    }


class PlainSizing:
    """One task, for any number of candidates one after the other.

    `objective` is "loss", "area" or "density", `use` "fixed", "frequency" or "conductance". `limits` names
    what is limited: "area", "area_c", "area_s", "droop", "efficiency". A `duty` of None is free.
    """

    def __init__(self, objective, limits, use="fixed", duty=0.5, points=1):
        self.parameters, self.objective, self.limits, self.use = {}, objective, limits, use
        self.A, self.S = cvxpy.Variable(CAPACITORS, pos=True), cvxpy.Variable(SWITCHES, pos=True)
        self.D = cvxpy.Variable(2, pos=True) if duty is None else (duty, 1.0 - duty)
        self.constraints = [self.D[0] + self.D[1] <= 1.0] if duty is None else []
        free = objective == "density"
        self.current = cvxpy.Variable(pos=True) if free else self._figure("current")
        if free:
            self.constraints += [
                self.current >= self._figure("I_least"),
                self.current <= self._figure("I_most"),
            ]
        # R enters everything increasingly, so an upper bound on it serves as its value.
        self.R = cvxpy.Variable(pos=True)
        fixed = self._fixed_loss(self._by_frequency(points) if use == "frequency" else self._one_frequency())
        self._limit(fixed)
        self.problem = cvxpy.Problem(cvxpy.Minimize(self._goal(fixed)), self.constraints)

    def _figure(self, name, size=None):
        if name not in self.parameters:
            self.parameters[name] = cvxpy.Parameter(size, pos=True) if size else cvxpy.Parameter(pos=True)
        return self.parameters[name]

    def _blend(self, f):
        """Output impedance at a frequency: both limits in quadrature, and the wiring at the output."""
        slow = cvxpy.sum(cvxpy.multiply(self._figure("alpha", CAPACITORS), self.A**-1)) / f
        series, beta = self._figure("series", CAPACITORS), self._figure("beta", SWITCHES)
        fast = self._figure("loop")
        for i in range(CAPACITORS):
            fast += series[i] * (1 / self.D[0] + 1 / self.D[1]) / self.A[i]
        for j, phase in enumerate(PHASES):
            fast += beta[j] / self.D[phase - 1] / self.S[j]
        return (slow**2 + fast**2) ** 0.5 + self._figure("lead")

    def _one_frequency(self):
        f = cvxpy.Variable(pos=True)
        self.constraints += [
            f >= self._figure("f_least"),
            f <= self._figure("f_most"),
            self._blend(f) <= self.R,
        ]
        return f

    def _by_frequency(self, points):
        """Mean frequency where each operating point has its own, and the hardest one the highest."""
        f = cvxpy.Variable(points, pos=True)
        wanted, share = self._figure("wanted", points), self._figure("share", points)
        per = self.current if self.objective == "density" else 1.0
        self.constraints += [self._blend(f[k]) * per <= wanted[k] for k in range(points)]
        self.constraints += [self._blend(self._figure("f_most")) <= self.R]
        return cvxpy.sum(cvxpy.multiply(share, f))

    def _fixed_loss(self, f):
        cycle, leakage = self._figure("cycle"), self._figure("controller")
        for kind, areas, size in (("c", self.A, CAPACITORS), ("s", self.S, SWITCHES)):
            cycle += cvxpy.sum(cvxpy.multiply(self._figure(f"cycle_{kind}", size), areas))
            leakage += cvxpy.sum(cvxpy.multiply(self._figure(f"leak_{kind}", size), areas))
        return leakage + f * cycle

    def _limit(self, fixed):
        used = {"area_c": cvxpy.sum(self.A), "area_s": cvxpy.sum(self.S), "droop": self.R * self.current}
        used["area"] = used["area_c"] + used["area_s"]
        for name in self.limits:
            if name in used:
                self.constraints.append(used[name] <= self._figure(name))
        if "efficiency" in self.limits and self.use == "fixed":
            # I^2 R + eta Q <= (1 - eta) V I
            spent = self.R * self.current**2 + self._figure("eta") * fixed
            self.constraints.append(
                spent <= self._figure("one_less_eta") * self._figure("ideal") * self.current
            )
        elif "efficiency" in self.limits:
            self.constraints.append(fixed <= self._figure("spare") * self.current)  # V_out / eta - V_ideal

    def _goal(self, fixed):
        area = cvxpy.sum(self.A) + cvxpy.sum(self.S)
        if self.objective == "area":
            return area
        if self.objective == "loss":
            return fixed + self.R * self.current**2 if self.use == "fixed" else fixed
        if self.use != "fixed":
            return area / (self._figure("output") * self.current)
        power = cvxpy.Variable(pos=True)
        self.constraints.append(power + self.R * self.current**2 <= self._figure("ideal") * self.current)
        return area / power

    def solve(self, figures):
        """Best objective of one candidate (the density for "density"), None where limits cannot be met."""
        for name, parameter in self.parameters.items():
            parameter.value = np.asarray(figures[name], dtype=float)
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", UserWarning)  # "may be inaccurate": the comparison will tell
            for tolerances in _TOLERANCES:
                with contextlib.suppress(cvxpy.SolverError):
                    self.problem.solve(gp=True, solver="CLARABEL", **tolerances)
                    break
            else:
                return UNDECIDED
        if self.problem.status in (cvxpy.INFEASIBLE, cvxpy.INFEASIBLE_INACCURATE):
            return None
        return 1.0 / self.problem.value if self.objective == "density" else self.problem.value
