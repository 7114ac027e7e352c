"""The certificate of completeness: it holds, and it notices whatever is missing."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction
from math import gcd

import numpy as np
import pytest

from capmuster.enumerate import certificate as certificates
from capmuster.enumerate.attached import tally_cells
from capmuster.enumerate.attainable import BEYOND, capacitors_needed, fibonacci_bound, nearest_attainable
from capmuster.enumerate.census import census
from capmuster.enumerate.certificate import certificate_of, certify, labelled_cells
from capmuster.enumerate.converters import ratios_of_triple
from capmuster.enumerate.errors import CapmusterError
from capmuster.enumerate.skeletons import skeletons
from capmuster.enumerate.tally import Tally, labellings, triple_numbers, triple_of

LABELLED = {1: 12, 2: 864, 3: 220608}
"""Labelled cells counted by brute force over all pairs of phases, see ``test_plain_enumerator``."""


def expected_triples(n):
    """Coprime (a, b, a + b) with a + b up to F(n + 1): what the published ratios come to.

    Makowski and Maksimovic, "Performance limits of switched-capacitor DC-DC converters", IEEE PESC 1995.
    """
    top = {1: 2, 2: 3, 3: 5, 4: 8, 5: 13, 6: 21}[n]
    pairs = ((a, b) for b in range(1, top) for a in range(1, b + 1))
    return {(a, b, a + b) for a, b in pairs if gcd(a, b) == 1 and a + b <= top}


@pytest.mark.parametrize("n", [1, 2, 3, 4, 5])
def test_both_routes_agree_and_find_the_published_triples(n):
    certificate = certify(n)
    assert certificate.holds
    assert certificate.differences == ()
    assert set(certificate.cells) == expected_triples(n)
    if n in LABELLED:
        assert sum(certificate.labelled_counted.values()) == LABELLED[n]


@pytest.mark.parametrize("n", [1, 2, 3, 4])
def test_the_tally_is_what_the_table_of_cells_adds_up_to(n):
    table = census(n)
    certificate = certify(n)
    for triple, cells in certificate.cells.items():
        rows = np.all(table.triples == triple, axis=1)
        assert int(rows.sum()) == cells
        orbits = labellings(n) * 6 // table.stabiliser[rows].astype(np.int64)
        assert int(orbits.sum()) == certificate.labelled_listed[triple]


@pytest.mark.long
def test_six_capacitors_reach_three_triples_more():
    # Ours, by convolution over all skeletons; simulated in test_rank_six.
    counted = labelled_cells(skeletons(6))
    assert set(counted) == expected_triples(6) | set(BEYOND)


def tallied(n, *, without=None):
    table = skeletons(n)
    rows = np.delete(np.arange(len(table)), [] if without is None else [without])
    tally = Tally.empty(n)
    tally_cells(table.take(rows), tally)
    return tally


def test_a_missing_cell_is_noticed():
    tally = tallied(3)
    whole = certificate_of(tally).labelled_counted[1, 1, 2]
    key = next(k for k in np.flatnonzero(tally.labelled).tolist() if triple_of(*charges(k)) == (1, 1, 2))
    tally.labelled[key] -= labellings(3) * 6
    listed = whole - labellings(3) * 6
    assert certificate_of(tally).differences == (
        f"triple 1,1,2: {listed} labelled cells listed, {whole} counted",
    )


def charges(key):
    """Port charges that a tally counts under a key."""
    span = round(len(Tally.empty(1).held) ** 0.5)
    return key // span - span // 2, key % span - span // 2


def test_cells_of_a_missing_skeleton_are_noticed():
    assert not certificate_of(tallied(4, without=7)).holds


def test_a_skeleton_missing_from_the_list_is_noticed_by_the_separate_count(monkeypatch):
    # Both routes lean on the list; only the separate generator can tell that it is short.
    table = skeletons(4)
    short = table.take(np.arange(len(table) - 1))
    monkeypatch.setattr(certificates, "skeletons", lambda _: short)
    tally = Tally.empty(4)
    tally_cells(short, tally)
    certificate = certificate_of(tally)
    assert certificate.labelled_listed == certificate.labelled_counted
    assert not certificate.holds
    assert "labelled skeletons" in certificate.differences[0]


def test_a_difference_names_both_numbers():
    certificate = certify(2)
    wrong = replace(certificate, labelled_counted={**certificate.labelled_counted, (1, 2, 3): 5})
    assert wrong.differences == ("triple 1,2,3: 288 labelled cells listed, 5 counted",)


@pytest.mark.parametrize("n", [0, 7])
def test_beyond_the_count_is_one_clear_line(n):
    with pytest.raises(CapmusterError, match=f"{n} is beyond"):
        certify(n)


def test_triples_of_cells():
    b, c = np.array([2, -4, 0, 3, -1]), np.array([2, 6, -5, 0, 1])
    triples, place = triple_numbers(b, c)
    assert [triples[k] for k in place] == [(1, 1, 2), (1, 2, 3), (0, 1, 1), (0, 1, 1), (0, 1, 1)]
    assert triple_of(-6, 4) == (1, 2, 3)


@pytest.mark.parametrize("n", [1, 2, 3, 4])
def test_attainable_ratios_are_those_of_the_census(n):
    reached = {
        ratio
        for m in range(1, n + 1)
        for triple in {tuple(t) for t in census(m).triples[~census(m).degenerate].tolist()}
        for ratio in ratios_of_triple(triple)
    }
    top = fibonacci_bound(n) + 3
    for p in range(1, top):
        for q in range(1, top):
            for ratio in (Fraction(p, q), Fraction(-p, q)):
                assert (capacitors_needed(ratio) <= n) == (ratio in reached), ratio
                alike = sorted(r for r in reached if (r > 0) == (ratio > 0))
                below = [r for r in alike if r < ratio][-1:]
                above = [r for r in alike if r > ratio][:1]
                expected = [ratio] if ratio in reached else below + above
                assert sorted(nearest_attainable(ratio, n)) == expected, ratio


def test_what_six_capacitors_reach_beyond_the_published_set():
    assert capacitors_needed(Fraction(24, 11)) == capacitors_needed(Fraction(-11, 13)) == 6
    assert capacitors_needed(Fraction(24, 1)) == 7
    assert nearest_attainable(Fraction(24, 11), 6) == (Fraction(24, 11),)
    assert nearest_attainable(Fraction(241, 110), 6)[0] in {Fraction(24, 11), Fraction(11, 5)}
    assert nearest_attainable(Fraction(24, 11), 5) == (Fraction(13, 6), Fraction(11, 5))
