"""The plain enumerator and the plain converter, checked by themselves against the outside."""

from __future__ import annotations

import random
from collections import Counter
from fractions import Fraction
from itertools import permutations, product
from math import factorial, gcd

import networkx as nx
import numpy as np
import pytest
from plain_converter import (
    ROLES,
    GraphIndex,
    all_trees,
    brute_balance,
    brute_clean,
    brute_utilisation,
    least_tree_cost,
    null_space,
    read_code,
    same_converter,
    unmatched,
    wiring_graph,
)
from plain_enumerator import NODES, plain_census
from scipy.stats import wasserstein_distance

UP_TO_THREE = [1, 2, pytest.param(3, marks=pytest.mark.long)]
FIBONACCI = {1: 2, 2: 3, 3: 5}  # largest numerator or denominator with n flying capacitors, PESC 1995


def test_null_space_against_numpy() -> None:
    rng = np.random.default_rng(1)
    for _ in range(100):
        rows = rng.integers(-2, 3, size=(rng.integers(1, 6), 5))
        basis = np.array(null_space(rows.tolist(), 5), dtype=float).reshape(-1, 5)
        assert len(basis) == 5 - np.linalg.matrix_rank(rows)
        assert np.abs(basis @ rows.T).max(initial=0) < 1e-9
        assert np.linalg.matrix_rank(basis) == len(basis) or len(basis) == 0


@pytest.mark.parametrize("size", [1, 2, 3, 4, 5])
def test_all_trees_against_networkx(size: int) -> None:
    ours = {frozenset(map(frozenset, edges)) for edges in all_trees(size)}
    theirs = {
        frozenset(map(frozenset, tree.edges)) for tree in nx.SpanningTreeIterator(nx.complete_graph(size))
    }
    assert ours == theirs
    assert len(list(all_trees(size))) == len(theirs)


def test_best_tree_is_the_optimal_transport_on_a_line() -> None:
    # scipy's Wasserstein distance between what is given and what is taken, both on one line of potentials
    rng = random.Random(2)  # noqa: S311 - a reproducible draw, no secret
    for _ in range(30):
        loads = [rng.choice([-3, -2, -1, 1, 2, 3]) for _ in range(rng.randint(1, 4))]
        loads.append(-sum(loads))
        places = [rng.randint(-3, 3) for _ in loads]
        given = [max(load, 0) for load in loads]
        if not any(given):
            continue
        taken = [max(-load, 0) for load in loads]
        distance = wasserstein_distance(places, places, given, taken) * sum(given)
        cost = least_tree_cost([(Fraction(a), Fraction(b)) for a, b in zip(loads, places, strict=True)])
        assert float(cost) == pytest.approx(distance, abs=1e-9)


def count_labelled_with_numpy(n: int) -> int:
    """Every ordered pair of named placements, charges by minors; internal nodes forgotten by division."""
    total = Fraction(0)
    for m1 in range(n):
        batches = []
        for m in (m1, n - 1 - m1):
            places = list(permutations(range(3 + m), 2))
            table = np.zeros((len(places), 3 + m), dtype=np.int64)
            for k, (plus, minus) in enumerate(places):
                table[k, plus], table[k, minus] = 1, -1
            chosen = np.array(list(product(range(len(places)), repeat=n)))
            batches.append(table[chosen].transpose(0, 2, 1))  # (placements, vertices, n)
        for first in batches[0]:
            second = batches[1]
            upper = np.broadcast_to(first[3:], (len(second), m1, n))
            rows = np.concatenate([upper, second[:, 3:]], axis=1).astype(float)
            q = np.stack(
                [(-1) ** i * np.rint(np.linalg.det(np.delete(rows, i, axis=2))) for i in range(n)], axis=1
            )
            g = q @ first[:3].T - np.einsum("bi,bti->bt", q, second[:, :3])
            good = (q != 0).all(axis=1) & (g != 0).all(axis=1)
            total += Fraction(int(good.sum()), factorial(m1) * factorial(n - 1 - m1))
    assert total.denominator == 1
    return int(total)


@pytest.mark.parametrize(
    ("n", "labelled"), [(1, 12), (2, 864), pytest.param(3, 220608, marks=pytest.mark.long)]
)
def test_labelled_cells(n: int, labelled: int) -> None:
    # Three ways: numpy over all placements, tallied during generation, and orbit sizes of the cells found.
    cells, tallied, unity = plain_census(n)
    assert tallied == labelled == count_labelled_with_numpy(n)
    assert sum(cell.labelled for cell in cells if not cell.unity) == labelled
    assert sum(cell.labelled for cell in cells if cell.unity) == unity


@pytest.mark.parametrize("n", UP_TO_THREE)
def test_triples_and_ratios_are_the_published_ones(n: int) -> None:
    # Makowski and Maksimovic, "Performance limits of switched-capacitor DC-DC converters", IEEE PESC 1995:
    # P/Q with P and Q up to a Fibonacci number; at most 3k - 2 switches with k = n + 1 capacitors.
    cells = plain_census(n)[0]
    top = FIBONACCI[n]
    coprime = {(p, q) for p in range(1, top + 1) for q in range(1, top + 1) if gcd(p, q) == 1}
    ratios = {Fraction(c.ratio) for cell in cells for c in cell.converters}
    assert {r for r in ratios if r > 0} == {Fraction(p, q) for p, q in coprime}
    triples = {cell.triple for cell in cells if not cell.unity}
    assert triples == {(p, q, p + q) for p, q in coprime if p <= q and p + q <= top}
    assert max(cell.switches for cell in cells) == 3 * (n + 1) - 2


@pytest.mark.parametrize("n", UP_TO_THREE)
def test_utilisations_have_one_as_a_bound_that_is_reached(n: int) -> None:
    scores = [
        (cell.capacitor_utilisation, cell.switch_utilisation)
        for cell in plain_census(n)[0]
        if cell.capacitor_utilisation is not None and cell.switch_utilisation is not None
    ]
    assert min(min(pair) for pair in scores) > 0
    assert max(pair[0] for pair in scores) == 1
    assert max(pair[1] for pair in scores) == 1


def test_one_capacitor_by_hand() -> None:
    # Common practice: one flying capacitor makes the inverter, the halver and the doubler, and at ratio 1 it
    # carries charge across. The third cell turns the capacitor between two ports: it has no voltage.
    cells = plain_census(1)[0]
    assert Counter((c.unity, c.degenerate, c.clean) for c in cells) == Counter(
        [(False, False, True), (True, False, False), (True, True, False)]
    )
    wirings = {c.ratio: c.wiring for cell in cells for c in cell.converters}
    expected = {
        Fraction(-1): "I-G/G-O",
        Fraction(1, 2): "I-O/O-G",
        Fraction(1): "I-G/O-G",
        Fraction(2): "I-G/O-I",
    }
    assert wirings.keys() == expected.keys()
    assert all(same_converter(wirings[ratio], code) for ratio, code in expected.items())


@pytest.mark.parametrize("n", [1, 2])
def test_every_converter_is_written_and_read_back(n: int) -> None:
    index = GraphIndex()
    total = 0
    for cell in plain_census(n)[0]:
        for converter in cell.converters:
            solved = brute_balance(converter.wiring)
            assert solved.potentials[0]["O"] == solved.potentials[1]["O"] == converter.ratio
            assert min(solved.voltages) > 0
            assert brute_clean(converter.wiring) == cell.clean
            if not cell.unity:
                scores = (cell.capacitor_utilisation, cell.switch_utilisation)
                assert brute_utilisation(converter.wiring) == scores
            index.find(wiring_graph(*read_code(converter.wiring), ROLES), add=True)
            total += 1
    assert index.size == total


@pytest.mark.parametrize(
    ("code", "ratio", "utilisations"),
    [
        ("I-G/O-I", 2, (1, 1)),
        ("I-G/a-I I-G/b-a I-G/O-b", 4, (1, None)),  # series-parallel
        ("I-G/a-I O-I/a-G", 3, (None, 1)),  # Dickson
    ],
)
def test_published_networks(code: str, ratio: int, utilisations: tuple[int | None, int | None]) -> None:
    # Seeman and Sanders, "Analysis and optimization of switched-capacitor DC-DC converters", IEEE Trans.
    # Power Electronics, 2008: series-parallel makes the best use of capacitors, Dickson of switches.
    assert brute_balance(code).potentials[0]["O"] == ratio
    for found, published in zip(brute_utilisation(code), utilisations, strict=True):
        assert found == published if published else found < 1


@pytest.mark.parametrize(
    "code",
    [
        "I-G/O-I I-G/O-I",  # twins: their shares are not fixed
        "I-G/O-I O-a/O-G",  # node a is a dead end: an idle capacitor
        "I-G/O-I a-b/O-G b-a/O-G",  # a loop without a port
    ],
)
def test_what_is_no_irreducible_converter_is_refused(code: str) -> None:
    with pytest.raises(ValueError, match="no irreducible converter"):
        brute_utilisation(code)


def shuffled(code: str, rng: random.Random) -> str:
    """Rename a converter: capacitor order, polarity, node names, phase order."""
    phases = []
    for phase in read_code(code):
        names = dict(zip(NODES, rng.sample(NODES, len(NODES)), strict=True))
        phases.append([[names.get(v, v) for v in place] for place in phase])
    rng.shuffle(phases)
    pairs = list(zip(*phases, strict=True))
    rng.shuffle(pairs)
    words = []
    for place1, place2 in pairs:
        step = rng.choice([1, -1])
        words.append("-".join(place1[::step]) + "/" + "-".join(place2[::step]))
    return " ".join(words)


def test_renaming_changes_nothing_and_rewiring_does() -> None:
    rng = random.Random(3)  # noqa: S311 - a reproducible draw, no secret
    codes = [c.wiring for cell in plain_census(2)[0] for c in cell.converters]
    renamed = [shuffled(code, rng) for code in codes]
    rng.shuffle(renamed)
    assert unmatched(codes, renamed) == ([], [])
    assert unmatched(codes, renamed[1:])[0] != []
    assert unmatched(codes[1:], renamed)[1] != []
    # By hand: the same capacitors stacked on the input, O = I + v1 + v2 = 3 - O, in either order.
    stacks = ("I-G/a-I I-O/O-a", "I-G/O-a I-O/a-I")
    assert [brute_balance(code).potentials[1]["O"] for code in stacks] == [Fraction(3, 2)] * 2
    assert not same_converter(*stacks)
    assert not same_converter("I-G/O-I", "I-O/O-G")
