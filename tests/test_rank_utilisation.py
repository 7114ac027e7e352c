"""Charge flow, utilisations and metrics: identities, all trees, general solvers and the batch."""

from __future__ import annotations

from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from plain_converter import brute_clean, brute_utilisation
from plain_enumerator import plain_census
from scipy.optimize import minimize
from strategies import census_converters, family_converters, wandered_converters, with_renaming

from capmuster.enumerate.converters import converters
from capmuster.enumerate.errors import IllPosedError
from capmuster.enumerate.families import dickson, fibonacci, ladder, series_parallel
from capmuster.enumerate.wiring import Converter
from capmuster.rank.scores.switchtable import score
from capmuster.rank.scores.utilisation import charge_flow, lifted_energy

ANY = census_converters() | family_converters(most=20) | wandered_converters()


@given(with_renaming(ANY))
@settings(max_examples=60)
def test_relabelling_keeps_id_ratio_and_utilisations(drawn):
    converter, words = drawn
    renamed = Converter(words)
    assert (renamed.id, renamed.ratio) == (converter.id, converter.ratio)
    assert charge_flow(renamed) == charge_flow(converter)


@given(ANY)
@settings(max_examples=60)
def test_exchanging_input_and_output_keeps_utilisations(converter):
    flow, swapped = charge_flow(converter), charge_flow(converter.swapped())
    assert converter.swapped().ratio == 1 / converter.ratio
    assert swapped.capacitor_utilisation == flow.capacitor_utilisation
    assert swapped.switch_utilisation == flow.switch_utilisation
    assert swapped.network.clean == flow.network.clean


@given(ANY)
@settings(max_examples=60)
def test_every_role_of_a_cell_has_the_same_utilisations(converter):
    flows = [charge_flow(member) for member in converter.cell.converters]
    assert len({(flow.capacitor_utilisation, flow.switch_utilisation) for flow in flows}) == 1


@given(ANY)
@settings(max_examples=80)
def test_energy_and_charge_per_output_charge(converter):
    flow = charge_flow(converter)
    # Energy in is energy out: the input charge times 1 V against the output charge times M.
    assert sum(flow.input_charges) * 1 == abs(converter.ratio)
    assert sum(flow.output_charges) == 1
    if converter.ratio == 1:
        assert flow.capacitor_utilisation == flow.switch_utilisation == 0
    else:
        # Theory: both bounds are 1.
        assert 0 < flow.capacitor_utilisation <= 1
        assert 0 < flow.switch_utilisation <= 1
    assert flow.input_continuous == (min(flow.input_charges) > 0)
    assert 0 <= flow.output_evenness <= 1


@given(census_converters(most=3) | family_converters(most=5))
@settings(max_examples=80)
def test_utilisations_against_all_trees(converter):
    flow = charge_flow(converter)
    if converter.ratio != 1:
        assert (flow.capacitor_utilisation, flow.switch_utilisation) == brute_utilisation(converter.code)


@pytest.mark.parametrize("n", [1, 2, pytest.param(3, marks=pytest.mark.long)])
def test_every_converter_of_the_plain_enumerator(n):
    """One by one: ratio, flags, utilisations and number of switches, here and in the batch of the census."""
    table = converters(n)
    scores = score(table)
    row_of = {identity: row for row, identity in enumerate(table.ids())}
    met = 0
    for cell in plain_census(n)[0]:
        for plain in cell.converters:
            converter = Converter.parse(plain.wiring)
            flow = charge_flow(converter)
            row = row_of[converter.id]
            assert converter.ratio == plain.ratio == table.ratio(row)
            assert flow.network.clean == cell.clean == bool(scores.clean[row])
            assert len(flow.network.switches) == cell.switches == scores.switches[row]
            exact = (cell.capacitor_utilisation or 0, cell.switch_utilisation or 0)
            assert exact == (flow.capacitor_utilisation, flow.switch_utilisation)
            lifted = int(scores.lifted[row])
            assert exact == (
                Fraction(lifted, int(scores.capacitor_sum[row])),
                Fraction(4 * lifted, int(scores.switch_sum[row])) if lifted else 0,
            )
            assert cell.unity == (converter.ratio == 1)
            met += 1
    assert met == len(table)


def test_four_capacitors_at_random_against_all_trees_and_the_batch():
    table = converters(4)
    rows = np.random.default_rng(4).choice(len(table), 60, replace=False)
    scores = score(table.take(rows))
    for k, row in enumerate(rows):
        converter = table.converter(row)
        flow = charge_flow(converter)
        assert float(flow.capacitor_utilisation) == pytest.approx(scores.capacitor_utilisation[k], rel=1e-12)
        assert float(flow.switch_utilisation) == pytest.approx(scores.switch_utilisation[k], rel=1e-12)
        assert flow.network.clean == scores.clean[k] == brute_clean(converter.code)
        if converter.ratio != 1:
            assert (flow.capacitor_utilisation, flow.switch_utilisation) == brute_utilisation(converter.code)


@given(st.fractions(min_value=-9, max_value=9, max_denominator=40).filter(bool))
@settings(max_examples=200)
def test_lifted_energy_by_its_definition(M):
    # Ports 0, 1 and M with charges that add up to zero and g . U = 0: the outer port's charge times its step.
    charges = {Fraction(0): M - 1, Fraction(1): -M, M: Fraction(1)}
    if len(charges) < 3:
        assert lifted_energy(M) == 0
        return
    low, middle, high = sorted(charges)
    assert abs(charges[high]) * (high - middle) == abs(charges[low]) * (middle - low) == lifted_energy(M)


@given(ANY)
@settings(max_examples=8)
def test_metrics_against_a_nonlinear_solver(converter):
    """R_SSL f W and R_FSL P, minimised by scipy over the capacitances and conductances themselves.

    Seeman and Sanders (2008): the slow limit with sum C v^2 / 2 fixed, the fast one with sum G v^2 fixed.
    """
    flow = charge_flow(converter)
    M = float(abs(converter.ratio))

    def best(coefficients, ratings):
        # min of sum c_i / x_i with sum w_i x_i = 1, over the logarithms of x
        c, w = np.array(coefficients) / max(coefficients), np.array(ratings) / max(ratings)
        c, w = c[c > 0], w[c > 0]
        start = -np.log(len(c) * w)
        found = minimize(
            lambda z: np.log(np.sum(c * np.exp(-z))) + np.log(np.sum(w * np.exp(z))),
            start,
            method="BFGS",
            options={"gtol": 1e-9},
        )
        return float(np.exp(found.fun)) * max(coefficients) * max(ratings)

    slow = best([float(a) ** 2 for a in flow.multipliers], [float(v) ** 2 / 2 for v in flow.voltages])
    assert M**2 / slow == pytest.approx(float(flow.slow_limit_metric), rel=1e-6)
    if flow.network.clean:
        switches = flow.network.switches
        fast = best(
            [2 * float(s.multiplier) ** 2 for s in switches],
            [float(s.blocking_voltage) ** 2 for s in switches],
        )
        assert M**2 / fast == pytest.approx(float(flow.fast_limit_metric), rel=1e-6)


def test_ports_by_hand():
    # Doubler: the input charges C1 in one phase and stands below it in the other; the output is fed once.
    flow = charge_flow(Converter.parse("I-G/O-I"))
    assert sorted(flow.input_charges) == [1, 1]
    assert sorted(flow.output_charges) == [0, 1]
    assert flow.input_continuous
    assert flow.output_evenness == 0
    # Halver: C1 charges through the output and discharges into it.
    flow = charge_flow(Converter.parse("I-O/O-G"))
    assert sorted(flow.input_charges) == [0, Fraction(1, 2)]
    assert flow.output_charges == (Fraction(1, 2), Fraction(1, 2))
    assert not flow.input_continuous
    assert flow.output_evenness == 1
    # Series-parallel 1/3: one third in series, two thirds side by side.
    flow = charge_flow(series_parallel(3).swapped())
    assert sorted(flow.output_charges) == [Fraction(1, 3), Fraction(2, 3)]
    assert flow.output_evenness == Fraction(2, 3)


def test_an_output_that_gives_charge_back():
    # In some converters one phase takes charge out of the output: no evenness is left.
    flows = [charge_flow(converters(2).converter(row)) for row in range(len(converters(2)))]
    back = [flow for flow in flows if min(flow.output_charges) < 0]
    assert back
    assert all(flow.output_evenness == 0 for flow in back)


def test_unity():
    flow = charge_flow(Converter.parse("I-G/O-G"))
    assert flow.multipliers == (1,)
    assert flow.capacitor_utilisation == flow.switch_utilisation == 0
    assert flow.fast_limit_metric is None
    assert flow.slow_limit_metric == 2


def test_degenerate_is_refused():
    with pytest.raises(IllPosedError) as error:
        charge_flow(Converter.parse("I-O/O-I"))
    assert str(error.value) == (
        "wiring 'I-O/O-I': C1 would hold no voltage (degenerate); accepted: capacitors that hold a voltage"
    )


@pytest.mark.parametrize("converter", [fibonacci(40), dickson(41), ladder(21, 8), series_parallel(41)])
def test_any_size_is_exact(converter):
    flow = charge_flow(converter)
    handled = sum(a * v for a, v in zip(flow.multipliers, flow.voltages, strict=True))
    assert flow.capacitor_utilisation * handled == lifted_energy(converter.ratio)
    assert isinstance(flow.switch_utilisation, Fraction)
