"""How fast the exact impedance is, as ratios within one run.

Run with ``pytest -m benchmark tests/benchmarks``.
"""

from time import perf_counter

import numpy as np
import pytest

from capmuster.enumerate.families import series_parallel
from capmuster.rank.exact.circuit import circuit_of
from capmuster.rank.exact.deck import bench_for, write_deck
from capmuster.rank.exact.impedance import corner_frequency, output_impedance
from capmuster.rank.exact.simulate import simulate
from capmuster.rank.exact.steadystate import SteadyState

pytestmark = pytest.mark.benchmark
CONVERTER = series_parallel(4)
CIRCUIT = circuit_of(CONVERTER, [1e-6, 1.5e-6, 2.2e-6], 0.1, series_resistances=0.01)
CURVE = corner_frequency(CIRCUIT) * np.logspace(-1, 0.3, 200)


def best_of(repeats, work):
    """Least time of several runs [s]."""
    times = []
    for _ in range(repeats):
        start = perf_counter()
        work()
        times.append(perf_counter() - start)
    return min(times)


@pytest.mark.usefixtures("ngspice")
def test_curve_is_a_thousand_times_faster_than_the_simulator():
    """200 points of R_out of a three-capacitor converter, exact and simulated, and equal at every point."""
    exact = best_of(20, lambda: output_impedance(CIRCUIT, CURVE))
    steady = SteadyState.of(CIRCUIT)
    decks = [write_deck(CONVERTER, CIRCUIT, bench_for(steady, float(f), 1.0, 3.6)) for f in CURVE]
    start = perf_counter()
    simulated = [simulate(deck).output_resistance for deck in decks]
    stepped = perf_counter() - start
    print(  # noqa: T201 - the measurement itself
        f"\n200 points: exact {exact * 1e3:.2f} ms, ngspice {stepped:.1f} s: {stepped / exact:,.0f} times"
    )
    np.testing.assert_allclose(simulated, output_impedance(CIRCUIT, CURVE).resistance, rtol=1e-3)
    assert stepped > 1000 * exact


def test_a_batch_costs_far_less_than_as_many_single_calls():
    """One point from nothing, and 200 points together against 200 single calls."""
    single = best_of(200, lambda: output_impedance(CIRCUIT, CURVE[0]))
    steady = SteadyState.of(CIRCUIT)
    batch = best_of(50, lambda: output_impedance(steady, CURVE))
    singles = best_of(5, lambda: [output_impedance(CIRCUIT, f) for f in CURVE])
    print(  # noqa: T201 - the measurement itself
        f"\n1 point {single * 1e6:.0f} us; 200 together {batch * 1e6:.0f} us, alone {singles * 1e3:.0f} ms"
    )
    assert batch < singles / 100
