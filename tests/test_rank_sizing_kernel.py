"""The parts of the sizing kernel: slopes against differences, bounds at any prices, small linear systems."""

from __future__ import annotations

import numpy as np
import pytest
from plain_sizing import random_figures
from test_rank_sizing_reference import F_LEAST, F_MOST, KINDS, model_of, task_of, with_limits

from capmuster.rank.sizing import Status, size
from capmuster.rank.sizing.case import case_of
from capmuster.rank.sizing.certificate import lower_bound, upper_bound
from capmuster.rank.sizing.dual import Dual, exp, hypot, log, solve, sqrt, variable
from capmuster.rank.sizing.newton import search
from capmuster.rank.sizing.packing import pack
from capmuster.rank.sizing.problem import Problem
from capmuster.rank.sizing.start import first_guess, unknown_names

COUNT = 10


def posed(kind, seed=3):
    """Return a problem of some candidates with unknowns to start from, and its solution by `size`."""
    _, _, _, duty, points, one_frequency = KINDS[kind]
    rng = np.random.default_rng(seed)
    figures = with_limits(rng, random_figures(rng, COUNT), points)
    figures["f_most"] = np.full(COUNT, F_MOST)
    figures["f_least"] = figures["f_most"] if one_frequency else np.full(COUNT, F_LEAST)
    if kind.startswith("density"):
        figures["wanted"] = figures["wanted"] * figures["current"][:, None]
    model, task = model_of(figures), task_of(figures, KINDS[kind])
    case = case_of(model, task)
    packed = pack(model, None if duty is None else np.full(COUNT, duty))
    names = unknown_names(case, duty_free=duty is None)
    with np.errstate(all="ignore"):
        values, reference = first_guess(case, packed.capacitors, packed.switches, names)
    return Problem(case, packed.capacitors, packed.switches, names, reference), values, size(model, task)


@pytest.mark.parametrize("kind", KINDS)
def test_every_slope_against_central_differences(kind):
    """Residuals move with each unknown as their slopes say (difference quotient, error of second order)."""
    problem, values, _ = posed(kind)
    values = values + np.random.default_rng(4).uniform(-0.2, 0.2, values.shape)
    rows, _ = problem.conditions(values)
    step = 1e-5
    for k, name in enumerate(problem.names):
        ahead, behind = values.copy(), values.copy()
        ahead[k] += step
        behind[k] -= step
        rows_ahead, rows_behind = (problem.conditions(v)[0] for v in (ahead, behind))
        for row, left, right, equation in zip(rows, rows_behind, rows_ahead, problem.names, strict=True):
            if equation == "log_load" and name != "log_load":
                continue  # its scale is taken as constant, which it is at the solution
            quotient = (right.value - left.value) / (2 * step)
            slope = np.broadcast_to(row.slopes.get(k, 0.0), (COUNT,))
            np.testing.assert_allclose(slope, quotient, rtol=2e-5, atol=2e-6, err_msg=f"{equation} by {name}")


@pytest.mark.parametrize("kind", KINDS)
def test_the_lower_bound_holds_at_any_prices(kind):
    """Weak duality: whatever the prices, the bound is below what any design within the limits reaches."""
    problem, values, best = posed(kind)
    met = best.status == Status.OPTIMAL
    assert met.any()
    if kind.startswith("density"):
        counts = "density" in problem.names
        optimum = (1.0 if counts else problem.case.ideal - problem.case.droop) / best.value
    else:
        optimum = best.value
    rng = np.random.default_rng(5)
    close = 0
    values = search(
        problem, values, gap=-1.0, longest=4.0, most_rounds=20
    ).values  # a gap that is never reached
    for spread in (0.0, 1e-6, 1e-3, 0.1, 1.0, 3.0):
        for _ in range(20):
            with np.errstate(all="ignore"):  # far off, prices overflow
                _, at = problem.conditions(values + spread * rng.normal(size=values.shape))
                bound, design = lower_bound(problem, at), upper_bound(problem, at)
            assert (bound <= optimum * (1 + 1e-9))[met].all()
            assert (design.value >= optimum * (1 - 2e-9))[met].all()
            close += np.count_nonzero(bound[met] > 0.5 * optimum[met])
    assert close > 20


def test_dual_numbers_against_their_formulas():
    """Derivatives of elementary functions, by calculus."""
    x, y = np.array([0.3, 2.0]), np.array([1.7, 0.4])
    X, Y = variable(0, x), variable(1, y)
    for made, value, by_x, by_y in (
        (X * Y + 2.0, x * y + 2.0, y, x),
        (X / Y, x / y, 1 / y, -x / y**2),
        (3.0 / X - Y, 3 / x - y, -3 / x**2, -1.0),
        (1.0 - log(X * X), 1 - 2 * np.log(x), -2 / x, 0.0),
        (exp(X) * sqrt(Y), np.exp(x) * np.sqrt(y), np.exp(x) * np.sqrt(y), np.exp(x) / np.sqrt(y) / 2),
        (hypot(X, Y), np.hypot(x, y), x / np.hypot(x, y), y / np.hypot(x, y)),
        (x * X - (-Y), x * x + y, x, 1.0),
    ):
        np.testing.assert_allclose(made.value, value, rtol=1e-14)
        np.testing.assert_allclose(made.slopes.get(0, 0.0) * np.ones(2), by_x * np.ones(2), rtol=1e-14)
        np.testing.assert_allclose(made.slopes.get(1, 0.0) * np.ones(2), by_y * np.ones(2), rtol=1e-14)


def test_small_linear_systems_against_numpy():
    """numpy.linalg.solve, on systems with a strong diagonal and with gaps."""
    rng = np.random.default_rng(6)
    matrices = rng.normal(size=(40, 5, 5)) + 6.0 * np.eye(5)
    matrices[:, rng.random((5, 5)) < 0.3] = 0.0
    matrices += 6.0 * np.eye(5)
    right = rng.normal(size=(40, 5))
    rows = [
        Dual(-right[:, i], {j: matrices[:, i, j] for j in range(5) if np.any(matrices[:, i, j] != 0.0)})
        for i in range(5)
    ]
    ours = np.stack(solve(rows), axis=1)
    np.testing.assert_allclose(ours, np.linalg.solve(matrices, right[..., None])[..., 0], rtol=1e-10)
