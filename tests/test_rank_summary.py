"""What every table and file says about the job and the search."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction

import pytest

from capmuster.rank.files.summary import assumptions, verdict
from capmuster.rank.inputs.brief import load_brief
from capmuster.rank.shortlist import shortlist

FIXED, REGULATED = load_brief("greenhouse-node"), load_brief("greenhouse-node-regulated")


@pytest.mark.parametrize(
    ("brief", "name", "says"),
    [
        (FIXED, "use", "fixed-ratio, least acceptable output 1.2 V"),
        (REGULATED, "use", "regulated, output that is held 1.2 V"),
        (FIXED, "input", "3 V / 3.7 V / 4.2 V (least / nominal / highest)"),
        (FIXED, "switching frequency", "10 MHz, duty 50 %"),
        (FIXED, "budgets", "area at most 1 mm²"),
        (replace(FIXED, area=None), "budgets", "area is free"),
        (
            replace(FIXED, area=None, silicon_area=0.02, capacitor_area=0.5),
            "budgets",
            "silicon area at most 0.02 mm², capacitor area at most 0.5 mm²",
        ),
        (FIXED, "efficiency floor", "75 % at the worst input"),
        (replace(FIXED, efficiency_floor=None), "efficiency floor", "none"),
        (FIXED, "ratios", "any that hold the output"),
        (replace(FIXED, ratios=(Fraction(1, 2), Fraction(2, 3))), "ratios", "1/2, 2/3"),
        (replace(FIXED, most_switches=9), "parts", "at most 4 flying capacitors and 9 switches"),
        (replace(FIXED, required=-1.2), "use", "least acceptable output -1.2 V"),
    ],
)
def test_assumptions_in_words(brief, name, says):
    assert says in dict(assumptions(brief))[name]


def test_a_job_that_nothing_meets_says_so():
    said = verdict(shortlist(replace(FIXED, area=1e-6, most_capacitors=2)))
    assert said[0].endswith("0 meet the brief.")
    assert "No converter meets the brief." in said
    assert not any("best candidate" in line for line in said)


def test_the_search_beyond_the_census_is_said():
    brief = replace(FIXED, ratios=(Fraction(12, 13),), most_capacitors=12, efficiency_floor=None)
    said = verdict(shortlist(brief, top=1))
    assert "family members from" in said[0]
    assert "to 12." in said[0]
