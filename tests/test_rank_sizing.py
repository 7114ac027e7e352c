"""Sizing against limits known by hand, identities and random designs."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from plain_sizing import PHASES, random_figures

from capmuster.enumerate.errors import CapmusterError
from capmuster.rank.areas import fast_coefficient, impedance_at, optimal_split, slow_coefficient
from capmuster.rank.sizing import (
    LossModel,
    Objective,
    Status,
    Task,
    Use,
    impedance,
    losses,
    mean_model,
    size,
)

BAND = (1e5, 1e9)


def candidates(seed, count):
    figures = random_figures(np.random.default_rng(seed), count)
    return LossModel.build(
        figures["alpha"],
        figures["beta"],
        np.array(PHASES),
        series=figures["series"],
        plate=figures["cycle_c"],
        leakage_c=figures["leak_c"],
        gate=figures["gate"],
        output_charge=figures["output_charge"],
        leakage_s=figures["leak_s"],
        controller=figures["controller"],
        cycle=figures["cycle"],
        loop=figures["loop"],
        lead=figures["lead"],
    )


def least_loss(**given):
    return Task(**({"objective": Objective.LOSS, "frequency": BAND, "current": 0.1} | given))


def least_area(**given):
    return Task(
        **(
            {
                "objective": Objective.AREA,
                "frequency": BAND,
                "current": 0.1,
                "ideal_output": 3.0,
                "efficiency": 0.5,
            }
            | given
        )
    )


def greatest_density(**given):
    return Task(
        **(
            {"objective": Objective.DENSITY, "frequency": BAND, "ideal_output": 3.0, "efficiency": 0.5}
            | {"current_range": (1e-3, 1.0)}
            | given
        )
    )


# Limits known by hand


def test_without_other_losses_the_closed_form_of_the_areas_returns():
    """At one frequency with conduction alone: I^2 R at the Cauchy-Schwarz areas of `rank.areas`."""
    rng = np.random.default_rng(1)
    weights_c, weights_s = rng.uniform(1e3, 1e5, (50, 4)), rng.uniform(0.01, 0.5, (50, 9))
    model = LossModel.build(weights_c**2, weights_s**2)
    area, f, current = rng.uniform(0.1, 10.0, 50), 1e7, 0.3
    ours = size(model, least_loss(frequency=(f, f), current=current, most_area=area))
    S, F = slow_coefficient(weights_c, f), fast_coefficient(weights_s)
    np.testing.assert_allclose(ours.value, current**2 * impedance_at(S, F, area), rtol=1e-9)
    np.testing.assert_allclose(ours.capacitors.sum(1) / ours.area, optimal_split(S, F), rtol=1e-4)
    proportional = weights_c * (ours.capacitors[:, :1] / weights_c[:, :1])
    np.testing.assert_allclose(ours.capacitors, proportional, rtol=1e-9)


@pytest.mark.parametrize("current", [1e-6, 1e-3, 1.0])
def test_light_load_leaves_area_unspent(current):
    """One capacitor against its plate loss: I^2 a/(f A) + f g A is least at 2 I sqrt(a g), by AM-GM."""
    alpha, plate = 1e8, 1e-10
    model = LossModel.build([[alpha]], [[1e-16]], plate=plate, gate=1e-20)
    ours = size(model, least_loss(frequency=(1e6, 1e6), current=current, most_area=1e9))
    assert ours.status[0] == Status.OPTIMAL
    assert ours.value[0] == pytest.approx(2 * current * np.sqrt(alpha * plate), rel=1e-3)
    assert ours.capacitors[0, 0] == pytest.approx(current * np.sqrt(alpha / plate) / 1e6, rel=1e-3)
    tight = size(model, least_loss(frequency=(1e6, 1e6), current=current, most_area=0.5 * ours.area))
    # away from the optimum of a x + b / x by a factor of two: (2 + 1/2) / 2 of the least
    assert tight.value[0] == pytest.approx(1.25 * ours.value[0], rel=1e-3)
    assert tight.area[0] == pytest.approx(0.5 * ours.area[0], rel=1e-6)


def test_equal_elements_get_equal_areas():
    model = LossModel.build(np.full((1, 3), 1e8), np.full((1, 7), 1e-2), plate=1e-10, gate=1e-9, series=1e-3)
    ours = size(model, least_loss(most_area=2.0))
    np.testing.assert_allclose(ours.capacitors[0], ours.capacitors[0, 0], rtol=1e-12)
    np.testing.assert_allclose(ours.switches[0], ours.switches[0, 0], rtol=1e-12)


def test_free_duty_without_other_losses():
    """With conduction alone the shares are as (sum of a_r sqrt(rho) of the phase)^(2/3): one derivative."""
    weights = np.array([[0.3, 0.1, 0.2, 0.05, 0.4]])
    phase = np.array([1, 2, 1, 2, 2])
    model = LossModel.build([[1e8]], weights**2, phase)
    ours = size(model, least_loss(frequency=(1e7, 1e7), duty=None, most_area=1.0))
    s_1, s_2 = weights[0, phase == 1].sum() ** (2 / 3), weights[0, phase == 2].sum() ** (2 / 3)
    assert ours.duty[0] == pytest.approx(s_1 / (s_1 + s_2), rel=1e-5)


def test_output_held_by_frequency_asks_for_the_right_frequency():
    """At the nominal point the blend of both limits is the impedance that is wanted, droop over current."""
    model = candidates(3, 20)
    current, ideal, output = 0.02, 3.0, 2.0
    task = least_loss(
        use=Use.FREQUENCY,
        current=current,
        ideal_output=ideal,
        output=output,
        most_impedance=30.0,
        most_area=5.0,
    )
    ours = size(model, task)
    assert (ours.status == Status.OPTIMAL).all()
    np.testing.assert_allclose(ours.impedance.output, (ideal - output) / current, rtol=1e-9)
    np.testing.assert_allclose(ours.losses.held, (ideal - output) * current)
    np.testing.assert_allclose(ours.value, ours.losses.total - ours.losses.held)
    hardest = impedance(model, ours.capacitors, ours.switches, np.full(20, BAND[1]))
    assert (hardest.output <= 30.0 * (1 + 1e-9)).all()


# Identities


def test_density_of_a_scalable_converter_is_the_same_at_every_load():
    """Without fixed loss and fixed resistance everything scales with the load, and density stays."""
    model = dataclasses.replace(
        candidates(4, 30), **dict.fromkeys(("controller", "cycle", "loop", "lead"), np.zeros(30))
    )
    loads = [(1e-3, 2e-3), (0.5, 10.0)]
    low, high = (size(model, greatest_density(current_range=load)) for load in loads)
    there = low.status == Status.OPTIMAL
    assert there.sum() >= 15
    np.testing.assert_allclose(low.value[there], high.value[there], rtol=2e-9)
    # and the least area at a load is what this density says
    area = size(model, least_area(current=0.2))
    power = 0.2 * (3.0 - 0.2 * area.impedance.output)
    assert (area.area[there] >= power[there] / low.value[there] * (1 - 1e-9)).all()


def test_least_loss_at_the_least_area_meets_the_efficiency_exactly():
    model = candidates(5, 40)
    area = size(model, least_area())
    there = area.status == Status.OPTIMAL
    assert there.sum() >= 20
    part = model.take(np.flatnonzero(there))
    eta, power = 0.5, 3.0 * 0.1
    # I^2 R + eta Q is a loss with the current weighted: I^2 / eta R + Q
    weighed = least_loss(mean_square_current=0.1**2 / eta, most_area=area.value[there])
    np.testing.assert_allclose(size(part, weighed).value, (1 - eta) / eta * power, rtol=1e-8)
    out = power - area.losses.conduction[there]
    np.testing.assert_allclose(out / (power + area.losses.fixed[there]), eta, rtol=1e-8)


def test_terms_add_up_and_none_is_in_another():
    model = candidates(6, 25)
    ours = size(model, least_loss(most_area=3.0))
    z, terms = ours.impedance, ours.losses
    np.testing.assert_allclose(terms.conduction, 0.1**2 * z.output, rtol=1e-12)
    np.testing.assert_allclose(terms.total, terms.conduction + terms.fixed, rtol=1e-12)
    A, S, f = ours.capacitors, ours.switches, ours.frequency
    spent = model.controller + (model.leakage_c * A).sum(1) + (model.leakage_s * S).sum(1)
    spent += f * (model.cycle + (model.plate * A).sum(1) + ((model.gate + model.output_charge) * S).sum(1))
    np.testing.assert_allclose(terms.fixed, spent, rtol=1e-12)
    np.testing.assert_allclose(ours.value, terms.total, rtol=1e-12)


def test_a_candidate_does_not_depend_on_its_company_or_padding():
    model = candidates(7, 60)
    task = least_loss(most_area=2.0, most_impedance=8.0)
    together = size(model, task)
    wide = LossModel(
        *(
            np.pad(value, ((0, 0), (0, 2))) if value.ndim == 2 else value
            for value in (getattr(model, field.name) for field in dataclasses.fields(model))
        )
    )
    padded = size(wide, task)
    for k in range(0, 60, 7):
        alone = size(model.take(slice(k, k + 1)), task)
        assert alone.status[0] == together.status[k] == padded.status[k]
        if alone.status[0] == Status.OPTIMAL:
            assert alone.value[0] == pytest.approx(together.value[k], rel=1e-9)
            assert padded.value[k] == pytest.approx(together.value[k], rel=1e-9)
    assert (padded.capacitors[:, 3:][padded.status == Status.OPTIMAL] == 0.0).all()


def test_the_same_input_gives_the_same_bytes():
    first, second = (size(candidates(8, 30), least_area(duty=None)) for _ in range(2))
    assert first.capacitors.tobytes() == second.capacitors.tobytes()
    assert first.frequency.tobytes() == second.frequency.tobytes()


def test_mean_model_weighs_the_losses():
    cold, hot = candidates(9, 5), candidates(10, 5)
    hot = dataclasses.replace(
        hot, alpha=cold.alpha, beta=cold.beta, series=cold.series, loop=cold.loop, lead=cold.lead
    )
    A, S, f = np.full((5, 3), 0.3), np.full((5, len(PHASES)), 0.02), np.full(5, 1e7)
    mean = losses(mean_model([cold, hot], [0.25, 0.5]), A, S, f).total
    apart = 0.25 * losses(cold, A, S, f).total + 0.5 * losses(hot, A, S, f).total
    np.testing.assert_allclose(mean, apart, rtol=1e-12)


# What is proven


@pytest.mark.parametrize("duty", [0.5, None])
def test_no_random_design_beats_the_bounds(duty):
    """Designs around the optimum and far from it, each evaluated term by term, keep to the proven bounds."""
    model, rng = candidates(11, 20), np.random.default_rng(12)
    best = {
        "loss": size(model, least_loss(most_area=2.0, duty=duty)),
        "area": size(model, least_area(duty=duty)),
        "density": size(model, greatest_density(duty=duty)),
    }
    there = {name: one.status == Status.OPTIMAL for name, one in best.items()}
    tried = dict.fromkeys(best, 0)
    for spread in np.repeat([1e-4, 1e-2, 0.3], 100):
        for name, one in best.items():
            A = one.capacitors * np.exp(spread * rng.normal(size=one.capacitors.shape))
            S = one.switches * np.exp(spread * rng.normal(size=one.switches.shape))
            f = np.clip(one.frequency * np.exp(spread * rng.normal(size=20)), *BAND)
            D = one.duty if duty else np.clip(one.duty * np.exp(spread * rng.normal(size=20)), 0.01, 0.99)
            if name == "loss":
                shrink = np.minimum(1.0, 2.0 / (A.sum(1) + S.sum(1)))[:, None]
                A, S = A * shrink, S * shrink
            current = one.current if name == "density" else np.full(20, 0.1)
            with np.errstate(invalid="ignore"):
                R = impedance(model, A, S, f, D).output
                Q = losses(model, A, S, f, D).total
                efficient = (3.0 - current * R) * current >= 0.5 * (3.0 * current + Q)
            if name == "loss":
                assert (one.least * (1 - 1e-12) <= 0.1**2 * R + Q)[there[name]].all()
                tried[name] += there[name].sum()
            elif name == "area":
                good = there[name] & efficient
                assert ((A.sum(1) + S.sum(1)) >= one.least * (1 - 1e-12))[good].all()
                tried[name] += good.sum()
            else:
                good = there[name] & efficient
                density = (3.0 - current * R) * current / (A.sum(1) + S.sum(1))
                assert (density <= one.greatest * (1 + 1e-12))[good].all()
                tried[name] += good.sum()
    assert min(tried.values()) > 200


def test_limits_that_cannot_be_met_are_proven_so():
    model = candidates(13, 8)
    ones = np.ones(8)
    assert (size(model, least_loss(most_area=1e-6, most_impedance=1.0)).status == Status.INFEASIBLE).all()
    assert (size(model, least_area(efficiency=0.999)).status == Status.INFEASIBLE).all()
    assert (size(model, greatest_density(efficiency=0.999)).status == Status.INFEASIBLE).all()
    wired = dataclasses.replace(model, loop=ones, lead=ones)
    nothing = size(wired, least_loss(most_impedance=1.5))
    assert (nothing.status == Status.INFEASIBLE).all()
    assert np.isnan(nothing.capacitors).all()
    assert np.isinf(nothing.gap).all()
    # an output above the ideal one
    above = least_area(use=Use.CONDUCTANCE, output=3.5, most_impedance=1.0)
    assert (size(model, above).status == Status.INFEASIBLE).all()
    # the same area, once as a budget that suffices and once as one that does not
    least = size(model, least_area())
    there = least.status == Status.OPTIMAL
    for factor, status in ((1.001, Status.OPTIMAL), (0.999, Status.INFEASIBLE)):
        again = size(model, least_area(most_area=np.where(there, factor * least.value, 1.0)))
        assert (again.status[there] == status).all()


@given(seed=st.integers(0, 2**32 - 1), decades=st.floats(0.0, 6.0))
def test_extreme_figures_give_an_answer(seed, decades):
    """Coefficients and limits scattered over many decades: never a NaN in a design, and always a proof."""
    rng = np.random.default_rng(seed)
    model = candidates(seed, 6)
    wild = {
        field.name: getattr(model, field.name)
        * 10.0 ** rng.uniform(-decades, decades, getattr(model, field.name).shape)
        for field in dataclasses.fields(model)
        if field.name != "phase"
    }
    model = dataclasses.replace(model, **wild)
    current, area = 10.0 ** rng.uniform(-6, 2, 6), 10.0 ** rng.uniform(-3, 3, 6)
    ours = size(model, least_loss(current=current, most_area=area))
    assert (ours.status == Status.OPTIMAL).all()
    assert np.isfinite(ours.capacitors).all()
    assert (ours.area <= area * (1 + 1e-9)).all()
    other = size(model, least_area(current=current, most_impedance=1.0 / current))
    assert np.isin(other.status, (Status.OPTIMAL, Status.INFEASIBLE)).all()


@given(seed=st.integers(0, 2**32 - 1), factor=st.floats(1.0, 10.0))
def test_more_room_is_never_worse(seed, factor):
    model, area = candidates(seed, 4), 10.0 ** np.random.default_rng(seed).uniform(-2, 1, 4)
    less, more = (size(model, least_loss(most_area=a)) for a in (area, factor * area))
    assert (more.value <= less.value * (1 + 1e-9)).all()
    narrow, wide = (size(model, least_loss(most_area=area, frequency=band)) for band in ((1e6, 1e7), BAND))
    assert (wide.value <= narrow.value * (1 + 1e-9)).all()


# Bad input


@pytest.mark.parametrize(
    ("task", "message"),
    [
        (least_area(efficiency=None), "needs efficiency"),
        (least_area(efficiency=1.2), "efficiency has a value outside"),
        (least_area(ideal_output=None), "needs ideal_output"),
        (least_loss(frequency=(1e9, 1e5)), "frequency has bounds that are out of order"),
        (least_loss(current=0.0), "current has bounds"),
        (least_loss(use=Use.CONDUCTANCE), "needs most_impedance"),
        (least_loss(use=Use.FREQUENCY, most_impedance=1.0, ideal_output=3.0), "needs output"),
        (least_loss(most_area=np.ones(3)), "most_area has shape"),
        (least_loss(most_area=np.nan), "most_area has a value that is negative or not a number"),
        (least_loss(duty=1.0), "duty is not between 0 and 1"),
        (greatest_density(current_range=None), "needs current_range"),
    ],
)
def test_a_task_that_lacks_something_is_refused(task, message):
    with pytest.raises(CapmusterError, match=message):
        size(candidates(14, 2), task)


def test_a_model_that_makes_no_sense_is_refused():
    with pytest.raises(CapmusterError, match="plate has a value that is negative"):
        LossModel.build([[1e8]], [[1e-2]], plate=-1.0)
    with pytest.raises(CapmusterError, match="gate has shape"):
        LossModel.build([[1e8]], [[1e-2]], gate=[[1.0, 2.0]])
    with pytest.raises(CapmusterError, match="beta of candidate 1 is 0 throughout"):
        LossModel.build([[1e8], [1e8]], [[1e-2], [0.0]])
    with pytest.raises(CapmusterError, match="neither 1 nor 2"):
        LossModel.build([[1e8]], [[1e-2]], 3)
