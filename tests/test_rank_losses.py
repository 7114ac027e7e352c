"""Loss coefficients and their sum, against hand calculation and against switch-level steady states."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from capmuster.enumerate.converters import table_of
from capmuster.enumerate.wiring import Converter
from capmuster.rank.design.losses import TERM_FIELDS, TERMS, loss_model, plate_steps
from capmuster.rank.design.operation import Candidates, Design, operation
from capmuster.rank.evaluation import choose_elements
from capmuster.rank.exact.circuit import circuit_of
from capmuster.rank.exact.impedance import loop_blend, output_impedance
from capmuster.rank.exact.operating import operate
from capmuster.rank.exact.steadystate import SteadyState
from capmuster.rank.inputs.brief import load_brief
from capmuster.rank.inputs.technology import CapacitorClass, SwitchClass, Technology
from capmuster.rank.scores.networktable import network_table
from capmuster.rank.scores.switching import switch_network
from capmuster.rank.sizing import Losses, impedance, losses

CAPACITOR = CapacitorClass(
    name="c", rating=2.5, density=4e-9, plate_fraction=0.02, plate="minus", series_resistance=5e-3,
    leakage=2e-9, least_area=1e-4,
)  # fmt: skip
SWITCH = SwitchClass(
    name="s", polarity="nmos", rating=3.0, resistance=2e-3, gate_charge=3e-9, drive=3.3, output_charge=1e-9,
    output_charge_voltage=2.0, output_charge_exponent=0.5, least_area=1e-5, leakage=4e-9,
)  # fmt: skip
PLAIN = Technology(
    name="plain", title="plain", kind="chip", capacitor_derating=1.0, switch_derating=1.0,
    capacitors=(CAPACITOR,), switches=(SWITCH,), controller_power=1e-6, wiring_resistance=0.5,
)  # fmt: skip
NODE = replace(
    load_brief("greenhouse-node"), technology=PLAIN, input_minimum=2.0, input_nominal=2.0, input_maximum=4.0,
    required=0.5, ratios=None,
)  # fmt: skip


def candidates_of(converter, brief=NODE):
    table = table_of([converter])
    switches = network_table(table, switch_network(converter))
    return Candidates(table, switches, choose_elements(table, switches, brief), brief)


def test_coefficients_of_a_halver_by_hand():
    # Halver: one capacitor at V_in / 2 that carries half of the output charge, four switches likewise that
    # block V_in / 2. At a highest input of 4 V everything stands 2 V: one device each.
    one = candidates_of(Converter.parse("O-G/I-O"))
    model = loss_model(one.table, one.switches, one.elements, PLAIN, volts=3.0)
    np.testing.assert_allclose(model.alpha, 0.25 / 4e-9)
    np.testing.assert_allclose(model.beta, 0.25 * 2e-3)
    np.testing.assert_allclose(model.series, 0.25 * 5e-3)
    # The plates go from (1.5 V, 0) to (3 V, 1.5 V): a step of 1.5 V.
    np.testing.assert_allclose(model.plate, 0.02 * 4e-9 * 1.5**2)
    np.testing.assert_allclose(model.gate, 3e-9 * 3.3)
    np.testing.assert_allclose(model.output_charge, 1e-9 * (1.5 / 2.0) ** 0.5 * 1.5)
    np.testing.assert_allclose(model.leakage_c, 2e-9 * 1.5**2 / 2.5)
    np.testing.assert_allclose(model.leakage_s, 0.5 * 4e-9 * 1.5**2 / 3.0)
    assert (model.controller[0], model.lead[0], model.cycle[0]) == (1e-6, 0.5, 0.0)


def test_devices_in_series_by_hand():
    # The same halver at a highest input of 9 V: 4.5 V take two devices of each class, of half the voltage and
    # half the area each.
    one = candidates_of(Converter.parse("O-G/I-O"), replace(NODE, input_maximum=9.0))
    model = loss_model(one.table, one.switches, one.elements, PLAIN, volts=3.0)
    area = 1.0  # mm2
    # Two capacitors of half the area in series: each 2 nF, together 1 nF.
    np.testing.assert_allclose(model.alpha / area, 0.25 / 1e-9)
    # Two switches of half the area in series: each 4 mohm, together 8 mohm.
    np.testing.assert_allclose(model.beta / area, 0.25 * 8e-3)
    np.testing.assert_allclose(model.series / area, 0.25 * 2 * 5e-3 / (area / 2))
    # Both bottom plates make the whole step; both gates are driven.
    np.testing.assert_allclose(model.plate, 2 * 0.02 * 2e-9 * 1.5**2)
    np.testing.assert_allclose(model.gate, 2 * 0.5 * 3e-9 * 3.3)
    np.testing.assert_allclose(model.output_charge, 2 * 0.5 * 1e-9 * (0.75 / 2.0) ** 0.5 * 0.75)
    np.testing.assert_allclose(model.leakage_c, 2 * 0.5 * 2e-9 * 0.75**2 / 2.5)


def test_terms_are_those_of_the_kernel():
    assert tuple(Losses.__slots__) == TERM_FIELDS
    assert len({term.name for term in TERMS}) == len(TERMS) == len(TERM_FIELDS)


CONVERTERS = [
    Converter.parse(code)
    for code in (
        "O-G/I-O",  # halver
        "I-G/a-I I-G/O-a",  # series-parallel 1:3
        "G-a/a-G O-G/b-O I-O/b-a O-a/I-a",
        "a-G/a-O b-O/O-G b-a/I-O I-a/a-G",
        "O-a/a-O a-G/G-b I-O/a-G I-a/O-b",
        "O-G/a-O a-O/O-G a-G/I-a",
    )
]


def sized(converter, rng, *, slow_to_fast):
    """Areas at random, and the frequency at which both limits have a given quotient."""
    one = candidates_of(converter)
    model = one.model(3.0)
    A = rng.uniform(0.1, 1.0, model.alpha.shape)
    S = np.where(model.beta > 0, rng.uniform(0.01, 0.1, model.beta.shape), 0.0)
    at_one = impedance(model, A, S, np.ones(1))
    return one, model, A, S, at_one.slow / at_one.fast / slow_to_fast


def circuit_with(one, model, areas, plate_fraction):
    A, S = areas
    converter = one.table.converter(0)
    a_c = np.abs(one.table.charges / one.table.port_charges[:, 2:])
    a_r = one.switches.charges / np.abs(one.table.port_charges[:, 2:])
    return circuit_of(
        converter,
        (a_c**2 / model.alpha * A)[0].tolist(),
        (model.beta / a_r**2 / S)[0].tolist(),
        series_resistances=(model.series / a_c**2 / A)[0].tolist(),
        # Stacked devices step together: s plates, where the stack has 1 / s^2 of the capacitance.
        plate_fraction=(plate_fraction * one.elements.capacitor_choice.series**2)[0].tolist(),
    )


@pytest.mark.parametrize("converter", CONVERTERS, ids=lambda c: c.code)
def test_the_plate_term_is_what_a_switch_level_steady_state_loses_at_no_load(converter):
    # All that the input gives at no load goes into the plates. To first order in the plate fraction.
    rng = np.random.default_rng(5)
    fraction = 1e-5
    one, model, A, S, f = sized(converter, rng, slow_to_fast=100.0)
    circuit = circuit_with(one, model, (A, S), fraction)
    lost = operate(SteadyState.of(circuit), float(f[0]), 3.0, output_current=0.0).loss
    thin = replace(model, plate=model.plate * fraction / 0.02)
    assert losses(thin, A, S, f).plate[0] == pytest.approx(lost, rel=1e-3)


@pytest.mark.parametrize("slow_to_fast", [0.02, 0.3, 1.4, 5.0, 50.0])
@pytest.mark.parametrize("converter", CONVERTERS, ids=lambda c: c.code)
def test_conduction_and_plates_add_up_to_a_switch_level_steady_state(converter, slow_to_fast):
    # The blend errs within known bounds: R_out lies between x coth(x / y), where all loops relax alike, and
    # x + y (see `capmuster.rank.exact.impedance`). With the exact impedance the sum is the steady state's.
    rng = np.random.default_rng(7)
    fraction, current = 1e-5, 3e-3  # plates small enough to settle even far in the fast limit
    one, model, A, S, f = sized(converter, rng, slow_to_fast=slow_to_fast)
    # Without the wiring, which is outside the converter.
    model = replace(model, plate=model.plate * fraction / 0.02, lead=np.zeros(1))
    found = losses(model, A, S, f, mean_square_current=np.array([current**2]))
    circuit = circuit_with(one, model, (A, S), fraction)
    sign = float(np.sign(one.table.ratios[0]))
    exact = operate(SteadyState.of(circuit), float(f[0]), 3.0, output_current=sign * current)
    counted = float(found.conduction[0] + found.plate[0])
    z = impedance(model, A, S, f)
    lowest = loop_blend(z.slow, z.fast)[0] * current**2 + found.plate[0]
    highest = (z.slow + z.fast)[0] * current**2 + found.plate[0]
    assert lowest * (1 - 5e-3) <= exact.loss <= highest * (1 + 5e-3)
    if slow_to_fast in (0.02, 50.0):
        assert counted == pytest.approx(exact.loss, rel=0.03)
    # Exact impedance in the blend's stead: the whole sum.
    exact_impedance = output_impedance(circuit, f).resistance[0]
    assert exact_impedance * current**2 + found.plate[0] == pytest.approx(exact.loss, rel=5e-3)


def test_no_term_is_counted_twice():
    # Each term of a model with that coefficient alone is the term of the whole model, and nothing else.
    _, model, A, S, f = sized(CONVERTERS[2], np.random.default_rng(3), slow_to_fast=1.0)
    whole = losses(model, A, S, f, mean_square_current=np.array([1e-6]))
    assert whole.total[0] == pytest.approx(
        sum(float(getattr(whole, name)[0]) for name in TERM_FIELDS), rel=1e-12
    )
    zero = {
        name: np.zeros_like(getattr(model, name))
        for name in (
            "plate",
            "gate",
            "output_charge",
            "leakage_c",
            "leakage_s",
            "controller",
            "lead",
            "series",
        )
    }
    bare = losses(replace(model, **zero), A, S, f, mean_square_current=np.array([1e-6]))
    assert bare.fixed[0] == 0.0
    for name, term in (
        ("plate", "plate"),
        ("gate", "gate"),
        ("output_charge", "output_charge"),
        ("controller", "controller"),
    ):
        alone = losses(replace(model, **{k: v for k, v in zero.items() if k != name}), A, S, f)
        assert alone.fixed[0] == pytest.approx(float(getattr(whole, term)[0]), rel=1e-12)


def test_efficiency_is_output_over_input_power_of_the_steady_state():
    # V_out I / (V_in I_in) of the switch-level circuit, in the slow limit where the blend is exact.
    one, _, A, S, f = sized(CONVERTERS[5], np.random.default_rng(2), slow_to_fast=300.0)
    bare = replace(PLAIN, controller_power=0.0, wiring_resistance=0.0)
    bare = replace(
        bare,
        capacitors=(replace(CAPACITOR, plate_fraction=1e-4, leakage=0.0),),
        switches=(replace(SWITCH, gate_charge=0.0, output_charge=0.0, leakage=0.0),),
    )
    brief = replace(NODE, technology=bare)
    one = Candidates(one.table, one.switches, one.elements, brief)
    current = np.array([2e-3])
    design = Design(A, S, f, np.array([0.5]), current)
    found = operation(one, design, 3.0, current)
    circuit = circuit_with(one, one.model(3.0), (A, S), 1e-4)
    exact = operate(SteadyState.of(circuit), float(f[0]), 3.0, output_current=2e-3)
    assert found.efficiency[0] == pytest.approx(exact.efficiency, rel=1e-3)
    assert found.output[0] == pytest.approx(exact.output_voltage, rel=1e-3)


def test_plate_steps_are_those_of_either_plate():
    for converter in CONVERTERS:
        first, second = converter.balance.potentials
        plus = [first[word[0]] - second[word[2]] for word in converter.words]
        minus = [first[word[1]] - second[word[3]] for word in converter.words]
        assert plus == minus  # a capacitor's voltage is constant
        steps = plate_steps(table_of([converter]))[0]
        np.testing.assert_allclose(steps, [abs(float(v)) for v in plus], rtol=1e-12)
