"""A converter's circuit against its wiring."""

import math
from fractions import Fraction

import numpy as np
import plain_circuit
import pytest

from capmuster.enumerate.errors import CapmusterError
from capmuster.enumerate.wiring import Converter
from capmuster.rank.exact.circuit import circuit_of
from capmuster.rank.exact.impedance import output_impedance
from capmuster.rank.exact.operating import operate
from capmuster.rank.exact.steadystate import SteadyState
from capmuster.rank.scores.switching import switch_network

TRIPLER = Converter.parse("I-G/a-I I-G/O-a")


@pytest.mark.parametrize("seed", range(12))
def test_no_load_state_is_the_exact_balance(seed):
    """Kirchhoff's laws in fractions: at no load every voltage is ideal, whatever the values."""
    rng = np.random.default_rng(seed)
    converter = plain_circuit.random_converter(rng, 1 + seed % 4)
    network = switch_network(converter)
    values = 10 ** rng.uniform(-1, 1, converter.n), 10 ** rng.uniform(-1, 1, len(network.switches))
    circuit = circuit_of(converter, list(values[0]), list(values[1]), series_resistances=0.3)
    point = operate(SteadyState.of(circuit), 0.4, 2.0, output_current=0.0)
    assert point.output_voltage == pytest.approx(2 * float(converter.ratio), rel=1e-9)
    np.testing.assert_allclose(
        point.capacitor_mean, [2 * float(v) for v in converter.balance.voltages], rtol=1e-9
    )
    ideal = [2 * float(switch.blocking_voltage) for switch in network.switches]
    np.testing.assert_allclose(point.switch_high, ideal, rtol=1e-9, atol=1e-9)
    np.testing.assert_allclose(point.switch_low, ideal, rtol=1e-9, atol=1e-9)


@pytest.mark.parametrize("seed", range(12))
def test_currents_follow_the_charge_multipliers(seed):
    """Charge balance: mean currents follow the exact multipliers at any frequency."""
    rng = np.random.default_rng(40 + seed)
    converter = plain_circuit.random_converter(rng, 1 + seed % 4)
    network = switch_network(converter)
    circuit = circuit_of(converter, 1.0, list(10 ** rng.uniform(-1, 1, len(network.switches))))
    for frequency in (1e-3, 1.0, 1e3):
        sign = math.copysign(1.0, converter.ratio)
        point = operate(SteadyState.of(circuit), frequency, 1.0, output_current=sign * 0.01)
        assert abs(point.output_current) == pytest.approx(0.01, rel=1e-9)
        assert point.input_current == pytest.approx(0.01 * abs(float(converter.ratio)), rel=1e-9)
        np.testing.assert_allclose(
            np.abs(point.switch_mean),
            [0.01 * float(s.multiplier) for s in network.switches],
            rtol=1e-8,
            atol=1e-12,
        )


@pytest.mark.parametrize("seed", range(16))
def test_limits_are_the_published_sums(seed):
    """Seeman and Sanders (IEEE Trans. Power Electronics, 2008): sums over squared charge multipliers."""
    rng = np.random.default_rng(80 + seed)
    converter = plain_circuit.random_converter(rng, 1 + seed % 4)
    network = switch_network(converter)
    farads = 10 ** rng.uniform(-7, -5, converter.n)
    ohms = 10 ** rng.uniform(-2, 0, len(network.switches))
    series = 10 ** rng.uniform(-3, -1, converter.n)
    duty, frequency = 0.4, 1e5
    circuit = circuit_of(converter, list(farads), list(ohms), series_resistances=list(series), duty=duty)
    found = output_impedance(circuit, frequency)
    output = abs(converter.balance.port_charges[2])
    a_c = np.array([float(Fraction(abs(q), output)) for q in converter.balance.charges])
    slow = (a_c**2 / (frequency * farads)).sum()
    share = np.array([duty if switch.phase == 1 else 1 - duty for switch in network.switches])
    a_r = np.array([float(switch.multiplier) for switch in network.switches])
    fast = (ohms * a_r**2 / share).sum() + (series * a_c**2 * (1 / duty + 1 / (1 - duty))).sum()
    assert found.slow[0] == pytest.approx(slow, rel=1e-9)
    assert found.fast[0] == pytest.approx(fast, rel=1e-9)


def test_names_follow_wiring_and_switch_network():
    circuit = circuit_of(TRIPLER, [1e-6, 2e-6], 0.1, plate_fraction=[0.0, 0.05])
    network = switch_network(TRIPLER)
    assert circuit.nodes == tuple(cluster.name for cluster in network.clusters)
    assert [circuit.nodes[port] for port in circuit.ports] == ["G", "I", "O"]
    assert [(c.name, c.capacitance) for c in circuit.capacitors] == [("C1", 1e-6), ("C2", 2e-6)]
    assert [(s.name, s.phase) for s in circuit.switches] == [(s.name, s.phase) for s in network.switches]
    assert [(p.name, circuit.nodes[p.node], p.capacitance) for p in circuit.plates] == [("C2", "C2-", 1e-7)]
    assert circuit_of(TRIPLER, 1.0, 1.0, plate_fraction=0.1, plate="plus").plates[0].node == 3


def test_plate_wired_to_a_port_is_left_out():
    """It is held at the port's voltage, so it takes part in nothing."""
    ladder = Converter.parse("I-O/O-G")
    circuit = circuit_of(ladder, 1e-6, 0.1, plate_fraction=0.05)
    ports = set(circuit.ports)
    assert all(plate.node not in ports for plate in circuit.plates)


def test_scaling_capacitance_and_resistance_scales_impedance():
    """Dimensions: R_out(f) of k R and C / k is k R_out(f)."""
    circuit = circuit_of(TRIPLER, [1e-6, 2e-6], 0.1, series_resistances=0.02, plate_fraction=0.03)
    frequency = np.logspace(4, 7, 7)
    one = output_impedance(circuit, frequency)
    five = output_impedance(circuit.scaled(capacitance=0.2, resistance=5.0), frequency)
    np.testing.assert_allclose(five.resistance, 5 * one.resistance, rtol=1e-12)
    np.testing.assert_allclose(five.ratio, one.ratio, rtol=1e-12)


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (([1e-6], 0.1), "1 values for the capacitances; accepted: 1 or 2"),
        ((1e-6, [0.1, 0.1]), "2 values for the switch resistances"),
        ((-1e-6, 0.1), "capacitance of C1 is -1e-06 F"),
        ((1e-6, float("inf")), "resistance of S1 is inf ohm"),
    ],
)
def test_refused_values(arguments, message):
    with pytest.raises(CapmusterError, match=message):
        circuit_of(TRIPLER, *arguments)
