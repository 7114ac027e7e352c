"""Scores of the census in batches against the exact single-converter path and the plain one."""

from __future__ import annotations

from fractions import Fraction

import numpy as np
import pytest
from plain_converter import brute_clean, brute_utilisation

from capmuster.enumerate.census import Addresses, cells_at, census
from capmuster.enumerate.skeletons import skeletons
from capmuster.enumerate.tally import Tally
from capmuster.enumerate.wiring import Converter
from capmuster.rank.scores.candidates import candidates_between, census_candidates, census_ratios
from capmuster.rank.scores.cellscores import concatenate, score_cells
from capmuster.rank.scores.scoredcensus import scored_census
from capmuster.rank.scores.switchtable import score, switch_table
from capmuster.rank.scores.utilisation import charge_flow

SAMPLE = {4: 150, 5: 150}


def sampled(n, seed):
    """Random converters of all ratios, with the row of their measures."""
    rng = np.random.default_rng(seed)
    ratios = census_ratios(n)
    for ratio in [ratios[k] for k in rng.choice(len(ratios), SAMPLE[n] // 5)]:
        candidates = census_candidates(n, ratio)
        rows = rng.choice(len(candidates.measures), min(5, len(candidates.measures)), replace=False)
        yield from zip(candidates.table(rows).codes(), rows.tolist(), [candidates] * len(rows), strict=True)


@pytest.mark.parametrize("n", [4, 5])
def test_every_score_of_random_converters_is_the_exact_one(n):
    seen = 0
    for code, row, candidates in sampled(n, 10 + n):
        measures = candidates.measures
        exact = Converter.parse(code)
        flow = charge_flow(exact)
        assert exact.ratio == candidates.ratio
        assert measures.switches[row] == len(flow.network.switches)
        assert measures.clean[row] == flow.network.clean
        assert measures.capacitor_utilisation[row] == float(flow.capacitor_utilisation)
        assert measures.switch_utilisation[row] == float(flow.switch_utilisation)
        assert measures.highest_capacitor_voltage[row] == float(max(flow.voltages))
        assert measures.highest_blocking_voltage[row] == float(
            max(switch.blocking_voltage for switch in flow.network.switches)
        )
        assert measures.output_evenness[row] == float(flow.output_evenness)
        stiff = all(any(word[plate] < 3 and word[plate + 2] < 3 for plate in (0, 1)) for word in exact.words)
        assert measures.plate_on_ports[row] == stiff
        seen += 1
    assert seen > 100


@pytest.mark.parametrize("n", [4, 5])
def test_utilisations_of_random_converters_against_all_trees_of_switches(n):
    # The plain converter tries every spanning tree of every vertex; see plain_converter.
    rng = np.random.default_rng(n)
    drawn = [one for one in sampled(n, 20 + n) if one[2].ratio != 1]
    for k in rng.choice(len(drawn), 25, replace=False):
        code, row, candidates = drawn[k]
        capacitor, switch = brute_utilisation(code)
        assert candidates.measures.capacitor_utilisation[row] == float(capacitor)
        assert candidates.measures.switch_utilisation[row] == float(switch)
        assert candidates.measures.clean[row] == brute_clean(code)


@pytest.mark.parametrize("n", [1, 2, 3, 4])
def test_all_cells_against_the_general_batch(n):
    scores = concatenate(list(score_cells(skeletons(n), 0, Tally.empty(n))))
    ones = np.ones(len(scores), dtype=np.int8)
    cells = cells_at(Addresses(n, scores.skeleton, scores.attachment, ones, scores.mirror))
    general, switches = score(cells), switch_table(cells)
    assert np.array_equal(general.capacitor_sum, scores.capacitor_sum)
    assert np.array_equal(general.switch_sum, scores.switch_sum)
    assert np.array_equal(general.switches, scores.switches)
    assert np.array_equal(general.clean, scores.clean)
    assert np.array_equal(switches.blocking.max(axis=1), scores.highest_blocking)
    assert np.array_equal(np.abs(cells.voltages).max(axis=1), scores.highest_capacitor)
    every = census(n)
    assert len(scores) == int((~every.degenerate).sum())


def test_scores_do_not_depend_on_how_skeletons_are_split():
    table = skeletons(4)
    whole = concatenate(list(score_cells(table, 0, Tally.empty(4))))
    parts = []
    for start in range(0, len(table), 5):
        parts += score_cells(table.take(slice(start, start + 5)), start, Tally.empty(4))
    split = concatenate(parts)
    assert all(np.array_equal(getattr(whole, name), getattr(split, name)) for name in whole.__slots__)


@pytest.mark.parametrize("n", [1, 2, 3, 4, 5])
def test_both_utilisations_stay_below_one_which_is_reached(n):
    # Theory, section 3: found by complete enumeration, kept as a test.
    best = [0.0, 0.0]
    for triple in scored_census(n).triples:
        if not triple[0]:
            continue
        ratio = Fraction(triple[0], triple[2])
        measures = census_candidates(n, ratio).measures
        best = [
            max(best[0], measures.capacitor_utilisation.max()),
            max(best[1], measures.switch_utilisation.max()),
        ]
    assert best == [1.0, 1.0]


def test_most_switches_are_the_published_number():
    # Makowski and Maksimovic, PESC 1995: 3 k - 2 switches with k = n + 1 capacitors.
    census5 = scored_census(5)
    most = max(int(census5.cells(triple).switches.max()) for triple in census5.triples)
    assert most == 3 * 6 - 2


def test_candidates_between_two_ratios_are_those_of_the_ratios_between():
    found = list(candidates_between(4, Fraction(2, 5), 0.6))
    ratios = [one.ratio for one in found]
    assert ratios == sorted(ratios) == [r for r in census_ratios(4) if Fraction(2, 5) <= r <= 0.6]
    for one in found:
        assert len(one.measures) == int(census_candidates(4, one.ratio).measures.clean.sum())
        assert one.measures.clean.all()
