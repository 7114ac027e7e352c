"""The sizing tasks as geometric programmes over every single area, for a general convex solver: nothing is shared.

Each programme is written down from the definitions (theory section 5 and 6) in cvxpy's disciplined geometric
programming (Agrawal, Diamond and Boyd, "Disciplined geometric programming", Optimization Letters 2019) and solved by the
interior-point solver Clarabel. Candidates of one shape share a compiled programme whose coefficients are parameters.
"""

from __future__ import annotations

import cvxpy
import numpy as np

SOLVER = {"solver": "CLARABEL", "tol_gap_abs": 1e-10, "tol_gap_rel": 1e-10, "tol_feas": 1e-10}


class PlainSizing:
    """One task for candidates of n capacitors and m switches.

    `objective` is "loss", "area" or "density", `use` "fixed", "frequency" or "conductance". `limits` names what
    is limited: "area", "area_c", "area_s", "impedance" (or droop, with a free load), "efficiency".
    """

    def __init__(self, n, m, phase, objective, use="fixed", limits=(), duty=0.5, points=1):
        self.parameters = {}
        self.n, self.m, self.objective, self.use, self.points = n, m, objective, use, points
        A, S = cvxpy.Variable(n, pos=True), cvxpy.Variable(m, pos=True)
        f = cvxpy.Variable(pos=True)
        p = self._parameter
        if duty is None:
            D = cvxpy.Variable(2, pos=True)
            constraints = [D[0] + D[1] <= 1.0]
        else:
            D = [duty, 1.0 - duty]
            constraints = []
        current = cvxpy.Variable(pos=True) if objective == "density" else p("current")
        X = cvxpy.sum(cvxpy.multiply(p("alpha", n), A**-1))
        y = p("loop")
        for i in range(n):
            y = y + p("series", n)[i] * (1 / D[0] + 1 / D[1]) / A[i]
        for j in range(m):
            y = y + p("beta", m)[j] / D[phase[j] - 1] / S[j]
        cycle = (
            p("cycle")
            + cvxpy.sum(cvxpy.multiply(p("cycle_c", n), A))
            + cvxpy.sum(cvxpy.multiply(p("cycle_s", m), S))
        )
        leakage = cvxpy.sum(cvxpy.multiply(p("leak_c", n), A)) + cvxpy.sum(cvxpy.multiply(p("leak_s", m), S))
        area_c, area_s = cvxpy.sum(A), cvxpy.sum(S)
        lead, most = p("lead"), p("f_most")

        # The output impedance enters everything increasingly, so an upper bound R on it serves as its value.
        R = cvxpy.Variable(pos=True)
        if use == "frequency":
            # f_k serves operating point k; the hardest does with the highest frequency.
            f_k = cvxpy.Variable(points, pos=True)
            wanted = p("wanted", points)
            for k in range(points):
                droop = wanted[k] / current if objective == "density" else wanted[k]
                constraints += [self._blend(X / f_k[k], y, lead) <= droop]
            constraints += [self._blend(X / most, y, lead) <= R]
            rate = cvxpy.sum(cvxpy.multiply(p("share", points), f_k))
        else:
            constraints += [self._blend(X / f, y, lead) <= R, f <= most, f >= p("f_least")]
            rate = f
        fixed = p("controller") + leakage + rate * cycle
        if "impedance" in limits:
            constraints += [R * current <= p("droop")]
        for name, used in (("area", area_c + area_s), ("area_c", area_c), ("area_s", area_s)):
            if name in limits:
                constraints += [used <= p(name)]
        if objective == "density":
            constraints += [current >= p("I_least"), current <= p("I_most")]
        if "efficiency" in limits and use == "fixed":
            # I^2 R + eta Q <= (1 - eta) V I
            constraints += [R * current**2 + p("eta") * fixed <= p("one_less_eta") * p("ideal") * current]
        elif "efficiency" in limits:
            constraints += [fixed <= p("spare") * current]  # V_out / eta - V_ideal
        if objective == "loss":
            goal = cvxpy.Minimize(fixed + (R * current**2 if use == "fixed" else 0))
        elif objective == "area":
            goal = cvxpy.Minimize(area_c + area_s)
        elif use == "fixed":
            power = cvxpy.Variable(pos=True)
            constraints += [power + R * current**2 <= p("ideal") * current]
            goal = cvxpy.Minimize((area_c + area_s) / power)
        else:
            goal = cvxpy.Minimize((area_c + area_s) / (p("output") * current))
        self.problem = cvxpy.Problem(goal, constraints)

    def _parameter(self, name, size=None):
        if name not in self.parameters:
            self.parameters[name] = (
                cvxpy.Parameter(pos=True) if size is None else cvxpy.Parameter(size, pos=True)
            )
        return self.parameters[name]

    @staticmethod
    def _blend(x, y, lead):
        return (x**2 + y**2) ** 0.5 + lead

    def solve(self, **figures):
        """Best objective of one candidate (greatest power density for "density"), or None where there is none."""
        for name, parameter in self.parameters.items():
            value = np.asarray(figures[name], dtype=float)
            # the logarithm of a parameter must exist: nothing is exactly 0 here
            parameter.value = np.maximum(value, 1e-30)
        self.problem.solve(gp=True, **SOLVER)
        if self.problem.status not in ("optimal", "optimal_inaccurate"):
            return None
        return 1.0 / self.problem.value if self.objective == "density" else self.problem.value
