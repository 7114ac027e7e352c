"""Blends of the limits against the exact impedance, and what follows from it at a load."""

import numpy as np
import plain_circuit
import pytest

from capmuster.enumerate.converters import converters
from capmuster.enumerate.errors import CapmusterError
from capmuster.enumerate.families import dickson, doubler_chain, fibonacci, ladder, series_parallel
from capmuster.enumerate.wiring import Converter
from capmuster.rank.exact.circuit import circuit_of
from capmuster.rank.exact.impedance import (
    blend,
    corner_frequency,
    loop_blend,
    output_impedance,
    regulating_frequency,
)
from capmuster.rank.exact.operating import operate
from capmuster.rank.exact.steadystate import SteadyState
from capmuster.rank.scores.switching import switch_network

QUOTIENTS = np.array([0.25, 0.5, 0.7, 1.0, 1.4, 2.0, 4.0])  # R_SSL / R_FSL
DOUBLER = Converter.parse("I-G/O-I")
FAMILIES = [series_parallel(4), ladder(4), dickson(5), fibonacci(4), doubler_chain(3)]


def allotted(converter, rng=None):
    """Share area as the closed form does: C by a_c sqrt(d), R by sqrt(rho) / a_r; classes alike, or spread.

    Spread classes differ by a factor exp(1) (one standard deviation) in density and specific resistance.
    """
    network = switch_network(converter)
    output = abs(converter.balance.port_charges[2])
    a_c = np.array([abs(q) / output for q in converter.balance.charges])
    a_r = np.array([float(switch.multiplier) for switch in network.switches])
    density, rho = np.ones(len(a_c)), np.ones(len(a_r))
    if rng is not None:
        density, rho = np.exp(rng.normal(size=len(a_c))), np.exp(rng.normal(size=len(a_r)))
    return circuit_of(converter, list(a_c * np.sqrt(density)), list(np.sqrt(rho) / a_r))


def errors(circuit):
    """Relative errors of the blends at the quotients, shape (3, 7): exponents 2 and 2.6, x coth(x/y)."""
    steady = SteadyState.of(circuit)
    found = output_impedance(steady, corner_frequency(steady) / QUOTIENTS)
    x, y = found.slow, found.fast
    np.testing.assert_allclose(x / y, QUOTIENTS, rtol=1e-9)
    return np.array([blend(x, y), blend(x, y, 2.6), loop_blend(x, y)]) / found.resistance - 1


def test_blends_on_one_loop():
    """On equal loops x coth(x/y) is exact (closed form); exponent 2 is never low and up to 8.8 % high."""
    square, steep, loop = errors(circuit_of(DOUBLER, 1.0, 1.0))
    np.testing.assert_allclose(loop, 0, atol=1e-12)
    assert square.min() > 0
    assert square[4] == pytest.approx(0.088, abs=5e-4)
    assert np.abs(steep).max() < 0.023


@pytest.mark.parametrize("converter", FAMILIES, ids=lambda one: one.id)
def test_exact_impedance_lies_between_its_bounds(converter):
    """Check x coth(x/y) <= R <= x + y: convexity of x coth(x/y), and coth(u) <= 1 + 1/u."""
    rng = np.random.default_rng(1)
    for circuit in (allotted(converter), allotted(converter, rng)):
        steady = SteadyState.of(circuit)
        found = output_impedance(steady, corner_frequency(steady) * np.logspace(-3, 3, 61))
        assert (found.resistance >= loop_blend(found.slow, found.fast) * (1 - 1e-12)).all()
        assert (found.resistance <= (found.slow + found.fast) * (1 + 1e-12)).all()
        assert (np.diff(found.resistance) < 0).all()


def sample_of_census(rng, n, most):
    """Seeded clean converters of n capacitors."""
    table = converters(n)
    for row in rng.permutation(len(table))[: 4 * most]:
        converter = table.converter(int(row))
        if switch_network(converter).clean:
            yield converter
            most -= 1
            if not most:
                return


@pytest.mark.parametrize(("n", "most"), [(2, 30), (3, 60)])
def test_lower_bound_holds_over_the_census(n, most):
    rng = np.random.default_rng(n)
    for converter in sample_of_census(rng, n, most):
        assert errors(allotted(converter, rng))[2].max() < 1e-12


@pytest.mark.long
def test_which_blend_fits_best_over_the_census():
    """The record in `impedance`: errors over 940 converters and seven quotients.

    The exact impedance is the reference (itself held against closed forms, matrix exponentials and ngspice).
    Elements of one class: x coth(x/y) fits best of the three. Classes that differ by a factor e: exponent 2.
    """
    rng = np.random.default_rng(2)
    sample = [one for n, most in ((2, 40), (3, 480), (4, 480)) for one in sample_of_census(rng, n, most)]
    alike = np.array([errors(allotted(one)) for one in sample])
    spread = np.array([errors(allotted(one, rng)) for one in sample])

    def size(error):
        return np.sqrt((error**2).mean(axis=(0, 2)))

    np.testing.assert_allclose(size(alike), [0.041, 0.028, 0.024], atol=0.0005)
    np.testing.assert_allclose(size(spread), [0.034, 0.047, 0.045], atol=0.0005)
    np.testing.assert_allclose(alike.min(axis=(0, 2)), [-0.044, -0.118, -0.122], atol=0.0005)
    np.testing.assert_allclose(spread.min(axis=(0, 2)), [-0.137, -0.203, -0.203], atol=0.0005)
    assert np.argmin(size(alike)) == 2
    assert np.argmin(size(spread)) == 0
    assert alike[:, 0].max() < 0.0881
    assert alike[:, 2].max() < 1e-12


def test_load_line_and_efficiency_are_the_operating_points():
    """Ratio, resistance and idle current against the full steady state at the same load."""
    rng = np.random.default_rng(3)
    circuit = plain_circuit.random_circuit(plain_circuit.random_converter(rng, 3), rng, plates=True)
    steady = SteadyState.of(circuit)
    found = output_impedance(steady, [0.05, 0.5])
    sign = float(np.sign(found.ratio[0]))
    for index, frequency in enumerate(found.frequency):
        load = sign * 0.2 * abs(found.ratio[index]) * 3.0 / found.resistance[index]
        point = operate(steady, float(frequency), 3.0, output_current=float(load))
        assert found.output_voltage(3.0, load)[index] == pytest.approx(point.output_voltage, rel=1e-9)
        assert found.input_current(3.0, load)[index] == pytest.approx(point.input_current, rel=1e-9)
        assert found.efficiency(3.0, load)[index] == pytest.approx(point.efficiency, rel=1e-9)


@pytest.mark.parametrize("code", ["I-G/O-I", "I-G/G-O"])
def test_regulating_frequency_holds_the_output(code):
    """Common practice: the output is held by lowering the frequency until R_out takes the difference."""
    circuit = circuit_of(Converter.parse(code), 1e-6, 0.1)
    ideal = output_impedance(circuit, 1.0).ratio[0] * 3.0
    held, load = 0.9 * ideal, 0.02
    frequency = regulating_frequency(circuit, 3.0, held, load, lowest=1.0, highest=1e8)
    found = output_impedance(circuit, frequency)
    assert found.resistance[0] * load == pytest.approx(abs(ideal - held), rel=1e-9)
    assert regulating_frequency(circuit, 3.0, held, load, lowest=1e6, highest=1e8) == 1e6
    with pytest.raises(CapmusterError, match="out of reach"):
        regulating_frequency(circuit, 3.0, held, 10.0, lowest=1.0, highest=1e8)


def test_corner_is_where_the_limits_meet():
    circuit = allotted(FAMILIES[0])
    found = output_impedance(circuit, corner_frequency(circuit))
    assert found.slow[0] == pytest.approx(found.fast[0], rel=1e-12)
