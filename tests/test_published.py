"""What has been published or is common practice: attainable ratios, metrics of the families, known networks.

Every closed form below is derived in a comment from the definition of its family, so that it does not rest on
the code. Marked are those that were also remembered.
"""

from __future__ import annotations

from fractions import Fraction
from math import gcd

import numpy as np
import pytest

from capmuster.enumerate.census import census
from capmuster.enumerate.converters import converters
from capmuster.enumerate.families import dickson, doubler_chain, fibonacci, ladder, series_parallel
from capmuster.enumerate.wiring import Converter
from capmuster.rank.scores.switchtable import score
from capmuster.rank.scores.utilisation import charge_flow

SIZES = (2, 3, 4, 5, 6, 8, 12, 20)
STAGES = (1, 2, 3, 4, 5, 6, 9)


def coprime_up_to(top: int) -> set[tuple[int, int]]:
    return {(p, q) for p in range(1, top + 1) for q in range(1, top + 1) if gcd(p, q) == 1}


# --- Attainable ratios -------------------------------------------------------------------------------------

# Makowski and Maksimovic, "Performance limits of switched-capacitor DC-DC converters", IEEE PESC 1995: with k
# capacitors, output capacitor included, P and Q of a ratio P/Q go up to the k-th Fibonacci number (F_2 = 2).
# Here n = k - 1 counts flying capacitors.
LARGEST = {1: 2, 2: 3, 3: 5, 4: 8}


@pytest.mark.parametrize(("n", "top"), LARGEST.items())
def test_attainable_ratios(n, top):
    table = converters(n)
    pairs = np.unique(table.port_charges[:, 1:], axis=0)
    ratios = {Fraction(-int(g_in), int(g_out)) for g_in, g_out in pairs}
    assert {ratio for ratio in ratios if ratio > 0} == {Fraction(p, q) for p, q in coprime_up_to(top)}
    # An inverting ratio spans the input and the output: P + Q steps between the outer ports.
    inverting = {-Fraction(p, q) for p, q in coprime_up_to(top) if p + q <= top}
    assert {ratio for ratio in ratios if ratio < 0} == inverting


@pytest.mark.parametrize(("n", "top"), LARGEST.items())
def test_at_most_n_capacitors_reach_them_without_an_artefact(n, top):
    """No idle or equipotential switch is needed, but for M = 1: there input and output are tied anyway."""
    clean = set()
    for size in range(1, n + 1):
        table = converters(size)
        rows = table.port_charges[score(table).clean][:, 1:]
        clean |= {Fraction(-int(g_in), int(g_out)) for g_in, g_out in np.unique(rows, axis=0)}
    wanted = {Fraction(p, q) for p, q in coprime_up_to(top)}
    wanted |= {-Fraction(p, q) for p, q in coprime_up_to(top) if p + q <= top}
    assert wanted - clean <= {Fraction(1)}


@pytest.mark.parametrize(("n", "top"), LARGEST.items())
def test_triples_of_the_census(n, top):
    table = census(n)
    triples = {tuple(triple) for triple in table.triples[~table.unity].tolist()}
    assert triples == {(p, q, p + q) for p, q in coprime_up_to(top) if p <= q and p + q <= top}


@pytest.mark.parametrize("n", LARGEST)
def test_most_switches(n):
    # PESC 1995: at most 3 k - 2 switches with k capacitors, and some converters need them.
    assert score(converters(n)).switches.max() == 3 * (n + 1) - 2


# --- Utilisation -------------------------------------------------------------------------------------------

# Seeman and Sanders, "Analysis and optimization of switched-capacitor DC-DC converters", IEEE Trans. Power
# Electronics, 2008: series-parallel makes the best use of capacitors, ladder and Dickson of switches.


@pytest.mark.parametrize("n", SIZES)
def test_who_makes_the_best_use(n):
    assert charge_flow(series_parallel(n)).capacitor_utilisation == 1
    for tap in {1, n // 2, n - 1}:
        assert charge_flow(ladder(n, tap)).switch_utilisation == 1
    assert charge_flow(dickson(n)).switch_utilisation == 1


@pytest.mark.parametrize("n", LARGEST)
def test_utilisations_have_one_as_a_bound_that_is_reached(n):
    table = converters(n)
    scores = score(table)
    lifting = scores.lifted > 0
    assert (scores.lifted[lifting] <= scores.capacitor_sum[lifting]).all()
    assert (4 * scores.lifted[lifting] <= scores.switch_sum[lifting]).all()
    assert (scores.lifted[lifting] == scores.capacitor_sum[lifting]).any()
    assert (4 * scores.lifted[lifting] == scores.switch_sum[lifting]).any()
    assert (table.ratios[~lifting] == 1).all()


# --- Performance metrics -----------------------------------------------------------------------------------

# The same paper: with the energy that capacitors are rated for, and the volt-amperes that switches are rated
# for, optimally allotted, V_out^2 / (R_SSL f W) = 2 (M / sum a_c v)^2 and V_out^2 / (R_FSL P) =
# (M / sum a_r v)^2 / 2 (50 % duty, v per volt of input). So each closed form is two sums.


def metrics(M, capacitor_sum, switch_sum):
    return 2 * Fraction(M, capacitor_sum) ** 2, Fraction(M, switch_sum) ** 2 / 2


def found(converter):
    flow = charge_flow(converter)
    return flow.slow_limit_metric, flow.fast_limit_metric


@pytest.mark.parametrize("n", SIZES)
def test_series_parallel_metrics(n):
    # Capacitors: n - 1 of 1 V, and each carries the output charge once. Switches, all with the output
    # charge. Side by side: in the stack capacitor k from below has its bottom on k and its top on k + 1, so
    # the switch to ground blocks k and the one to the input (at 1) k as well. In the stack: n - 1 links
    # block 1 (a top at 1 below a bottom at 0, the input below the first), the last n - 1.
    capacitors = n - 1
    switches = n * (n - 1) + (n - 1) + (n - 1)
    assert found(series_parallel(n)) == metrics(n, capacitors, switches)
    assert found(series_parallel(n)) == (
        Fraction(2 * n**2, (n - 1) ** 2),
        Fraction(n**2, 2 * (n - 1) ** 2 * (n + 2) ** 2),
    )


@pytest.mark.parametrize("n", SIZES)
def test_ladder_metrics(n):
    # Step up by n: input on rail 1, output on rail n, one volt between rails. Flying capacitor k lifts q_k
    # per cycle: rail k gives 2 q_k, rails k - 1 and k + 1 get q_k. Rails 2 to n - 1 are free, so q_(k-1) +
    # q_(k+1) = 2 q_k, with q_(n-1) = 1 and q_n = 0: q_k = n - k. In one phase a free rail loses q_k -
    # q_(k+1) = 1, which the rail capacitors bring from the input: n - 2 through the lowest, 1 through the
    # last. Switches: the flying capacitors are one string whose n joints move between two rails 1 V apart,
    # two switches for each joint. The lowest joint carries q_1 = n - 1, every other one q_k - q_(k+1) = 1.
    flying = n * (n - 1) // 2
    rails = (n - 1) * (n - 2) // 2
    switches = 2 * (n - 1) + 2 * (n - 1)
    converter = ladder(n).swapped()
    assert converter.ratio == n
    assert found(converter) == metrics(n, flying + rails, switches)
    assert found(converter)[0] == Fraction(2 * n**2, (n - 1) ** 4)
    # From memory: the published fast limit of ladder and Dickson, n^2 / (32 (n - 1)^2).
    assert found(converter)[1] == Fraction(n**2, 32 * (n - 1) ** 2)


@pytest.mark.parametrize("n", SIZES)
def test_dickson_metrics(n):
    # Capacitor k holds k volts and carries the output charge once: 1 + ... + (n - 1).
    # Switches: n in the row, 1 V at both ends and 2 V between (tops swing by 1 V in opposite directions), and
    # each bottom switches between ground and input, 1 V, once per phase; all with the output charge.
    capacitors = n * (n - 1) // 2
    switches = (2 + 2 * (n - 2)) + 2 * (n - 1)
    assert found(dickson(n)) == metrics(n, capacitors, switches)
    assert found(dickson(n)) == (Fraction(8, (n - 1) ** 2), Fraction(n**2, 32 * (n - 1) ** 2))


def fibonacci_number(k: int) -> int:
    """1, 1, 2, 3, 5, ... for k = 1, 2, 3, ... ."""
    low, high = 0, 1
    for _ in range(k):
        low, high = high, low + high
    return low


@pytest.mark.parametrize("stages", STAGES)
def test_fibonacci_metrics(stages):
    # With f = 1, 1, 2, 3, 5, ... capacitor k of N holds v_k = f(k+1). Its top charges k + 1 and lifts k + 2,
    # so a_k = a_(k+1) + a_(k+2) with a_N = a_(N-1) = 1: a_k = f(N+1-k). S = sum a_k v_k is a convolution; by
    # the identity sum_{i=0}^{m} f(i) f(m-i) = (m L(m) - f(m)) / 5 (L: Lucas numbers) with m = N + 2, less the
    # term of i = 1.
    N, f = stages, fibonacci_number
    m = N + 2
    lucas = f(m - 1) + f(m + 1)
    S = Fraction(m * lucas - f(m), 5) - f(N + 1)
    # Switches: let top k be at p_k = f(k+2) while lifted, and p_0 = 1 the input; while it charges it is at
    # p_(k-1). At the node of top k, k gives a_k, k + 1 takes a_(k+1) and is at p_(k+1) in the other phase,
    # and the bottom of k + 2 takes a_(k+2) and is at 0: a_(k+1) (p_(k+1) - p_(k-1)) + a_(k+2) p_(k-1). At
    # the output p_N - p_(N-1). At the input a_1 (p_1 - p_0) + a_2 p_0 in one phase, a_1 p_0 in the other. At
    # ground capacitor k, lifted by p_(k-2), or by the input: a_k p_(k-2). It adds up to 2 S + 2 f(N).
    p = [1, *(f(k + 2) for k in range(1, N + 2))]
    a = [0, *(f(N + 1 - k) for k in range(1, N + 1)), 0, 0]
    switches = sum(a[k + 1] * (p[k + 1] - p[k - 1]) + a[k + 2] * p[k - 1] for k in range(1, N))
    switches += p[N] - p[N - 1] + a[1] * (p[1] - p[0]) + a[2] * p[0] + a[1] * p[0]
    switches += sum(a[k] * p[max(k - 2, 0)] for k in range(1, N + 1))
    assert switches == 2 * S + 2 * f(N)
    assert found(fibonacci(N)) == metrics(f(N + 2), S, switches)


@pytest.mark.parametrize("stages", STAGES)
def test_doubler_chain_metrics(stages):
    # Of S stages, stage k doubles 2^(k-1) and carries 2^(S-k): S 2^(S-1) in all. The rail capacitor behind
    # it, at 2^k, brings what the next stage draws in the other phase, half of that: 2^(S-1) for each of S -
    # 1. Switches: four per stage, each with 2^(S-k) at 2^(k-1): 4 S 2^(S-1).
    S = stages
    capacitors = (2 * S - 1) * 2 ** (S - 1)
    drawn = 4 * S * 2 ** (S - 1)
    alternate = doubler_chain(S, alternate=True)
    assert found(alternate) == metrics(2**S, capacitors, drawn)
    assert found(alternate) == (Fraction(8, (2 * S - 1) ** 2), Fraction(1, 8 * S**2))
    # With all stages in phase, stage k discharges into the rail that lifts stage k + 1. Its top is at
    # 2^(k-1) in the other phase, that bottom at 0 and the rail at 2^k. Drawn, all of 2^(S-k) goes up to the
    # rail and half of it down again; in the chain that half goes from top to bottom directly: 2^(S-1)
    # instead of 2^S at each of S - 1 joints, with as many switches.
    in_phase = doubler_chain(S)
    assert found(in_phase) == metrics(2**S, capacitors, drawn - (S - 1) * 2 ** (S - 1))
    assert found(in_phase)[1] == Fraction(2, (3 * S + 1) ** 2)


# --- Common practice ---------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("code", "ratio", "voltages"),
    [
        ("I-G/G-O", Fraction(-1), [1]),  # inverter
        ("I-G/O-I", Fraction(2), [1]),  # doubler
        ("I-O/O-G", Fraction(1, 2), [Fraction(1, 2)]),  # halver
        # Quarter: three in series from input to output, then side by side below the output.
        ("I-a/O-G a-b/O-G b-O/O-G", Fraction(1, 4), [Fraction(1, 4)] * 3),
        # Three quarters: side by side from input to output, then in series below the output.
        ("I-O/O-a I-O/a-b I-O/b-G", Fraction(3, 4), [Fraction(1, 4)] * 3),
    ],
)
def test_known_networks(code, ratio, voltages):
    converter = Converter.parse(code)
    assert converter.ratio == ratio
    assert sorted(converter.balance.voltages) == voltages
    flow = charge_flow(converter)
    assert flow.capacitor_utilisation == 1
    assert flow.network.clean
    # Each of them is in the census of its size.
    assert converter.id in converters(converter.n, ratio).ids()


def test_one_capacitor_makes_four_converters():
    table = converters(1)
    assert sorted(table.ratio(row) for row in range(len(table))) == [-1, Fraction(1, 2), 1, 2]


def test_inverter_doubler_and_halver_are_one_cell():
    cells = {Converter.parse(code).cell for code in ("I-G/G-O", "I-G/O-I", "I-O/O-G")}
    assert len(cells) == 1
    assert cells.pop().triple == (1, 1, 2)
