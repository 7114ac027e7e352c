"""Exact charge balance against numeric linear algebra and a plain solver in fractions; reasons of refusal."""

from __future__ import annotations

from fractions import Fraction
from math import gcd

import networkx as nx
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from plain_converter import brute_balance
from scipy.linalg import null_space
from strategies import census_converters, family_converters, wandered_converters

from capmuster.enumerate.balance import _null_space, analyse
from capmuster.enumerate.errors import IllPosedError
from capmuster.enumerate.families import dickson, doubler_chain, fibonacci, ladder, series_parallel
from capmuster.enumerate.wiring import N_PORTS, Converter, format_words, parse_words, vertex_name

CONVERTERS = census_converters() | family_converters(most=20) | wandered_converters()


def incidence(words, phase):
    """Vertices by capacitors, +1 where the plus plate is: networkx names an edge's head with +1."""
    graph = nx.MultiDiGraph()
    size = max(N_PORTS, 1 + max(max(word[2 * phase : 2 * phase + 2]) for word in words))
    graph.add_nodes_from(range(size))
    edges = [
        (word[2 * phase + 1], word[2 * phase], graph.add_edge(word[2 * phase + 1], word[2 * phase]))
        for word in words
    ]
    return nx.incidence_matrix(graph, range(size), edges, oriented=True).toarray()


@given(CONVERTERS)
@settings(max_examples=60)
def test_charges_against_the_null_space_of_scipy(converter):
    first, second = (incidence(converter.words, phase) for phase in (0, 1))
    space = null_space(np.vstack([first[N_PORTS:], second[N_PORTS:], np.zeros((1, converter.n))]))
    assert space.shape == (converter.n, 1)
    q = np.array(converter.balance.charges, dtype=float)
    cosine = abs(space[:, 0] @ q) / np.linalg.norm(q)
    assert cosine == pytest.approx(1, abs=1e-9)
    # Port charges are what the ports' rows of the incidence make of them.
    g = first[:N_PORTS] @ q - second[:N_PORTS] @ q
    assert np.allclose(g, converter.balance.port_charges)
    assert gcd(*converter.balance.charges) == 1
    assert g[1] > 0  # the input delivers


@given(CONVERTERS)
@settings(max_examples=60)
def test_potentials_against_least_squares_of_numpy(converter):
    # Unknown: all potentials of both phases. Known: ports tied across phases, ground 0, input 1, and the
    # voltage of every capacitor the same in both phases.
    first, second = (incidence(converter.words, phase) for phase in (0, 1))
    sizes = len(first), len(second)
    rows = [np.r_[first[:, i], -second[:, i]] for i in range(converter.n)]
    values = [0.0] * converter.n
    unit = np.eye(sum(sizes))
    for port in range(N_PORTS):
        rows.append(unit[port] - unit[sizes[0] + port])
        values.append(0.0)
    rows += [unit[0], unit[1]]
    values += [0.0, 1.0]
    matrix = np.array(rows)
    assert np.linalg.matrix_rank(matrix) == sum(sizes)
    found = np.linalg.lstsq(matrix, np.array(values), rcond=None)[0]
    assert np.abs(matrix @ found - values).max() < 1e-8
    balance = converter.balance
    expected = np.array([float(u) for phase in balance.potentials for u in phase])
    assert np.allclose(found, expected, rtol=1e-6, atol=1e-6 * np.abs(expected).max())
    assert float(converter.ratio) == pytest.approx(found[2], rel=1e-6)
    assert np.allclose(first.T @ expected[: sizes[0]], [float(v) for v in balance.voltages])


@given(CONVERTERS)
@settings(max_examples=60)
def test_everything_exactly_as_the_plain_solver(converter):
    plain = brute_balance(converter.code)
    balance = converter.balance
    sign = 1 if plain.charges[0] * balance.charges[0] > 0 else -1
    assert tuple(sign * q for q in plain.charges) == balance.charges
    assert tuple(sign * g for g in plain.port_charges) == balance.port_charges
    assert plain.voltages == balance.voltages
    for theirs, ours in zip(plain.potentials, balance.potentials, strict=True):
        assert theirs == {vertex_name(v): u for v, u in enumerate(ours)}


@given(census_converters() | family_converters())
@settings(max_examples=60)
def test_energy_and_charge_are_kept_exactly(converter):
    balance = converter.balance
    assert sum(balance.port_charges) == 0
    g_in, g_out = balance.port_charges[1:]
    # Energy in plus energy out, both counted into the converter.
    assert g_in * 1 + g_out * converter.ratio == 0
    # Capacitors take in phase 1 what they give back in phase 2, at one voltage.
    assert all(v > 0 for v in balance.voltages)
    for word, v in zip(converter.words, balance.voltages, strict=True):
        for phase in (0, 1):
            plus, minus = word[2 * phase : 2 * phase + 2]
            assert balance.potentials[phase][plus] - balance.potentials[phase][minus] == v


@given(
    st.integers(1, 7).flatmap(
        lambda columns: st.lists(
            st.lists(st.integers(-4, 4), min_size=columns, max_size=columns), min_size=1, max_size=7
        )
    )
)
@settings(max_examples=200)
def test_integer_elimination_against_scipy(matrix):
    columns = len(matrix[0])
    ours = np.array(_null_space(matrix, columns), dtype=float).reshape(-1, columns).T
    theirs = null_space(np.array(matrix, dtype=float), rcond=1e-9)
    assert ours.shape == theirs.shape
    assert np.all(np.array(matrix) @ ours == 0)
    if ours.size:  # the same space: the projections on it agree
        assert np.allclose(ours @ np.linalg.pinv(ours), theirs @ theirs.T, atol=1e-8)
        assert all(gcd(*(int(x) for x in vector)) == 1 for vector in ours.T)


def test_elimination_without_rows_leaves_everything_free():
    assert _null_space([], 2) == [[1, 0], [0, 1]]


def test_no_digit_is_lost_at_any_size():
    # Ninety stages: the number after 89 others in 2, 3, 5, 8, ...; floats end at 2^53.
    before, number = 1, 2
    for _ in range(89):
        before, number = number, before + number
    assert number > 2**53
    assert fibonacci(90).ratio == number
    assert fibonacci(90).swapped().ratio == Fraction(1, number)
    assert max(fibonacci(90).balance.voltages) == before


def test_hand_made_balance_of_a_third():
    # Series-parallel 3:1 by hand: two capacitors of V_in/3 in series from I to O, then side by side from O to
    # ground. One charge from the input passes both on its way to the output; each then gives it once more.
    balance = Converter.parse("I-a/O-G a-O/O-G").balance
    assert balance.ratio == Fraction(1, 3)
    assert balance.voltages == (Fraction(1, 3), Fraction(1, 3))
    assert tuple(map(abs, balance.charges)) == (1, 1)
    assert balance.port_charges == (2, 1, -3)
    assert not balance.degenerate


def test_degenerate():
    # Turned over between two ports: it can only hold nothing, and both ports have one potential.
    converter = Converter.parse("I-O/O-I")
    assert converter.ratio == 1
    assert converter.balance.degenerate
    assert converter.balance.voltages == (0,)


def test_unity():
    # Common practice: a capacitor charged by the input and discharged into the output carries charge across.
    balance = Converter.parse("I-G/O-G").balance
    assert (balance.ratio, balance.port_charges) == (1, (0, 1, -1))
    assert not balance.degenerate


@pytest.mark.parametrize(
    ("code", "reason"),
    [
        ("I-a/O-G", "C1 is idle: charge balance lets no charge through"),
        ("I-G/O-I O-a/O-G", "C2 is idle: charge balance lets no charge through"),
        ("I-G/O-I G-a/O-I a-b/I-G", "C2 and C3 are idle: charge balance lets no charge through"),
        ("I-G/O-I I-G/O-I", "C1 and C2 are redundant: charge balance leaves their charges open"),
        ("I-G/O-I I-G/I-G", "C2 is redundant: charge balance leaves its charge open"),
        ("I-a/O-G a-G/O-G a-G/O-G", "C2 and C3 are redundant: charge balance leaves their charges open"),
        (
            "I-G/O-I I-O/O-G I-G/O-I",
            "C1 and C3 are redundant: charge balance leaves their charges open",
        ),
        ("I-G/O-I I-O/O-G", "the voltages of C1 and C2 contradict: they ask for different ratios"),
        (
            "I-a/O-c a-G/c-O O-G/I-O",
            "the voltages of C1, C2 and C3 contradict: they ask for different ratios",
        ),
        (
            "I-a/O-b a-G/b-G",
            "the voltages of C1 and C2 are open: nothing divides the voltage that they share",
        ),
        (
            "I-a/O-b a-c/b-G c-G/O-G",
            "the voltages of C1 and C2 are open: nothing divides the voltage that they share",
        ),
        ("i-g/o-i", "C1 reaches no port in phase 1"),
        ("I-G/O-I a-b/O-G b-a/O-G", "C2 and C3 reach no port in phase 1"),
        ("I-G/O-I I-G/a-b", "C2 reaches no port in phase 2"),
        ("I-G/I-G", "no port delivers charge over a whole cycle"),
        ("G-O/O-G", "the input I delivers no charge over a whole cycle"),
        ("I-G/G-I", "the output O takes no charge over a whole cycle"),
    ],
)
def test_reasons_of_refusal(code, reason):
    with pytest.raises(IllPosedError) as error:
        analyse(parse_words(code))
    assert error.value.problem == f"wiring: {reason}"
    assert error.value.accepted


@pytest.mark.parametrize(("column", "named"), [("x1-G/x1-G", "C1"), ("I-x5/I-x5", "C1")])
def test_a_rail_capacitor_too_many(column, named):
    # Ladder of 6 steps, its output on step 3: each column of three has two rail capacitors, and a third one
    # closes a loop of all three between two stiff ports.
    rails = ["G", "x1", "x2", "O", "x4", "x5", "I"]
    words = [f"{rails[k + 1]}-{rails[k]}/{rails[k + 2]}-{rails[k + 1]}" for k in range(5)]
    words += [f"{rails[k + 1]}-{rails[k]}/{rails[k + 1]}-{rails[k]}" for k in (1, 2, 3, 4)]
    assert Converter.parse(" ".join(words)) == ladder(6, 3)
    own = (7, 8) if column.startswith("x1") else (9, 10)
    with pytest.raises(IllPosedError) as error:
        Converter.parse(" ".join([column, *words]))
    assert error.value.problem == (
        f"wiring: {named}, C{own[0]} and C{own[1]} are redundant: charge balance leaves their charges open"
    )


@pytest.mark.parametrize(
    "converter", [series_parallel(6), dickson(6), fibonacci(6), doubler_chain(3), ladder(5, 2)]
)
def test_a_twin_of_any_capacitor_is_redundant(converter):
    for i, word in enumerate(converter.words):
        with pytest.raises(IllPosedError) as error:
            Converter.of([*converter.words, word])
        named = f"C{i + 1} and C{converter.n + 1}"
        assert (
            error.value.problem == f"wiring: {named} are redundant: charge balance leaves their charges open"
        )


@st.composite
def placements(draw):
    """Draw converters in which up to three plates were put elsewhere: some are well posed, most are not."""
    words = [list(word) for word in draw(census_converters()).words]
    for _ in range(draw(st.integers(0, 3))):
        word = draw(st.sampled_from(words))
        column = draw(st.integers(0, 3))
        other = word[column ^ 1]
        word[column] = draw(st.sampled_from([vertex for vertex in range(6) if vertex != other]))
    return parse_words(format_words(words))


@given(placements())
@settings(max_examples=500)
def test_accepted_exactly_when_well_posed(words):
    """The definition again, with ranks of numpy and components of networkx."""
    n = len(words)
    first, second = (incidence(words, phase) for phase in (0, 1))
    grounded = all(
        min(group) < N_PORTS
        for matrix in (first, second)
        for group in nx.connected_components(nx.Graph(zip(*np.nonzero(matrix @ matrix.T), strict=True)))
    )
    inner = np.vstack([first[N_PORTS:], second[N_PORTS:], np.zeros((1, n))])
    space = null_space(inner, rcond=1e-9)
    well_posed = grounded and space.shape[1] == 1 and len(inner) - 1 == n - 1
    if well_posed:
        q = space[:, 0] / np.abs(space).max()
        g = (first[:N_PORTS] - second[:N_PORTS]) @ q
        well_posed = bool(np.abs(q).min() > 1e-9 and np.abs(g[1:]).min() > 1e-9)
    try:
        Converter(words)
    except IllPosedError:
        assert not well_posed
    else:
        assert well_posed
