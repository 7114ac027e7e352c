"""The exact periodic steady state: closed forms, textbook identities, and a plain matrix exponential."""

import numpy as np
import plain_circuit
import pytest

from capmuster.enumerate.errors import CapmusterError, IllPosedError
from capmuster.rank.exact.circuit import Capacitor, Circuit, PlateParasitic, Switch
from capmuster.rank.exact.impedance import output_impedance
from capmuster.rank.exact.operating import operate
from capmuster.rank.exact.steadystate import SteadyState

DECADES = np.logspace(-6, 6, 61)


def doubler(first=0.3, second=0.7, capacitance=1.0, resistance=0.0, **rest):
    """One capacitor, I-G/O-I, with given total resistance in the loop of each phase."""
    first, second = (first - resistance) / 2, (second - resistance) / 2
    switches = (
        Switch("S1", 3, 1, 1, first),
        Switch("S2", 4, 0, 1, first),
        Switch("S3", 3, 2, 2, second),
        Switch("S4", 4, 1, 2, second),
    )
    capacitors = (Capacitor("C1", 3, 4, capacitance, resistance),)
    return Circuit(("G", "I", "O", "p", "m"), (0, 1, 2), capacitors, switches, **rest)


@pytest.mark.parametrize("duty", [0.5, 0.13])
@pytest.mark.parametrize("resistance", [0.0, 0.1])
def test_closed_form_of_a_single_loop_over_twelve_decades(duty, resistance):
    """R_out = (k^2 / (2 f C)) [coth(T1/(2 R1 C)) + coth(T2/(2 R2 C))], RC circuit theory; k = 1 here."""
    first, second, capacitance = 0.3, 0.7, 2.0
    found = output_impedance(doubler(first, second, capacitance, resistance, duty=duty), DECADES)
    periods = 1 / DECADES
    closed = (0.5 / (DECADES * capacitance)) * (
        1 / np.tanh(duty * periods / (2 * first * capacitance))
        + 1 / np.tanh((1 - duty) * periods / (2 * second * capacitance))
    )
    np.testing.assert_allclose(found.resistance, closed, rtol=1e-12)
    np.testing.assert_allclose(found.ratio, 2.0, rtol=1e-12)


def test_equal_loops_fall_from_one_over_fc_to_four_r():
    """Common practice: 1/(fC) when slow, four times the loop resistance when fast."""
    found = output_impedance(doubler(0.25, 0.25, 2.0), [1e-9, 1e9])
    np.testing.assert_allclose(found.resistance * [1e-9 * 2.0, 1 / (4 * 0.25)], 1.0, rtol=1e-12)


def test_stiff_values_keep_their_accuracy():
    """A single loop whose resistances and time constants lie nine decades apart, against the closed form."""
    first, second = 1e-6, 1e3
    found = output_impedance(doubler(first, second), DECADES)
    closed = (0.5 / DECADES) * (1 / np.tanh(0.25 / DECADES / first) + 1 / np.tanh(0.25 / DECADES / second))
    np.testing.assert_allclose(found.resistance, closed, rtol=1e-12)


@pytest.mark.parametrize("seed", range(20))
def test_everything_against_the_augmented_matrix_exponential(seed):
    """`scipy.linalg.expm` in other state variables, on converters with random trees of switches."""
    rng = np.random.default_rng(seed)
    converter = plain_circuit.random_converter(rng, 1 + seed % 4)
    dead_time = 0.02 if seed % 3 == 0 else 0.0
    circuit = plain_circuit.random_circuit(
        converter, rng, plates=seed % 2 == 1, duty=float(rng.uniform(0.3, 0.7)), dead_time=dead_time
    )
    frequency = float(10 ** rng.uniform(-2, 0.5))
    ports = (1.0, float(rng.uniform(0.2, 1.1) * converter.ratio))
    expected = plain_circuit.steady(circuit, frequency, ports)
    point = operate(SteadyState.of(circuit), frequency, ports[0], output_voltage=ports[1])
    scale = np.abs(expected["currents"]).max()
    np.testing.assert_allclose(
        [point.input_current, -point.output_current], expected["currents"], rtol=1e-9, atol=1e-9 * scale
    )
    np.testing.assert_allclose(point.capacitor_mean, expected["mean"], rtol=1e-9, atol=1e-10)
    np.testing.assert_allclose(point.switch_rms, expected["switch_rms"], rtol=1e-7, atol=1e-9 * scale)
    np.testing.assert_allclose(point.capacitor_rms, expected["capacitor_rms"], rtol=1e-7, atol=1e-9 * scale)
    np.testing.assert_allclose([point.input_rms, point.output_rms], expected["port_rms"], rtol=1e-7)
    # Samples never reach beyond an extreme and come near it.
    swing = np.abs(expected["high"] - expected["low"]).max() + np.abs(expected["switch_high"]).max()
    for exact, sampled, sign in (
        (point.capacitor_high, expected["high"], 1),
        (point.capacitor_low, expected["low"], -1),
        (point.switch_high, expected["switch_high"], 1),
        (point.switch_low, expected["switch_low"], -1),
    ):
        beyond = sign * (exact - sampled)
        assert (beyond > -1e-9 * swing).all()
        assert (beyond < 1e-3 * swing).all()


@pytest.mark.parametrize("seed", range(20))
def test_input_power_is_output_power_and_heat(seed):
    """Conservation of energy; no capacitor gains any over a period."""
    rng = np.random.default_rng(100 + seed)
    converter = plain_circuit.random_converter(rng, 1 + seed % 4)
    timing = {"duty": float(rng.uniform(0.2, 0.8)), "dead_time": 1e-4 * (seed % 2)}
    circuit = plain_circuit.random_circuit(converter, rng, series=seed % 3 > 0, plates=seed % 5 > 1, **timing)
    for frequency in (1e-3, 1.0, 1e3):
        point = operate(SteadyState.of(circuit), frequency, 3.0, output_voltage=2.5 * float(converter.ratio))
        given = point.input_voltage * point.input_current - point.output_voltage * point.output_current
        assert point.loss == pytest.approx(given, rel=1e-9)


@pytest.mark.parametrize("resistance", [1e-6, 1.0, 1e3])
def test_two_capacitors_joined_through_any_resistance(resistance):
    """They lose C1 C2 (V1 - V2)^2 / (2 (C1 + C2)), textbook; in time t a share 1 - exp(-2 t / tau)."""
    one, two, v_one, v_two = 2.0, 0.5, 5.0, 1.5
    capacitors = (Capacitor("C1", 3, 0, one), Capacitor("C2", 4, 0, two))
    switches = (Switch("A", 3, 1, 1, 0.1), Switch("B", 4, 2, 1, 0.1), Switch("AB", 3, 4, 2, resistance))
    circuit = Circuit(("G", "I", "O", "x", "y"), (0, 1, 2), capacitors, switches)
    together = one * two / (one + two)
    for frequency in (1e-6 / resistance, 0.2):
        point = operate(SteadyState.of(circuit), frequency, v_one, output_voltage=v_two)
        lost = point.switch_rms[2] ** 2 * resistance / frequency
        # The gap at the start of phase 2: each capacitor has recovered its port voltage in phase 1 but for
        # a share `left` of what it lost in phase 2 (geometric series over the cycles).
        left = [np.exp(-0.5 / frequency / (0.1 * c)) for c in (one, two)]
        equalised = 1 - np.exp(-0.5 / frequency / (resistance * together))
        missing = sum(together / c * equalised * a / (1 - a) for c, a in zip((one, two), left, strict=True))
        gap = (v_one - v_two) / (1 + missing)
        share = 1 - np.exp(-1 / frequency / (resistance * together))
        assert lost == pytest.approx(together * gap**2 / 2 * share, rel=1e-9)


def test_loops_of_capacitors_need_no_resistance():
    """Hard-wired capacitors in loops: the limit of a vanishing series resistance, and no case of its own."""

    def circuit(series):
        capacitors = (
            Capacitor("C1", 3, 4, 1.0, series),
            Capacitor("C2", 3, 4, 0.5, series),  # parallel to C1 in both phases
            Capacitor("C3", 1, 0, 3.0, series),  # across the stiff input
            Capacitor("C4", 3, 5, 0.7, series),  # with C5 a chain from C1's plate to the stiff output
            Capacitor("C5", 5, 2, 0.9, series),
        )
        base = doubler()
        return Circuit(
            (*base.nodes, "x"), base.ports, capacitors, (*base.switches, Switch("S5", 5, 0, 1, 0.4))
        )

    frequency = np.logspace(-3, 1, 9)
    bare, damped = output_impedance(circuit(0.0), frequency), output_impedance(circuit(1e-7), frequency)
    np.testing.assert_allclose(bare.resistance, damped.resistance, rtol=1e-5)
    np.testing.assert_allclose(bare.ratio, damped.ratio, rtol=1e-6)
    one = operate(SteadyState.of(circuit(0.0)), 0.3, 1.0, output_voltage=1.8)
    two = operate(SteadyState.of(circuit(1e-7)), 0.3, 1.0, output_voltage=1.8)
    np.testing.assert_allclose(one.capacitor_mean, two.capacitor_mean, atol=1e-6)
    np.testing.assert_allclose(one.ripple, two.ripple, atol=1e-5)
    np.testing.assert_allclose(one.switch_rms, two.switch_rms, rtol=1e-5)


def test_parallel_capacitors_share_by_capacitance_when_slow_and_by_resistance_when_fast():
    """Two RC branches in parallel: charge divides by C when slow, current by 1/r when fast (textbook)."""
    capacitors = (Capacitor("C1", 3, 4, 1.0, 0.5), Capacitor("C2", 3, 4, 3.0, 2.0))
    base = doubler()
    circuit = Circuit(base.nodes, base.ports, capacitors, base.switches)
    steady = SteadyState.of(circuit)
    slow = operate(steady, 1e-5, 1.0, output_voltage=1.5)
    fast = operate(steady, 1e5, 1.0, output_voltage=1.5)
    assert slow.ripple[1] == pytest.approx(slow.ripple[0], rel=1e-9)  # equal swing: charge in proportion to C
    assert fast.capacitor_rms[0] / fast.capacitor_rms[1] == pytest.approx(2.0 / 0.5, rel=1e-6)
    found = output_impedance(steady, [1e-5, 1e5])
    assert found.slow[0] * 1e-5 * (1.0 + 3.0) == pytest.approx(1.0, rel=1e-12)
    assert found.fast[1] == pytest.approx(2 * (0.3 + 0.7) + 4 * (0.5 * 2.0) / 2.5, rel=1e-12)


def test_capacitor_without_net_charge_raises_the_impedance_between_the_limits():
    """Hung on the middle of one loop's resistance it carries nothing in either limit, and shunts between."""
    plain = Circuit(
        ("G", "I", "O", "p", "m", "x"),
        (0, 1, 2),
        (Capacitor("C1", 3, 4, 1.0),),
        (
            Switch("S1", 3, 5, 1, 0.5),
            Switch("S1b", 5, 1, 1, 0.5),
            Switch("S2", 4, 0, 1, 0.5),
            Switch("S3", 3, 2, 2, 0.5),
            Switch("S4", 4, 1, 2, 0.5),
        ),
    )
    hung = Circuit(plain.nodes, plain.ports, (*plain.capacitors, Capacitor("C2", 5, 0, 0.5)), plain.switches)
    frequency = np.array([1e-4, 0.3, 1e4])
    without, with_it = output_impedance(plain, frequency), output_impedance(hung, frequency)
    np.testing.assert_allclose(with_it.slow, without.slow, rtol=1e-12)
    np.testing.assert_allclose(with_it.fast, without.fast, rtol=1e-12)
    assert with_it.resistance[1] > 1.001 * without.resistance[1]
    np.testing.assert_allclose(with_it.resistance[[0, 2]], without.resistance[[0, 2]], rtol=1e-6)


@pytest.mark.parametrize(("node", "ratio"), [(3, 2.05 / 1.05), (4, 2.0)])
def test_plate_parasitic_shifts_the_no_load_ratio(node, ratio):
    """Slow doubler with k = 5 % on the top plate: C V + k C V = C (V_o - V) + k C V_o gives (2 + k)/(1 + k).

    On the bottom plate, which steps between G and I, the parasitic is charged by the input alone.
    """
    base = doubler()
    circuit = Circuit(
        base.nodes, base.ports, base.capacitors, base.switches, (PlateParasitic("C1", node, 0.05),)
    )
    found = output_impedance(circuit, [1e-6, 1.0])
    assert found.ratio[0] == pytest.approx(ratio, rel=1e-12)
    # Charging k C over V from the input, once per cycle, and discharging it: k C V^2 f, textbook.
    if node == 4:
        assert found.idle_conductance[0] == pytest.approx(0.05 * 1e-6, rel=1e-9)
    else:
        assert found.ratio[1] != pytest.approx(ratio, rel=1e-6)


def test_reciprocity_without_dead_time():
    """Two intervals without dead time: the ratio of voltages is that of charges."""
    rng = np.random.default_rng(5)
    circuit = plain_circuit.random_circuit(plain_circuit.random_converter(rng, 3), rng, plates=True)
    found = output_impedance(circuit, DECADES)
    np.testing.assert_allclose(found.back_ratio, found.ratio, rtol=1e-9, atol=1e-12)


def test_many_frequencies_at_once_equal_single_calls():
    rng = np.random.default_rng(6)
    circuit = plain_circuit.random_circuit(plain_circuit.random_converter(rng, 3), rng, plates=True)
    together = output_impedance(circuit, DECADES)
    for index in (0, 20, 35, 60):
        alone = output_impedance(circuit, DECADES[index])
        assert alone.resistance[0] == pytest.approx(together.resistance[index], rel=1e-13)


def test_dead_time_takes_from_both_phases():
    """A single loop at rest in the dead time: the closed form with shorter phases."""
    frequency, dead = 0.5, 0.3
    found = output_impedance(doubler(dead_time=dead), frequency)
    spans = [(0.5 / frequency - dead) / resistance for resistance in (0.3, 0.7)]
    closed = 0.5 / frequency * sum(1 / np.tanh(span / 2) for span in spans)
    assert found.resistance[0] == pytest.approx(closed, rel=1e-12)


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"duty": 1.0}, "duty 1.0"),
        ({"dead_time": -1.0}, "dead time -1.0"),
        ({"capacitance": float("nan")}, "capacitance of C1 is nan"),
        ({"first": 0.0}, "resistance of S1 is 0.0"),
    ],
)
def test_refused_values(change, message):
    with pytest.raises(CapmusterError, match=message):
        doubler(**change)


def test_refused_circuits_and_frequencies():
    base = doubler()
    idle = Circuit(
        (*base.nodes, "x"), base.ports, (*base.capacitors, Capacitor("C2", 3, 5, 1.0)), base.switches
    )
    with pytest.raises(IllPosedError, match="C2 never exchanges charge"):
        SteadyState.of(idle)
    short = Circuit(base.nodes, base.ports, base.capacitors, (*base.switches, Switch("S5", 1, 2, 1, 1.0)))
    with pytest.raises(CapmusterError, match="tied together"):
        SteadyState.of(short)
    cut = Circuit(base.nodes, base.ports, base.capacitors, base.switches[:3])
    with pytest.raises(IllPosedError, match="no charge reaches the output"):
        SteadyState.of(cut)
    with pytest.raises(CapmusterError, match="frequency"):
        output_impedance(base, [1.0, 0.0])
    with pytest.raises(CapmusterError, match="leaves a phase without time"):
        output_impedance(doubler(dead_time=1.0), 1.0)
    with pytest.raises(CapmusterError, match="one of the two"):
        operate(SteadyState.of(base), 1.0, 1.0)
