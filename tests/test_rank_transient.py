"""Start-up from empty capacitors: closed forms and a general-purpose integrator."""

import math
from itertools import pairwise

import numpy as np
import plain_circuit
import pytest
from scipy.integrate import solve_ivp

from capmuster.enumerate.errors import CapmusterError
from capmuster.rank.exact.circuit import Capacitor, Circuit, Switch
from capmuster.rank.exact.exponentials import extremes, mean_square
from capmuster.rank.exact.operating import operate
from capmuster.rank.exact.steadystate import SteadyState
from capmuster.rank.exact.transient import start_up

DOUBLER = Circuit(
    ("G", "I", "O", "p", "m"),
    (0, 1, 2),
    (Capacitor("C1", 3, 4, 1.0),),
    (
        Switch("S1", 3, 1, 1, 0.5),
        Switch("S2", 4, 0, 1, 0.5),
        Switch("S3", 3, 2, 2, 0.5),
        Switch("S4", 4, 1, 2, 0.5),
    ),
)


def test_first_charge_of_an_empty_capacitor():
    """V/R at once, C V (1 - exp(-t/RC)) of charge: textbook RC circuit."""
    found = start_up(DOUBLER, 0.5, 3.0, output_capacitance=math.inf, cycles=1)
    assert found.input_peak == pytest.approx(3.0 + 3.0 * (1 - math.exp(-1)), rel=1e-12)  # start of phase 2
    assert found.capacitor_high[0] == pytest.approx(3.0 * (1 - math.exp(-1)), rel=1e-12)
    one = start_up(DOUBLER, 1e-3, 3.0, output_capacitance=math.inf, cycles=1)
    assert one.input_charge[0] == pytest.approx(
        3.0 + 6.0, rel=1e-9
    )  # C V, then C (V + V) against an output at 0


def test_settles_at_the_steady_state():
    """After many cycles into a resistor the output meets that of the exact steady state."""
    load = 40.0
    found = start_up(DOUBLER, 0.5, 1.0, output_capacitance=500.0, load_resistance=load, cycles=20_000)
    point = operate(SteadyState.of(DOUBLER), 0.5, 1.0, output_current=found.output_voltage[-1] / load)
    assert found.settled
    assert found.output_voltage[-1] == pytest.approx(point.output_voltage, rel=1e-3)
    assert found.input_charge[-1] * 0.5 == pytest.approx(point.input_current, rel=1e-3)


def test_no_load_charge_of_the_output():
    """The input gives the ratio times the charge of the output, plus what the flying capacitor keeps."""
    output = 5.0
    found = start_up(DOUBLER, 0.5, 1.0, output_capacitance=output)
    kept = found.capacitor_high[0]
    assert found.output_voltage[-1] == pytest.approx(2.0, rel=2e-3)
    assert found.input_charge.sum() == pytest.approx(2 * output * found.output_voltage[-1] + kept, rel=0.01)


@pytest.mark.parametrize("seed", range(8))
def test_against_a_general_purpose_integrator(seed):
    """`scipy.integrate.solve_ivp` on capacitor voltages in modified nodal analysis, the output's too."""
    rng = np.random.default_rng(seed)
    converter = plain_circuit.random_converter(rng, 1 + seed % 4)
    circuit = plain_circuit.random_circuit(converter, rng, duty=float(rng.uniform(0.3, 0.7)))
    output, frequency, cycles, first = 20.0, 0.2, 4, 1 + seed % 2
    found = start_up(circuit, frequency, 1.0, output_capacitance=output, cycles=cycles, first_phase=first)

    # The oracle holds the output by a source: let the output voltage be a state, charged by the port current.
    phases = plain_circuit.phases_of(circuit, frequency)
    phases = phases if first == 1 else phases[::-1]
    n = len(circuit.capacitors)
    state, traces, charges, peak = np.zeros(n + 2), [], [], 0.0
    blocked = {1: [], 2: []}
    for turn in range(2 * cycles):
        phase, number = phases[turn % 2], (first, 3 - first)[turn % 2]

        def slope(_, x, phase=phase):
            full = np.concatenate([x[:n], [1.0, x[n]]])
            current = phase.port_currents @ full
            return np.concatenate([phase.rate @ full, [-current[1] / output, current[0]]])

        solved = solve_ivp(
            slope, (0, phase.duration), state, method="LSODA", rtol=1e-10, atol=1e-12, dense_output=True
        )
        times = np.concatenate([[0.0], phase.duration * np.logspace(-7, 0, 600)])
        trace = solved.sol(times).T
        full = np.column_stack([trace[:, :n], np.ones(len(times)), trace[:, n]])
        potentials = full @ phase.potentials.T
        blocked[number].append([potentials[:, s.a] - potentials[:, s.b] for s in circuit.switches])
        peak = max(peak, float(np.abs(full @ phase.port_currents[0]).max()))
        traces.append(trace)
        state = solved.y[:, -1]
        if turn % 2:
            charges.append(state[n + 1])
    every = np.vstack(traces)
    np.testing.assert_allclose(found.input_charge, np.diff([0.0, *charges]), rtol=1e-6, atol=1e-8)
    np.testing.assert_allclose(found.output_voltage[-1], state[n], rtol=1e-7, atol=1e-9)
    np.testing.assert_allclose(found.capacitor_high, every[:, :n].max(0).clip(0), rtol=1e-4, atol=1e-6)
    np.testing.assert_allclose(found.capacitor_low, every[:, :n].min(0).clip(None, 0), rtol=1e-4, atol=1e-6)
    assert found.input_peak == pytest.approx(peak, rel=1e-4)
    for k, switch in enumerate(circuit.switches):
        seen = np.concatenate([trace[k] for trace in blocked[3 - switch.phase]])
        np.testing.assert_allclose(found.switch_high[k], seen.max(), rtol=1e-4, atol=1e-5)
        np.testing.assert_allclose(found.switch_low[k], seen.min(), rtol=1e-4, atol=1e-5)


def test_step_charge_of_capacitors_between_stiff_ports():
    """A capacitor across the stiff input takes C V at the step itself (definition of capacitance)."""
    across = Circuit(
        DOUBLER.nodes, DOUBLER.ports, (*DOUBLER.capacitors, Capacitor("C2", 1, 0, 4.0)), DOUBLER.switches
    )
    with_it = start_up(across, 0.5, 3.0, output_capacitance=10.0)
    without = start_up(DOUBLER, 0.5, 3.0, output_capacitance=10.0)
    assert with_it.step_charge == pytest.approx(12.0)
    assert without.step_charge == 0.0
    np.testing.assert_allclose(with_it.input_charge, without.input_charge, rtol=1e-9)
    assert with_it.capacitor_peak[1] == pytest.approx(3.0)


@pytest.mark.parametrize("seed", range(30))
def test_extremes_and_mean_square_of_exponentials(seed):
    """Against dense sampling and Gauss-Legendre quadrature (numpy)."""
    rng = np.random.default_rng(seed)
    k = int(rng.integers(1, 6))
    rates = 10 ** rng.uniform(-2, 2, k)
    terms = rng.normal(size=(7, k)) * 10 ** rng.uniform(-1, 1, (7, k))
    rest, duration = rng.normal(size=7), 3.0
    low, high = extremes(rest[None], terms[None], rates, duration)
    times = np.concatenate([[0.0], duration * np.logspace(-7, 0, 20_001)])
    values = rest[:, None] + terms @ np.exp(-np.outer(rates, times))
    span = np.ptp(values, axis=1)
    assert (high - values.max(1) > -1e-12 * span).all()
    assert (high - values.max(1) < 1e-5 * span).all()
    assert (values.min(1) - low > -1e-12 * span).all()
    assert (values.min(1) - low < 1e-5 * span).all()
    nodes, weights = np.polynomial.legendre.leggauss(60)
    edges = np.concatenate([[0.0], duration * np.logspace(-6, 0, 30)])
    total = 0.0
    for left, right in pairwise(edges):
        moments = left + (right - left) * (nodes + 1) / 2
        total = total + ((terms @ np.exp(-np.outer(rates, moments))) ** 2) @ weights * (right - left) / 2
    np.testing.assert_allclose(mean_square(terms, rates, duration), total / duration, rtol=1e-9)


def test_extremes_at_known_moments():
    """With x = exp(-t), (x - 1/2)^2 (x - 1/4) is flat at x = 1/2 and at x = 1/3, worth 0 and 1/432."""
    coefficients = np.poly([0.5, 0.5, 0.25])  # x^3 first
    low, high = extremes([[coefficients[3]]], coefficients[None, None, 2::-1], np.array([1.0, 2.0, 3.0]), 1.3)
    assert low[0] == pytest.approx(0.0, abs=1e-14)  # inside; 0.000127 at the end
    assert high[0] == pytest.approx(0.1875, rel=1e-12)  # at the start
    low, high = extremes(
        [[-coefficients[3]]], -coefficients[None, None, 2::-1], np.array([1.0, 2.0, 3.0]), 30.0
    )
    assert high[0] == pytest.approx(1 / 16, rel=1e-12)  # at rest


def test_extremes_of_a_batch_are_those_of_its_members():
    rng = np.random.default_rng(7)
    rates, terms, rest = 10 ** rng.uniform(-2, 2, 6), rng.normal(size=(40, 5, 6)), rng.normal(size=(40, 5))
    low, high = extremes(rest, terms, rates, 2.0)
    each = [extremes(rest[i : i + 1], terms[i : i + 1], rates, 2.0) for i in range(40)]
    np.testing.assert_allclose(low, np.min([one[0] for one in each], axis=0), rtol=1e-10, atol=1e-11)
    np.testing.assert_allclose(high, np.max([one[1] for one in each], axis=0), rtol=1e-10, atol=1e-11)


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ({"output_capacitance": 0.0}, "output capacitance"),
        ({"output_capacitance": 1.0, "load_resistance": -1.0}, "load resistance"),
        ({"output_capacitance": 1.0, "first_phase": 3}, "first phase 3"),
    ],
)
def test_refused_values(arguments, message):
    with pytest.raises(CapmusterError, match=message):
        start_up(DOUBLER, 1.0, 1.0, **arguments)
