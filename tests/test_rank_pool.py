"""Which converters a brief considers, which it keeps, and in what order."""

from __future__ import annotations

from collections import Counter
from dataclasses import replace
from fractions import Fraction
from functools import lru_cache

import numpy as np
import pytest

from capmuster.enumerate.converters import converters
from capmuster.enumerate.families import members, series_parallel
from capmuster.enumerate.wiring import Cell, Converter
from capmuster.rank.evaluation import evaluate
from capmuster.rank.inputs.brief import load_brief
from capmuster.rank.pool import gather
from capmuster.rank.scores.switchtable import score

FIXED, REGULATED = load_brief("greenhouse-node"), load_brief("greenhouse-node-regulated")
# Three capacitors keep every case small; nothing here depends on their number.
SMALL = replace(FIXED, most_capacitors=3, efficiency_floor=None, area=None)
INVERTING = replace(SMALL, required=-1.2)


@lru_cache
def pool_of(brief):
    return gather(brief)


@pytest.mark.parametrize(
    "brief",
    [
        SMALL,
        INVERTING,
        replace(SMALL, efficiency_floor=0.75, area=0.3),
        replace(SMALL, most_switches=8),
        replace(SMALL, capacitor_area=0.05, silicon_area=0.01),
        replace(SMALL, ratios=(Fraction(1, 2), Fraction(3, 4))),
        replace(REGULATED, most_capacitors=3, efficiency_floor=None, area=None),
        replace(REGULATED, most_capacitors=3, required=-0.9, efficiency_floor=None, area=1.0),
    ],
    ids=[
        "free",
        "inverting",
        "floor and area",
        "switches",
        "budgets",
        "ratios",
        "regulated",
        "held inverting",
    ],
)
def test_every_converter_is_kept_or_counted_by_reason(brief):
    """Against a plain walk over the census, converter by converter, in the order of the reasons."""
    pool = pool_of(brief)
    considered, left_out, kept = 0, Counter(), []
    for n in (1, 2, 3):
        table = converters(n)
        figures, clean = evaluate(table, brief), score(table).clean
        ids = table.ids()
        for row in range(len(table)):
            ratio = table.ratio(row)
            listed = brief.ratios is None or ratio in brief.ratios
            if not listed or ratio * brief.sign * Fraction(str(brief.input_minimum)) <= Fraction(
                str(abs(brief.required))
            ):
                continue
            considered += 1
            # All losses aside, a converter that uses its whole budget reaches the ceiling at the least input.
            at_least = abs(brief.required) / abs(float(ratio)) / brief.input_minimum
            held = abs(brief.required) if brief.use == "regulated" else None
            ideal = abs(float(ratio)) * brief.input_maximum
            droop = abs(float(ratio)) * brief.input_minimum - abs(brief.required)
            at_most = (held if held is not None else ideal - droop) / ideal
            if brief.efficiency_floor is not None and min(at_least, at_most) < brief.efficiency_floor - 1e-12:
                left_out["below the efficiency floor"] += 1
            elif not clean[row]:
                left_out["a switch is idle or blocks no voltage"] += 1
            elif brief.most_switches is not None and figures.switches[row] > brief.most_switches:
                left_out["more switches than allowed"] += 1
            elif np.isnan(figures.area[row]):
                left_out["no area within the budgets meets the droop"] += 1
            elif brief.area is not None and figures.area[row] > brief.area:
                left_out["the area is above the budget"] += 1
            else:
                kept.append(ids[row])
    assert pool.considered == considered == len(pool) + sum(pool.left_out.values())
    assert pool.left_out == dict(left_out)
    assert sorted(pool.ids.tolist()) == sorted(kept)
    assert len(set(pool.ids.tolist())) == len(pool)


def test_a_brief_that_leaves_nothing_is_no_error():
    pool = gather(replace(SMALL, area=1e-9))
    assert len(pool) == 0
    assert sum(pool.left_out.values()) == pool.considered > 0


@pytest.mark.parametrize("brief", [SMALL, INVERTING, REGULATED], ids=["free", "inverting", "regulated"])
def test_order_is_area_then_switches_then_capacitors_then_id(brief):
    pool = pool_of(brief)
    area = pool.evaluation.area.tolist()
    keys = list(
        zip(pool.evaluation.switches.tolist(), pool.capacitors.tolist(), pool.ids.tolist(), strict=True)
    )
    ties = 0
    for k in range(len(pool) - 1):
        if area[k + 1] > area[k] * (1 + 1e-9):
            continue
        assert area[k + 1] >= area[k] * (1 - 1e-9)  # not ascending only where they tie
        assert keys[k] < keys[k + 1]
        ties += 1
    assert ties > 0 or brief is REGULATED


@pytest.mark.parametrize("brief", [SMALL, INVERTING, REGULATED], ids=["free", "inverting", "regulated"])
def test_pareto_set_by_brute_force(brief):
    pool = pool_of(brief)
    e = pool.evaluation
    rounded = [float(f"{value:.8e}") for value in e.area.tolist()]
    blocking = [float(f"{value:.8e}") for value in e.highest_blocking_voltage.tolist()]
    worst = [float(f"{-value:.8e}") for value in e.worst_efficiency.tolist()]
    costs = list(zip(rounded, worst, pool.capacitors.tolist(), e.switches.tolist(), blocking, strict=True))
    for k, mine in enumerate(costs):
        beaten = any(
            all(a <= b for a, b in zip(other, mine, strict=True)) and other != mine for other in costs
        )
        assert bool(pool.pareto[k]) is not beaten
    assert pool.pareto[0] or costs[0] in costs[1:] or len(pool) == 0


def test_the_listed_ratios_are_a_part_of_all():
    every, listed = pool_of(SMALL), pool_of(replace(SMALL, ratios=(Fraction(1, 2), Fraction(3, 4))))
    wanted = [
        one for k, one in enumerate(every.ids.tolist()) if every.ratio(k) in (Fraction(1, 2), Fraction(3, 4))
    ]
    assert listed.ids.tolist() == wanted


def test_an_inverting_brief_gets_inverting_converters():
    pool = pool_of(INVERTING)
    assert len(pool) > 10
    assert all(pool.ratio(k) < -Fraction(2, 5) for k in range(len(pool)))


def test_the_pool_gives_back_its_converters():
    pool = pool_of(SMALL)
    for place in range(0, len(pool), 7):
        converter = pool.converter(place)
        assert (converter.id, converter.code) == (pool.ids[place], pool.code(place))
        assert converter.ratio == pool.ratio(place)
        assert converter.n == pool.capacitors[place]


def test_repeated_runs_are_the_same():
    again = gather(SMALL)
    assert again.ids.tolist() == pool_of(SMALL).ids.tolist()
    assert again.evaluation.area.tolist() == pool_of(SMALL).evaluation.area.tolist()


def unclean():
    """Find a converter of ratio 1/2 with three capacitors that no list shows by itself."""
    table = converters(3, Fraction(1, 2))
    return table.converter(int(np.flatnonzero(~score(table).clean)[0]))


def test_an_included_wiring_is_ranked_whatever_it_is():
    family = next(one.converter for one in members(6, 6) if one.converter.ratio == Fraction(6, 7))
    own = [unclean(), family, Converter.parse("I-O/O-G")]
    pool, plain = gather(SMALL, own), pool_of(SMALL)
    ids = pool.ids.tolist()
    assert {one.id for one in own} <= set(ids)
    assert len(set(ids)) == len(ids)
    # The others keep their order.
    assert [one for one in ids if one not in {one.id for one in own[:2]}] == plain.ids.tolist()
    for one in own:
        place = ids.index(one.id)
        assert pool.ratio(place) == one.ratio
        assert pool.capacitors[place] == one.n
    assert pool.considered == len(pool) + sum(pool.left_out.values())


def test_an_included_wiring_outside_the_listed_ratios_is_ranked():
    brief = replace(SMALL, ratios=(Fraction(1, 2),))
    own = converters(2, Fraction(2, 3)).converter(0)
    pool = gather(brief, [own])
    assert own.id in pool.ids.tolist()
    assert {pool.ratio(k) for k in range(len(pool))} == {Fraction(1, 2), Fraction(2, 3)}


@pytest.mark.parametrize(
    ("brief", "wiring", "reason"),
    [
        (SMALL, Cell.of(series_parallel(4).words).converters, "the ratio cannot hold the output"),
        (replace(SMALL, area=1e-4), None, "the area is above the budget"),
        (replace(SMALL, efficiency_floor=0.9), None, "below the efficiency floor"),
        (replace(SMALL, most_switches=3), None, "more switches than allowed"),
        (
            replace(SMALL, capacitor_area=1e-4, silicon_area=1e-4),
            None,
            "no area within the budgets meets the droop",
        ),
    ],
    ids=["ratio", "area", "floor", "switches", "budgets"],
)
def test_an_included_wiring_that_fails_is_told_why(brief, wiring, reason):
    if wiring is None:
        own = Converter.parse("I-O/O-G")  # the halver
    else:
        own = next(one for one in wiring if one.ratio == Fraction(1, 4))
    pool = gather(brief, [own, own])
    assert own.id not in pool.ids.tolist()
    assert pool.refused == {own.id: reason}


@pytest.mark.long
def test_beyond_the_census_every_family_member_is_a_candidate():
    brief = replace(FIXED, ratios=(Fraction(1, 7), Fraction(6, 7)), required=0.3, most_capacitors=12)
    brief = replace(brief, efficiency_floor=None, area=None)
    pool = gather(brief)
    assert pool.complete_up_to < 12
    wanted = {
        one.converter.id
        for one in members(12)
        if one.converter.n > pool.complete_up_to and one.converter.ratio in brief.ratios
    }
    beyond = {
        one
        for one, n in zip(pool.ids.tolist(), pool.capacitors.tolist(), strict=True)
        if n > pool.complete_up_to
    }
    refused = sum(pool.left_out.values())
    assert beyond <= wanted
    assert len(wanted - beyond) <= refused
    assert beyond
