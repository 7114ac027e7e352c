"""One converter in detail against the plain analysis, which shares nothing with the project."""

from __future__ import annotations

from fractions import Fraction

import pytest
from hypothesis import given, settings
from strategies import census_converters, family_converters

from capmuster.enumerate.families import family_names, ladder
from capmuster.enumerate.wiring import Converter
from capmuster.rank.scores.detail import detail


@settings(max_examples=60)
@given(census_converters() | family_converters(most=10))
def test_switches_carry_what_arrives_and_block_what_opens(converter):
    """Kirchhoff's current law at every hard-wired node, and voltages from the potentials, all exact."""
    found = detail(converter).as_json()
    potentials = {node["name"]: [Fraction(one) for one in node["potentials"]] for node in found["nodes"]}
    plates = {plate: node["name"] for node in found["nodes"] for plate in node["plates"]}
    for one in found["capacitors"]:
        plus, minus = (potentials[plates[f"{one['name']}{sign}"]] for sign in "+-")
        assert plus[0] - minus[0] == plus[1] - minus[1] == Fraction(one["voltage"]) > 0
    for one in found["switches"]:
        high, low = (potentials[name] for name in one["nodes"])
        phase = one["phase"] - 1
        assert high[phase] == low[phase]  # closed
        assert high[1 - phase] - low[1 - phase] == Fraction(one["blocking_voltage"]) >= 0
    charge = {
        one["name"]: Fraction(one["multiplier"]) * (1 if q > 0 else -1)
        for one, q in zip(found["capacitors"], converter.balance.charges, strict=True)
    }
    for phase in (1, 2):
        for node in found["nodes"]:
            if node["port"]:
                continue
            stored = sum((1 if plate[-1] == "+" else -1) * charge[plate[:-1]] for plate in node["plates"])
            arriving = [
                Fraction(one["multiplier"])
                for one in found["switches"]
                if one["phase"] == phase and node["name"] in one["nodes"]
            ]
            # The signs of switch currents are not told; the charge of a node is a signed sum of them.
            assert abs(stored) in signed_sums(arriving)


def signed_sums(values):
    sums = {Fraction(0)}
    for value in values:
        sums = {one + value for one in sums} | {one - value for one in sums}
    return {abs(one) for one in sums}


def test_a_known_converter_by_hand():
    """Common practice: in a series-parallel tripler each capacitor moves the output charge once, at V_in."""
    found = dict(detail(Converter.parse("I-G/a-I I-G/O-a")).figures())
    assert found["ratio M = V_out / V_in"] == "3"
    assert found["families"] == "series-parallel"
    assert (found["flying capacitors"], found["switches"]) == ("2", "7")
    assert found["capacitor utilisation"] == "1 (100.0%)"
    assert found["output charge in phases 1, 2"] == "0, 1"
    assert found["input charge in phases 1, 2"] == "2, 1"
    assert found["clean"] == "yes"


def test_rows_name_every_element_once():
    shown = detail(Converter.parse("a-G/a-O O-a/b-O O-a/I-b O-G/I-a"))
    rows = shown.rows()
    names = [row[0] for row in rows]
    assert len(set(names)) == len(names) == 4 + len(shown.flow.network.switches)
    assert all(len(row) == len(shown.HEADER) for row in rows)
    json = shown.as_json()
    assert names == [one["name"] for one in json["capacitors"] + json["switches"]]


def test_a_converter_of_several_families_has_all_their_names():
    doubler = detail(Converter.parse("I-G/O-I"))
    assert set(doubler.families) == {"series-parallel", "ladder", "Dickson", "Fibonacci", "doubler chain"}
    assert doubler.families == family_names(1)[doubler.converter.id]


@pytest.mark.parametrize("rails", [4, 12])
def test_large_members_are_shown_too(rails):
    shown = detail(ladder(rails))
    assert "ladder" in shown.families
    # Seeman and Sanders 2008: every switch of a ladder blocks the voltage of one rail.
    assert {s.blocking_voltage for s in shown.flow.network.switches} == {Fraction(1, rails)}
    assert all(text for _, text in shown.figures())
