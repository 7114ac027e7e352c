"""The canonical form: its definition, relabelling, and the isomorphism test of networkx."""

from __future__ import annotations

from itertools import pairwise, permutations, product

import networkx as nx
import numpy as np
import pytest
from hypothesis import given, settings
from plain_converter import ROLES, read_code, same_converter, symmetries_of, wiring_graph
from plain_enumerator import plain_census
from strategies import census_converters, family_converters, wandered_converters, with_renaming

from capmuster.enumerate.balance import analyse
from capmuster.enumerate.canonical import MOST_TRIED, _least_words, _refined, canonical_words
from capmuster.enumerate.canonicalbatch import canonical_batch
from capmuster.enumerate.census import census
from capmuster.enumerate.converters import converters
from capmuster.enumerate.families import (
    dickson,
    doubler_chain,
    fibonacci,
    ladder,
    members,
    series_parallel,
)
from capmuster.enumerate.identity import MOST_READABLE
from capmuster.enumerate.wiring import N_PORTS, Converter, format_words

FORTY = (
    series_parallel(41),
    dickson(41),
    fibonacci(40),
    doubler_chain(20),
    doubler_chain(20, alternate=True),
    ladder(21, 8),
)


def shuffled(words, rng):
    """Rename a wiring as `strategies.relabelled` does, at random by numpy."""
    columns = np.array(words)
    for phase in (0, 1):
        pair = columns[:, 2 * phase : 2 * phase + 2]
        inner = max(0, int(pair.max()) - N_PORTS + 1)
        columns[:, 2 * phase : 2 * phase + 2] = np.r_[:N_PORTS, N_PORTS + rng.permutation(inner)][pair]
    flipped = np.where(rng.random(len(columns))[:, None] < 0.5, columns[:, [1, 0, 3, 2]], columns)
    ordered = flipped[rng.permutation(len(columns))]
    return ordered[:, [2, 3, 0, 1]] if rng.random() < 0.5 else ordered


@given(with_renaming(census_converters() | family_converters() | wandered_converters()))
@settings(max_examples=80)
def test_relabelling_keeps_words_and_id(drawn):
    converter, words = drawn
    again = Converter(words)
    assert again.words == converter.words
    assert again.id == converter.id
    assert Converter(again.words).words == again.words
    assert min(again.balance.voltages) > 0  # plates are named so
    assert list(again.balance.voltages) == sorted(again.balance.voltages)


@pytest.mark.parametrize(
    "converter", FORTY, ids=["series", "dickson", "fibonacci", "chain", "alternate", "ladder"]
)
def test_forty_capacitors(converter):
    rng = np.random.default_rng(40)
    for member in converter.cell.converters:
        assert member.n in (39, 40)
        for _ in range(3):
            assert Converter.of(shuffled(member.words, rng)) == member


def by_definition(words):
    """Take the least of invariants, then words, nodes named as they appear, over all orders and phases."""
    balance = analyse(words)
    best = None
    for first, order in product((0, 1), permutations(range(len(words)))):
        invariants, named = [], []
        names = ({}, {})
        for i in order:
            turned = balance.voltages[i] < 0
            halves = [words[i][2 * p : 2 * p + 2][:: -1 if turned else 1] for p in (first, 1 - first)]
            charge = balance.charges[i] * (-1 if turned else 1) * (1 if first == 0 else -1)
            grounds = [
                balance.potentials[p][half[1]] for p, half in zip((first, 1 - first), halves, strict=True)
            ]
            invariants.append((abs(balance.voltages[i]), *grounds, charge))
            named.append(
                tuple(
                    v if v < N_PORTS else names[p].setdefault(v, N_PORTS + len(names[p]))
                    for p in (0, 1)
                    for v in halves[p]
                )
            )
        if best is None or (invariants, named) < best:
            best = invariants, named
    return tuple(best[1])


@given(with_renaming(census_converters() | family_converters(most=5)))
@settings(max_examples=40)
def test_the_definition_up_to_the_size_where_all_orders_are_tried(drawn):
    converter, words = drawn
    assert converter.words == by_definition(words)
    assert MOST_TRIED >= MOST_READABLE  # a readable id never rests on refinement


def string_chain(bits):
    """Write a path of capacitors that all hold half the input: pairs in series from I to G in either phase.

    In phase 1 capacitors (0, 1), (2, 3), ... are pairs; in phase 2 (1, 2), (3, 4), ..., and the two at the
    ends sit between O and G. A bit says which of a pair is the upper one. Voltages and charges all tie.
    """
    n = len(bits) + 1
    words = [["", ""] for _ in range(n)]
    for k, (bit, (left, right)) in enumerate(zip(bits, pairwise(range(n)), strict=True)):
        upper, lower = (left, right) if bit else (right, left)
        words[upper][k % 2] = f"I-m{k}"
        words[lower][k % 2] = f"m{k}-G"
    words[0][1] = words[-1][1] = "O-G"
    return " ".join("/".join(word) for word in words)


def test_ties_that_only_the_wiring_breaks():
    # Eight capacitors with seven free choices. Only reversing the path renames one wiring into another: it
    # reverses the choices and turns each over, and the middle one is never its own opposite: 2^7 / 2 of them.
    codes = {bits: string_chain(bits) for bits in product((0, 1), repeat=7)}
    ids = {bits: Converter.parse(code).id for bits, code in codes.items()}
    assert len(set(ids.values())) == 64
    assert all(ids[bits] == ids[tuple(1 - bit for bit in reversed(bits))] for bits in codes)
    first, *others = list(codes)[::17]
    assert all((ids[first] == ids[other]) == same_converter(codes[first], codes[other]) for other in others)


@pytest.mark.parametrize("seed", range(4))
def test_forty_capacitors_that_tie_in_everything(seed):
    rng = np.random.default_rng(seed)
    bits = rng.integers(0, 2, 39).tolist() if seed else [1] * 39
    converter = Converter.parse(string_chain(bits))
    assert converter.ratio * 2 == 1
    assert len({*zip(converter.balance.voltages, map(abs, converter.balance.charges), strict=True)}) == 1
    for _ in range(3):
        assert Converter.of(shuffled(converter.words, rng)) == converter
    assert Converter.parse(string_chain([1 - bit for bit in reversed(bits)])) == converter
    changed = [*bits[:7], 1 - bits[7], *bits[8:]]
    assert Converter.parse(string_chain(changed)) != converter


def loops(*lengths):
    """Words of nothing but closed loops of capacitors, all alike: refinement sees no difference at all."""
    words, start = [], N_PORTS
    for length in lengths:
        ring = [*range(start, start + length), start]
        words += [(a, b, 0, 1) for a, b in pairwise(ring)]
        start += length
    return words


def test_ties_that_refinement_leaves():
    # No converter looks like this; it makes the search branch. Loops of 3 + 5, 4 + 4 and 8 capacitors have
    # the same colours throughout, and are told apart only by following each choice to its end.
    rng = np.random.default_rng(8)
    forms = {}
    for lengths in ((8,), (3, 5), (5, 3), (4, 4), (2, 6)):
        words = loops(*lengths)
        assert set(_refined(words, [0] * 8)) == {0}
        found = {_least_words(words, [0] * 8)}
        for _ in range(4):
            numbers = np.r_[:N_PORTS, N_PORTS + rng.permutation(8)]
            renamed = [(*numbers[list(word[:2])].tolist(), 0, 1) for word in rng.permutation(words)]
            found.add(_least_words(renamed, [0] * 8))
        assert len(found) == 1
        forms.setdefault(tuple(sorted(lengths)), found.pop())
    assert len(set(forms.values())) == len(forms) == 4


def test_equal_id_exactly_where_networkx_finds_an_isomorphism():
    """Random pairs of three capacitors that tie in ratio, voltages and charges, renamed at random."""
    rng = np.random.default_rng(3)
    table = converters(3)
    kinds = {}
    for row in range(len(table)):
        converter = table.converter(row)
        tie = sorted(zip(converter.balance.voltages, map(abs, converter.balance.charges), strict=True))
        kinds.setdefault((converter.ratio, tuple(tie)), []).append(converter)
    crowded = [kind for kind in kinds.values() if len(kind) > 1]
    equal = different = 0
    for k in rng.integers(len(crowded), size=300):
        one, other = (crowded[k][i] for i in rng.integers(len(crowded[k]), size=2))
        renamed = Converter.of(shuffled(other.words, rng))
        same = same_converter(one.code, renamed.code)
        assert (one.id == renamed.id) == same
        equal, different = equal + same, different + (not same)
    assert min(equal, different) > 20


@given(with_renaming(census_converters(least=4)), census_converters(least=4))
@settings(max_examples=30)
def test_isomorphism_of_four_capacitors(drawn, other):
    converter, words = drawn
    assert same_converter(converter.code, Converter(words).code)
    assert same_converter(converter.code, other.code) == (converter.id == other.id)


@given(with_renaming(wandered_converters()), wandered_converters())
@settings(max_examples=30)
def test_isomorphism_of_larger_converters(drawn, other):
    converter, words = drawn
    assert same_converter(converter.code, format_words(words))
    assert same_converter(converter.code, other.code) == (converter.id == other.id)


def test_isomorphism_of_families():
    some = [member.converter for member in members(7) if member.converter.n == 7]
    assert len(some) > 20
    for one, other in permutations(some, 2):
        if one.ratio == other.ratio:
            assert (one.id == other.id) == same_converter(one.code, other.code)


@pytest.mark.parametrize("n", [1, 2, pytest.param(3, marks=pytest.mark.long)])
def test_one_id_for_each_converter_of_the_plain_enumerator(n):
    """Its converters are told apart by networkx: as many ids, and the same as the census has."""
    plain = [Converter.parse(c.wiring) for cell in plain_census(n)[0] for c in cell.converters]
    ids = {converter.id for converter in plain}
    assert len(ids) == len(plain)
    assert ids == set(converters(n).ids())


def symmetries(code):
    """Find the symmetries of a converter by networkx."""
    return symmetries_of(wiring_graph(*read_code(code), ROLES))


@pytest.mark.parametrize("n", [1, 2, 3, 4])
def test_a_converter_without_zero_voltages_has_no_symmetry(n):
    """Count traces: why refinement seldom has to branch.

    A symmetry permutes capacitors (with signs, P) and nodes (Q), and D P = Q D. As D maps onto the nodes with
    a kernel of one dimension, trace P = trace Q + (what P does to q: +1, or -1 if it exchanges the phases).
    If it exchanges them no node is fixed, so some capacitor is turned over in place and holds no voltage. If
    it keeps them, the nodes that move meet only capacitors that move; there are as many, so their balance
    has no solution but zero charge.
    """
    rng = np.random.default_rng(n)
    table = converters(n)
    rows = range(len(table)) if n < 3 else rng.choice(len(table), 150, replace=False)
    assert all(len(symmetries(table.code(row))) == 1 for row in rows)


def test_symmetric_wirings():
    # With capacitors that hold no voltage there are symmetries; hand-made: one turned over between two ports.
    rng = np.random.default_rng(6)
    assert len(symmetries("I-O/O-I")) == 2
    found = 0
    for n in (1, 2, 3):
        table = census(n)
        for words in table.words[table.degenerate & (table.port_charges[:, 1:] != 0).all(axis=1)]:
            code = format_words(words.tolist())
            found += len(symmetries(code)) > 1
            converter = Converter.parse(code)
            assert same_converter(converter.code, code)
            for _ in range(5):
                assert Converter.of(shuffled(converter.words, rng)).words == converter.words
    assert found == 3


@pytest.mark.parametrize("n", [1, 2, 3, 4])
def test_batches_have_the_same_form(n):
    rng = np.random.default_rng(n)
    table = converters(n)
    rows = np.arange(len(table)) if n < 3 else rng.choice(len(table), 400, replace=False)
    for row in rows:
        words = tuple(map(tuple, table.words[row].tolist()))
        assert Converter.of(shuffled(words, rng)).words == words
    again = canonical_batch(table.take(rows))
    assert np.array_equal(again.words, table.words[rows])


@given(census_converters(least=3))
@settings(max_examples=20)
def test_either_phase_order_is_tried(converter):
    exchanged = tuple((c, d, a, b) for a, b, c, d in converter.words)
    assert canonical_words(exchanged, analyse(exchanged)) == converter.words


def test_graphs_of_the_check_tell_polarity_and_phases():
    # The check itself: turning one capacitor in one phase only is another wiring, in both phases it is not.
    assert same_converter("I-G/O-I", "G-I/I-O")
    assert not same_converter("I-G/O-I", "I-G/I-O")
    assert not nx.vf2pp_is_isomorphic(
        wiring_graph(*read_code("I-G/O-I"), ROLES),
        wiring_graph(*read_code("I-O/O-G"), ROLES),
        node_label="colour",
    )
