"""Spreads: corners and random trials against plain formulas and known limits."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest
from scipy.stats import kstest, truncnorm

from capmuster.enumerate.errors import CapmusterError
from capmuster.rank.design.tolerance import corner_draw, random_draw, spreads
from capmuster.rank.inputs.brief import load_brief
from capmuster.rank.inputs.conditions import Tolerance
from capmuster.rank.shortlist import shortlist
from capmuster.rank.sizing import impedance

NODE = replace(
    load_brief("greenhouse-node"), objective="least-loss", frequency_minimum=1e6, frequency=5e7,
    output_most=2.2, efficiency_floor=None, most_capacitors=3, area=0.5,
)  # fmt: skip
SPREAD = Tolerance(
    resistance=0.2, density=0.15, charge=0.1, capacitance=0.02, mismatch=0.03, load=0.1,
    temperature_low=-20, temperature_high=100, trials=2000, seed=7,
)  # fmt: skip
FOUND = shortlist(replace(NODE, tolerance=SPREAD), top=4)
ROWS = [(str(FOUND.pool.ids[k]), *FOUND._sized_candidate(k)) for k in range(4)]


def test_draws_have_the_spread_that_was_asked_for():
    draw = random_draw(replace(SPREAD, trials=20000))
    assert np.abs(draw.density - 1).max() <= 0.15
    # Normal, three standard deviations wide and cut off there: scipy's truncnorm.
    assert kstest((draw.density - 1) / 0.05, truncnorm(-3, 3).cdf).pvalue > 1e-3
    # Leakage doubles every 10 K (common practice), from 27 degC.
    assert draw.leakage.min() >= 2 ** (-47 / 10)
    assert draw.leakage.max() <= 2 ** (73 / 10)
    assert np.abs(np.corrcoef(draw.density, draw.load)[0, 1]) < 0.05


def test_the_same_seed_gives_the_same_figures_and_another_one_others():
    again = spreads(ROWS, SPREAD)
    assert again == FOUND.spreads
    other = spreads(ROWS, replace(SPREAD, seed=8))
    assert other != again
    for one, there in zip(again, other, strict=True):
        assert one.efficiency == pytest.approx(there.efficiency, abs=3e-3)
        assert one.corner_efficiency == there.corner_efficiency


def test_a_candidate_does_not_depend_on_the_others_listed():
    alone = spreads(ROWS[1:2], SPREAD)[0]
    among = spreads(ROWS, SPREAD)[1]
    assert replace(alone, first=0.0) == replace(among, first=0.0)
    assert alone.first == 1.0


def test_without_spreads_all_is_nominal():
    for (_, _, sized), one in zip(ROWS, spreads(ROWS, Tolerance()), strict=True):
        nominal = float(sized.worst_efficiency[0])
        assert one.efficiency == pytest.approx(nominal, rel=1e-12)
        assert one.corner_efficiency == pytest.approx(nominal, rel=1e-12)
        droop = NODE.current * float(sized.minimum.impedance[0])
        assert one.droop == pytest.approx(droop, rel=1e-9)
        assert one.holds == 1.0
    assert spreads(ROWS, Tolerance())[0].first in (0.0, 1.0)


def test_a_corner_by_hand():
    # On-resistance alone, 20 % up at 27 degC: the switches' part of the fast limit grows by 20 %.
    name, candidate, sized = ROWS[0]
    z = impedance(
        candidate.model(NODE.input_minimum),
        sized.design.capacitors,
        sized.design.switches,
        sized.design.frequency,
    )
    worse = np.hypot(z.slow[0], 1.2 * z.switches[0] + z.series[0]) + z.lead[0]
    one = spreads([(name, candidate, sized)], Tolerance(resistance=0.2))[0]
    assert one.corner_droop == pytest.approx(NODE.current * worse, rel=1e-12)
    assert one.droop < one.corner_droop
    # 73 K above 27 degC at 0.4 % per kelvin: 29.2 % more.
    hot = spreads([(name, candidate, sized)], Tolerance(temperature_low=100, temperature_high=100))[0]
    worse = np.hypot(z.slow[0], 1.292 * z.switches[0] + z.series[0]) + z.lead[0]
    assert hot.droop == pytest.approx(NODE.current * worse, rel=1e-12)
    # Less capacitance: the slow limit grows, series resistance per area does not.
    thin = spreads([(name, candidate, sized)], Tolerance(density=0.1))[0]
    worse = np.hypot(z.slow[0] / 0.9, z.fast[0]) + z.lead[0]
    assert thin.corner_droop == pytest.approx(NODE.current * worse, rel=1e-12)


def test_random_trials_stay_inside_the_corners():
    # Droop and efficiency are monotone in each factor, and corners take all elements at their ends at once.
    for one in FOUND.spreads:
        assert one.corner_efficiency <= one.efficiency + 1e-12
        assert one.corner_droop >= one.droop - 1e-12
    assert len(corner_draw(SPREAD).load) == 2**5
    assert sum(one.first for one in FOUND.spreads) == pytest.approx(1.0)


def test_a_droop_budget_that_is_used_up_does_not_always_hold():
    # Sized with the whole droop budget, about half of the trials fall short (known by hand).
    brief = replace(
        NODE, objective="least-area", efficiency_floor=0.6, area=None,
        tolerance=Tolerance(resistance=0.1, density=0.1, trials=2000),
    )  # fmt: skip
    found = shortlist(brief, top=2)
    held = [
        one.holds for one, droop in zip(found.spreads, found.frame["droop_V"], strict=True) if droop > 0.299
    ]
    assert held
    for share in held:
        assert 0.35 < share < 0.65


def test_regulated_use_falls_short_at_the_highest_frequency():
    brief = replace(
        load_brief("greenhouse-node-regulated"), objective="least-loss", frequency_minimum=1e6, frequency=5e7,
        efficiency_floor=None, most_capacitors=1, ratios=(Fraction(1, 2),),
        tolerance=Tolerance(density=0.2, load=0.2, trials=500),
    )  # fmt: skip
    one = shortlist(brief, top=1).spreads[0]
    assert one.holds == 1.0  # the halver has frequency to spare
    assert one.droop == 0.0
    # 0.33 mm2 of the densest capacitor, 6.8 nF/mm2 but for 2.1 V of 3.3 V class 3.8 nF/mm2, at 2.1 MHz:
    # 1 / (4 f C) = 95 ohm of the 100 ohm that hold the output.
    tight = shortlist(replace(brief, frequency_minimum=None, frequency=2.1e6, area=0.33), top=1).spreads[0]
    assert 0.1 < tight.holds < 0.9
    # At 80 % of the capacitance and 120 % of the load it falls by no more than half of 1.5 V.
    assert 0.0 < tight.corner_droop < 0.75


@pytest.mark.parametrize(
    ("changes", "said"),
    [
        ({"resistance": 1.0}, "0 to below 100 %"),
        ({"density": 0.6, "capacitance": 0.5}, "leaves nothing beside density"),
        ({"temperature_low": 50, "temperature_high": 20}, "is above temperature_high"),
        ({"trials": 3}, "too small"),
        ({"load": float("nan")}, "not finite"),
        ({"resistance_drift": 0.1, "temperature_low": -20}, "leaves no on-resistance"),
    ],
)
def test_what_makes_no_sense_is_refused(changes, said):
    with pytest.raises(CapmusterError, match=said):
        Tolerance(**changes)


def test_spreads_belong_to_objectives_that_count_losses():
    with pytest.raises(CapmusterError, match="does not belong to conduction-area"):
        replace(load_brief("greenhouse-node"), tolerance=SPREAD)
