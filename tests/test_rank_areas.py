"""The closed-form area allotment, against a general-purpose nonlinear solver and a geometric programme."""

import cvxpy
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.optimize import minimize

from capmuster.rank.areas import (
    allot,
    element_areas,
    fast_coefficient,
    impedance_area,
    impedance_at,
    impedance_at_split,
    least_area,
    optimal_split,
    slow_coefficient,
)

COEFFICIENT = st.floats(1e-6, 1e6)


def random_converter(rng, n, m):
    """Multipliers, densities [F/mm2] and specific on-resistances [ohm mm2] of an invented converter."""
    return (
        rng.uniform(0.1, 2.0, n),
        10.0 ** rng.uniform(-10, -7, n),
        rng.uniform(0.1, 2.0, m),
        10.0 ** rng.uniform(-3, 0, m),
    )


@pytest.mark.parametrize("seed", range(12))
def test_all_element_areas_against_slsqp(seed):
    """scipy.optimize.minimize (SLSQP) over every single area finds no lower impedance, and the same areas."""
    rng = np.random.default_rng(seed)
    n, m = rng.integers(1, 5), rng.integers(2, 9)
    a_c, d, a_r, rho = random_converter(rng, n, m)
    f, area = 10.0 ** rng.uniform(5, 8), rng.uniform(0.5, 20.0)

    S = slow_coefficient(a_c / np.sqrt(d), f)
    F = fast_coefficient(a_r * np.sqrt(rho))
    result = allot(S, F, area)
    ours = np.r_[
        element_areas([a_c / np.sqrt(d)], [result.capacitor_area])[0],
        element_areas([a_r * np.sqrt(rho)], [result.silicon_area])[0],
    ]

    def log_impedance(z):
        A = np.exp(z)
        return np.log(np.hypot(np.sum(a_c**2 / (f * d * A[:n])), np.sum(2 * a_r**2 * rho / A[n:])))

    found = minimize(
        log_impedance,
        np.full(n + m, np.log(area / (n + m))),
        method="SLSQP",
        constraints={"type": "ineq", "fun": lambda z: 1.0 - np.exp(z).sum() / area},
        options={"ftol": 1e-15, "maxiter": 1000},
    )
    assert log_impedance(np.log(ours)) == pytest.approx(np.log(result.impedance), abs=1e-12)
    # The solver lets its areas add up to a little more than allowed; impedance goes with 1/area.
    within = found.fun + np.log(np.exp(found.x).sum() / area)
    assert within == pytest.approx(np.log(result.impedance), abs=1e-8)
    np.testing.assert_allclose(np.exp(found.x), ours, rtol=1e-2, atol=1e-4 * area)


@pytest.mark.parametrize("seed", range(12))
def test_least_area_with_budgets_against_a_geometric_programme(seed):
    """Reference: cvxpy's geometric programming (disciplined geometric programs, Agrawal et al. 2019)."""
    rng = np.random.default_rng(100 + seed)
    S, F, R_max = 10.0 ** rng.uniform(-2, 2, 3)
    free = least_area(S, F, R_max)
    # Half of the cases press on the capacitors, half on the switches.
    most_c = float(free.capacitor_area) * (rng.uniform(0.75, 1.0) if seed % 2 else 2.0)
    most_s = float(free.silicon_area) * (rng.uniform(0.75, 1.0) if not seed % 2 else 20.0)
    ours = least_area(S, F, R_max, most_c, most_s)

    A_c, A_s = cvxpy.Variable(pos=True), cvxpy.Variable(pos=True)
    problem = cvxpy.Problem(
        cvxpy.Minimize(A_c + A_s),
        [(S / R_max / A_c) ** 2 + (F / R_max / A_s) ** 2 <= 1.0, A_c <= most_c, A_s <= most_s],
    )
    problem.solve(gp=True, solver="CLARABEL")
    if problem.status == "infeasible":
        assert not ours.feasible
    else:
        assert ours.area == pytest.approx(problem.value, rel=1e-6)
        assert impedance_at_split(S, F, ours.capacitor_area, ours.silicon_area) == pytest.approx(
            R_max, rel=1e-12
        )


def test_budgets_out_of_reach_are_infeasible():
    """S / A_c alone is already R_max at A_c = S / R_max, so the last bit of budget decides."""
    result = least_area([1.0, 1.0, 1.0], 1.0, 1.0, [0.999, 1.0, 1.001])
    assert result.feasible.tolist() == [False, False, True]
    assert np.isnan(result.area[:2]).all()
    assert np.isinf(result.impedance[:2]).all()
    assert not least_area(1.0, 1.0, 1.0, 2.0, 1.1).feasible  # each budget would do alone, both do not
    assert not least_area(1.0, 1.0, [-1.0, 0.0]).feasible.any()


def test_one_limit_absent():
    """With one kind free of charge everything goes to the other, R_out = coefficient / area (arithmetic)."""
    slow_only, fast_only = least_area(4.0, 0.0, 2.0), least_area(0.0, 4.0, 2.0)
    assert (slow_only.capacitor_area, slow_only.silicon_area) == (pytest.approx(2.0), 0.0)
    assert (fast_only.capacitor_area, fast_only.silicon_area) == (0.0, pytest.approx(2.0))
    assert not least_area(4.0, 0.0, 2.0, most_capacitor_area=1.9).feasible
    assert least_area(0.0, 4.0, 2.0, most_capacitor_area=0.0).area == pytest.approx(2.0)
    assert impedance_at_split(4.0, 0.0, 2.0, 0.0) == 2.0
    assert np.isinf(impedance_at_split(4.0, 1.0, 2.0, 0.0))


def test_doubler_by_hand():
    """Doubler at 50 %: R_SSL = 1/(f C), R_FSL = 2 (4 R) with a = 1 throughout (Seeman and Sanders 2008)."""
    d, rho, f = 4e-9, 2e-3, 1e7
    S = slow_coefficient([1.0 / np.sqrt(d)], f)
    F = fast_coefficient(np.sqrt(rho) * np.ones(4))
    assert pytest.approx(1.0 / (f * d)) == S
    assert pytest.approx(2 * 16 * rho) == F  # each switch has a quarter of the area: 2 * 4 * rho / (A / 4)


def test_idle_elements_get_the_smallest_device():
    areas = element_areas(
        [[1.0, 3.0, 0.0, 0.0], [0.0, 0.0, 2.0, 0.0]],
        [8.0, 6.0],
        smallest=0.25,
        present=[[True, True, True, False], [True, True, True, True]],
    )
    np.testing.assert_array_equal(areas, [[2.0, 6.0, 0.25, 0.0], [0.25, 0.25, 6.0, 0.25]])


@given(S=COEFFICIENT, F=COEFFICIENT, area=st.floats(1e-3, 1e3), share=st.floats(1e-3, 0.999))
def test_no_other_split_is_better(S, F, area, share):
    best = allot(S, F, area)
    other = impedance_at_split(S, F, share * area, (1 - share) * area)
    assert best.impedance <= other * (1 + 1e-12)
    assert impedance_at_split(S, F, best.capacitor_area, best.silicon_area) == pytest.approx(best.impedance)
    assert best.area == pytest.approx(area)


@given(S=COEFFICIENT, F=COEFFICIENT, R=COEFFICIENT, scale=st.floats(1e-3, 1e3))
def test_scaling_laws(S, F, R, scale):
    """Impedance times area is homogeneous of degree one and symmetric; the split is of degree zero."""
    assert impedance_area(scale * S, scale * F) == pytest.approx(scale * impedance_area(S, F))
    assert impedance_area(S, F) == pytest.approx(impedance_area(F, S))
    assert optimal_split(scale * S, scale * F) == pytest.approx(optimal_split(S, F))
    assert least_area(S, F, R / scale).area == pytest.approx(scale * least_area(S, F, R).area)
    assert impedance_at(S, F, least_area(S, F, R).area) == pytest.approx(R)


@given(S=COEFFICIENT, F=COEFFICIENT, R=COEFFICIENT, c=st.floats(0.1, 10.0), s=st.floats(0.1, 10.0))
def test_budgets_hold_and_only_cost(S, F, R, c, s):
    free = least_area(S, F, R)
    most_c, most_s = c * free.capacitor_area, s * free.silicon_area
    held = least_area(S, F, R, most_c, most_s)
    if held.feasible:
        assert held.capacitor_area <= most_c
        assert held.silicon_area <= most_s
        assert held.area >= free.area * (1 - 1e-12)
        assert impedance_at_split(S, F, held.capacitor_area, held.silicon_area) <= R * (1 + 1e-9)
    else:
        assert impedance_at_split(S, F, most_c, most_s) >= R * (1 - 1e-9)


def test_a_batch_equals_its_candidates_one_by_one():
    rng = np.random.default_rng(7)
    S, F, R, c, s = 10.0 ** rng.uniform(-2, 2, (5, 200))
    batch = least_area(S, F, R, c, s)
    single = [least_area(*case) for case in zip(S, F, R, c, s, strict=True)]
    # numpy may round the vector and the scalar form of a power apart by a unit in the last place
    np.testing.assert_allclose(batch.capacitor_area, [one.capacitor_area for one in single], rtol=1e-15)
    np.testing.assert_allclose(batch.silicon_area, [one.silicon_area for one in single], rtol=1e-15)
    assert 0 < batch.feasible.sum() < 200
