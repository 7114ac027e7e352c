"""The census engine: skeletons, attachments, laws, addresses, roles and canonical batches.

Cells one by one against the plain enumerator are in ``test_enumerate_census_plain``; here every layer is held
against something that shares nothing with it: exact single-converter analysis, brute force, published counts.
"""

from __future__ import annotations

from itertools import permutations, product
from math import factorial

import numpy as np
import pytest
from plain_converter import brute_balance

from capmuster.enumerate.attachments import attachments, outer_places
from capmuster.enumerate.census import addresses, cells_at, census
from capmuster.enumerate.converters import (
    converters,
    converters_of,
    ratios_of_triple,
    roles_of,
    table_of,
    triple_of_ratio,
)
from capmuster.enumerate.errors import CapmusterError
from capmuster.enumerate.skeletoncount import labelled_skeletons
from capmuster.enumerate.skeletons import skeletons
from capmuster.enumerate.sorting import comparators, sort_columns
from capmuster.enumerate.wiring import Converter


@pytest.mark.parametrize("n", [1, 2, 3, 4, 5, pytest.param(6, marks=pytest.mark.long)])
def test_labelled_skeletons_are_as_many_as_the_separate_generator_counts(n):
    # Orbit-stabiliser: a skeleton stands for n! 2^n 2 / |symmetries| labelled ones.
    table = skeletons(n)
    assert int((factorial(n) * 2**n * 2 // table.order).sum()) == labelled_skeletons(n)


@pytest.mark.parametrize("n", [1, 2, 3, 4, 5])
def test_skeletons_keep_charge_balance_and_all_their_symmetries(n):
    table = skeletons(n)
    assert np.all(np.sort(table.nodes, axis=1)[:, ::-1] == table.nodes)
    for row in range(len(table)):
        words, charges = table.words[row], table.charges[row]
        for phase in (0, 1):
            for node in range(1, int(table.nodes[row, phase]) + 1):
                into = (words[:, 2 * phase] == node).astype(int) - (words[:, 2 * phase + 1] == node)
                assert into @ charges == 0
        assert np.all(charges != 0)
        assert np.gcd.reduce(charges) == 1
        meetings = {
            frozenset(
                (4 * i + 2 * phase + plate)
                for i, plate in np.argwhere(words[:, 2 * phase : 2 * phase + 2] == node).tolist()
            )
            for phase in (0, 1)
            for node in range(1, int(table.nodes[row, phase]) + 1)
        }
        symmetries = table.symmetries(row)
        assert len(symmetries) == table.order[row] == len({tuple(one) for one in symmetries.tolist()})
        for moved_to in symmetries:
            # A renaming permutes the places and keeps which plates meet in an internal node.
            assert {frozenset(moved_to[list(places)].tolist()) for places in meetings} == meetings


@pytest.mark.parametrize("n", [1, 2, 3])
def test_attachments_are_one_per_orbit_of_all_strings(n):
    # Brute force over all strings of three letters, renamed by all symmetries and all orders of the letters.
    table = skeletons(n)
    for row in range(len(table)):
        places = outer_places(table.words[row])
        found = attachments(table, row)
        strings = {
            letters
            for letters in product(range(3), repeat=len(places))
            if set(letters) == {0, 1, 2}
            and all(
                letters[k] != letters[k + 1]
                for k in range(len(places) - 1)
                if places[k] // 2 == places[k + 1] // 2
            )
        }
        slot_of = {int(place): k for k, place in enumerate(places)}
        orbits, stabilisers = set(), {}
        for letters in strings:
            images = []
            for moved_to in table.symmetries(row):
                moved = [0] * len(places)
                for k, place in enumerate(places):
                    moved[slot_of[int(moved_to[place])]] = letters[k]
                images += [tuple(order[x] for x in moved) for order in permutations(range(3))]
            orbits.add(min(images))
            stabilisers[letters] = sum(image == letters for image in images)
        listed = [tuple(column) for column in found.letters.T.tolist()]
        assert set(listed) == orbits
        assert len(listed) == len(orbits)
        assert [stabilisers[letters] for letters in listed] == found.stabiliser.tolist()
        values = [int("".join(map(str, letters)), 3) for letters in listed]
        assert found.values.tolist() == values


@pytest.mark.parametrize("n", [4, 5])
def test_random_cells_agree_with_the_exact_single_path(n):
    where = addresses(n)
    rng = np.random.default_rng(n)
    cells = cells_at(where.take(rng.choice(len(where), 400, replace=False)))
    kept = cells.take(~cells.degenerate)
    assert len(kept) > 100
    table = converters_of(kept)
    for row in rng.choice(len(table), 150, replace=False).tolist():
        exact = Converter.parse(table.code(row))
        assert exact.code == table.code(row)  # canonical already
        balance = exact.balance
        assert balance.charges == tuple(table.charges[row].tolist())
        assert balance.port_charges == tuple(table.port_charges[row].tolist())
        scale = int(table.scale[row])
        assert [v * scale for v in balance.voltages] == table.voltages[row].tolist()
        for phase in (0, 1):
            expected = [u * scale for u in balance.potentials[phase]]
            assert table.potentials[row, phase, : len(expected)].tolist() == expected
        # and with fractions eliminated row by row, which shares nothing with either path
        plain = brute_balance(exact.code)
        assert plain.voltages == balance.voltages
        assert [abs(q) for q in plain.charges] == [abs(q) for q in balance.charges]


def test_degenerate_cells_are_refused_by_the_exact_path_or_hold_no_voltage():
    cells = census(3)
    lost = cells.take(cells.degenerate & ~cells.unity)
    for words in lost.words.tolist():
        assert Converter.of(words).balance.degenerate


@pytest.mark.parametrize("n", [1, 2, 3, 4])
def test_each_converter_comes_once_and_ratio_by_ratio_all_come(n):
    every = converters(n).ids()
    assert len(set(every)) == len(every)
    triples = {tuple(triple) for triple in census(n).triples.tolist()}
    ratios = {ratio for triple in triples for ratio in ratios_of_triple(triple)}
    by_ratio = [one for ratio in ratios for one in converters(n, ratio).ids()]
    assert sorted(by_ratio) == sorted(every)
    for ratio in ratios:
        assert ratio in ratios_of_triple(triple_of_ratio(ratio))


def test_codes_are_those_of_the_single_rows():
    table = converters(4, ratios_of_triple((3, 5, 8))[0])
    assert table.codes() == [table.code(row) for row in range(len(table))]
    assert table.codes() == [Converter.of(words).code for words in table.words.tolist()]
    assert table_of([Converter.parse(code) for code in table.codes()]).ids() == table.ids()


def test_a_mirror_makes_two_roles_one():
    cells = census(1)
    kept = cells.take(~cells.degenerate & ~cells.unity)
    rows, roles = roles_of(kept.port_charges, kept.mirror)
    # Common practice: one flying capacitor is a doubler, a halver or an inverter, and nothing else.
    assert len(rows) == len(roles) == 3


@pytest.mark.parametrize("size", range(1, 9))
def test_the_network_sorts_every_order_of_zeros_and_ones(size):
    # Zero-one principle, Knuth, The Art of Computer Programming, vol. 3, section 5.3.4, theorem Z.
    columns = np.array(list(product((0, 1), repeat=size)), dtype=np.int8).T.copy()
    expected = np.sort(columns, axis=0)
    sort_columns(columns)
    assert np.array_equal(columns, expected)
    # Knuth, table of the best networks known: 0, 1, 3, 5, 9, 12, 16, 19 for 1 to 8 values.
    assert len(comparators(size)) == [0, 1, 3, 5, 9, 12, 16, 19][size - 1]


@pytest.mark.parametrize("n", [-1, 0, 6, 99])
def test_beyond_the_census_is_one_clear_line(n):
    with pytest.raises(CapmusterError, match=f"{n} is beyond the census"):
        census(n)
    with pytest.raises(CapmusterError, match=f"{n} is beyond the census"):
        converters(n, ratios_of_triple((1, 1, 2))[0])
