"""SPICE decks, and ngspice as the judge of the exact steady state."""

import re

import numpy as np
import plain_circuit
import pytest

from capmuster.enumerate.converters import converters
from capmuster.enumerate.errors import CapmusterError
from capmuster.enumerate.families import dickson, doubler_chain, fibonacci, ladder, series_parallel
from capmuster.enumerate.wiring import Converter
from capmuster.rank.exact import simulate as simulating
from capmuster.rank.exact.circuit import circuit_of
from capmuster.rank.exact.deck import bench_for, write_deck
from capmuster.rank.exact.impedance import corner_frequency, output_impedance
from capmuster.rank.exact.operating import operate
from capmuster.rank.exact.simulate import simulate
from capmuster.rank.exact.steadystate import SteadyState
from capmuster.rank.scores.switching import switch_network

TRIPLER = Converter.parse("I-G/a-I I-G/O-a")
FAMILIES = {
    "series-parallel 3": series_parallel(3),
    "ladder 3": ladder(3),
    "Dickson 4": dickson(4),
    "Fibonacci 3": fibonacci(3),
    "doubler chain 2": doubler_chain(2),
    "doubler chain 2, alternate": doubler_chain(2, alternate=True),
    "series-parallel 3 as a step-down": series_parallel(3).swapped(),
}


def unequal(converter, rng, **rest):
    """Draw values within a factor of two of 1 uF and 100 mohm."""
    switches = len(switch_network(converter).switches)
    farads, ohms = 10 ** rng.uniform(-6.3, -5.7, converter.n), 10 ** rng.uniform(-1.3, -0.7, switches)
    return circuit_of(converter, farads.tolist(), ohms.tolist(), **rest)


def compare(converter, circuit, over_corner, droop=0.1, input_voltage=3.3):
    """Relative differences simulated - exact; peaks as a share of the input voltage."""
    steady = SteadyState.of(circuit)
    frequency = over_corner * corner_frequency(steady)
    exact = output_impedance(steady, frequency)
    output = float(exact.ratio[0]) * input_voltage * (1 - droop)
    point = operate(steady, frequency, input_voltage, output_voltage=output)
    found = simulate(write_deck(converter, circuit, bench_for(steady, frequency, input_voltage, output)))
    return {
        "ratio": found.no_load_ratio / exact.ratio[0] - 1,
        "resistance": found.output_resistance / exact.resistance[0] - 1,
        "efficiency": found.efficiency / point.efficiency - 1,
        "peak": float(np.abs(np.array(found.switch_peaks) - point.switch_peak).max()) / input_voltage,
    }


def assert_agrees(differences):
    assert {name: value for name, value in differences.items() if abs(value) > 1e-3} == {}


@pytest.mark.usefixtures("ngspice")
@pytest.mark.parametrize("name", FAMILIES)
def test_families_agree_with_ngspice(name):
    """An independent circuit simulator that steps through time, unequal values, near the corner."""
    rng = np.random.default_rng(len(name))
    circuit = unequal(FAMILIES[name], rng, series_resistances=0.02, duty=0.45)
    assert_agrees(compare(FAMILIES[name], circuit, 1.3))


@pytest.mark.usefixtures("ngspice")
@pytest.mark.parametrize("over_corner", [0.2, 1.0, 4.0])
def test_plates_agree_with_ngspice(over_corner):
    """Plate parasitics shift the ratio and cost input current; the simulator sees the same."""
    circuit = unequal(TRIPLER, np.random.default_rng(1), plate_fraction=[0.08, 0.04], plate=["minus", "plus"])
    assert output_impedance(circuit, 1e5).ratio[0] < 2.99
    assert_agrees(compare(TRIPLER, circuit, over_corner))


@pytest.mark.usefixtures("ngspice")
def test_chip_values_and_regulated_use_agree_with_ngspice():
    """Nanofarads, ohms, microamperes, and an output held far below its no-load value."""
    circuit = unequal(TRIPLER, np.random.default_rng(2)).scaled(capacitance=1e-4, resistance=1e2)
    assert_agrees(compare(TRIPLER, circuit, 0.7, droop=0.4, input_voltage=1.8))


@pytest.mark.long
@pytest.mark.usefixtures("ngspice")
@pytest.mark.parametrize("seed", range(50))
def test_random_census_converters_agree_with_ngspice(seed):
    """Seeded converters of one to four capacitors with unequal values, below, at and above the corner."""
    rng = np.random.default_rng(seed)
    table = converters(1 + seed % 4)
    converter = table.converter(int(rng.integers(len(table))))
    circuit = unequal(
        converter,
        rng,
        series_resistances=[0.0, 0.03][seed % 2],
        plate_fraction=[0.0, 0.0, 0.04][seed % 3],
        duty=float(rng.uniform(0.4, 0.6)),
    )
    assert_agrees(compare(converter, circuit, [0.3, 1.0, 3.0][seed // 4 % 3]))


@pytest.mark.long
@pytest.mark.usefixtures("ngspice")
@pytest.mark.parametrize("size", [5, 8])
def test_larger_families_agree_with_ngspice(size):
    rng = np.random.default_rng(size)
    for converter in (series_parallel(size), ladder(size), dickson(size)):
        assert_agrees(compare(converter, unequal(converter, rng), 1.0))


def deck_of(converter=TRIPLER, **rest):
    circuit = circuit_of(converter, [1e-6, 2.2e-6], 0.1, **rest)
    steady = SteadyState.of(circuit)
    return write_deck(converter, circuit, bench_for(steady, 1e5, 3.3, 9.0))


def test_deck_is_a_subcircuit_with_named_pins_and_a_parameter_for_each_value():
    deck = deck_of(series_resistances=[0.0, 0.01], plate_fraction=0.05)
    network = switch_network(TRIPLER)
    assert re.search(r"^\.subckt conv_\w+ G I O PHI1 PHI2$", deck, re.MULTILINE)
    for text in ("C1=1e-06", "C2=2.2e-06", "RC2=0.01", "C1P=5e-08", "RS1=0.1"):
        assert text in deck
    assert "RC1=" not in deck  # no series resistance, no element
    for switch in network.switches:
        # The first node is the one that is positive while the switch blocks, found from the exact potentials.
        line = re.search(rf"^{switch.name} (\S+) (\S+) PHI(\d) G m{switch.name}$", deck, re.MULTILINE)
        high, low = (network.clusters[k] for k in switch.clusters)
        assert [line[1].replace("p", "+").replace("m", "-"), line[2].replace("p", "+").replace("m", "-")] == [
            high.name,
            low.name,
        ]
        other = 2 - switch.phase
        assert high.potentials[other] >= low.potentials[other]
        assert int(line[3]) == switch.phase


def test_deck_keeps_clear_of_the_spice_traps():
    """SPICE reads M as milli, knows no VSWITCH in ngspice, and takes only ASCII safely."""
    deck = deck_of()
    assert deck.isascii()
    assert not re.search(r"=\s*-?[\d.]+[A-Za-df-z]", deck), "a value with a suffix"
    assert "VSWITCH" not in deck.upper()
    assert "chgtol" not in deck.lower()
    assert deck == deck_of()


@pytest.mark.usefixtures("ngspice")
def test_measures_follow_the_parameters():
    """A deck whose values are edited by hand measures the edited circuit."""
    deck = deck_of()
    edited = deck.replace("C2=2.2e-06", "C2=1e-06")
    circuit = circuit_of(TRIPLER, 1e-6, 0.1)
    assert simulate(edited).output_resistance == pytest.approx(
        output_impedance(circuit, 1e5).resistance[0], rel=1e-3
    )


def test_missing_simulator_says_how_to_get_it(monkeypatch):
    monkeypatch.setattr(simulating.shutil, "which", lambda _: None)
    with pytest.raises(CapmusterError, match="apt-get install ngspice"):
        simulate(deck_of())


@pytest.mark.usefixtures("ngspice")
def test_broken_deck_is_reported_with_the_simulators_words():
    with pytest.raises(CapmusterError, match="does not measure no_load_ratio, output_resistance: Undefined"):
        simulate(deck_of().replace(".meas tran output_resistance", "*"))


def test_endless_settling_is_refused():
    circuit = circuit_of(plain_circuit.random_converter(np.random.default_rng(0), 3), 1.0, 1.0)
    with pytest.raises(CapmusterError, match="cycles to settle"):
        bench_for(SteadyState.of(circuit), 1e6, 1.0, 1.0)
