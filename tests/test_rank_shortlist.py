"""The ranked table and what is said about it."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction

import numpy as np
import pandas as pd
import pytest

from capmuster.enumerate.errors import CapmusterError
from capmuster.enumerate.families import family_names, series_parallel
from capmuster.enumerate.wiring import Cell, Converter
from capmuster.rank.files.columns import COLUMNS
from capmuster.rank.files.summary import assumptions, verdict
from capmuster.rank.inputs.brief import load_brief
from capmuster.rank.shortlist import shortlist

FIXED, REGULATED, BOARD = map(load_brief, ("greenhouse-node", "greenhouse-node-regulated", "pump-shelf"))


@pytest.fixture(scope="module", params=[FIXED, REGULATED, BOARD], ids=lambda brief: brief.name)
def found(request):
    return shortlist(request.param, top=12)


def test_columns_are_documented_with_units(found):
    frame = found.frame
    assert isinstance(frame, pd.DataFrame)
    assert list(frame.columns) == [column.name for column in found.columns]
    assert frame.attrs["units"] == {column.name: column.unit for column in found.columns}
    assert {column.name for column in COLUMNS} <= set(frame.columns)
    for column in found.columns:
        assert column.meaning
        assert column.heading
        # The unit is in the name of whatever has one.
        unit = {"S/mm2": "S_per_mm2", "1": ""}.get(column.unit, column.unit)
        assert column.name.endswith(unit)
    assert frame.attrs["capmuster_version"]


def test_figures_follow_from_each_other(found):
    """Every relation by its definition, from other columns and the brief alone."""
    frame, brief = found.frame, found.brief
    ratio = frame["ratio"].map(lambda text: abs(float(Fraction(text))))
    assert frame["place"].tolist() == list(range(1, len(found) + 1))
    assert frame["area_mm2"].is_monotonic_increasing
    total = frame["capacitor_area_mm2"] + frame["silicon_area_mm2"]
    assert total.tolist() == pytest.approx(frame["area_mm2"].tolist(), rel=1e-12)
    blend = np.hypot(frame["slow_limit_ohm"], frame["fast_limit_ohm"])
    assert blend.tolist() == pytest.approx(frame["impedance_ohm"].tolist(), rel=1e-12)
    budget = (ratio * brief.input_minimum - abs(brief.required)) / brief.current
    assert frame["impedance_ohm"].tolist() == pytest.approx(budget.tolist(), rel=1e-12)
    conductance = 1 / (frame["impedance_ohm"] * frame["area_mm2"])
    assert frame["conductance_per_area_S_per_mm2"].tolist() == pytest.approx(conductance.tolist(), rel=1e-12)
    for level in ("minimum", "nominal", "maximum"):
        ideal = ratio * getattr(brief, f"input_{level}")
        # Common practice: no converter of ratio M is more efficient than V_out / (M V_in).
        assert frame[f"ceiling_{level}"].tolist() == pytest.approx((abs(brief.required) / ideal).tolist())
        output = ideal - frame["droop_V"] if brief.use == "fixed-ratio" else abs(brief.required)
        assert frame[f"efficiency_{level}"].tolist() == pytest.approx((output / ideal).tolist())
    worst = frame[["efficiency_minimum", "efficiency_maximum"]].min(axis=1)
    assert (worst >= brief.efficiency_floor - 1e-12).all()
    for name in ("capacitor_utilisation", "switch_utilisation"):
        assert frame[name].between(0, 1, inclusive="right").all()
    assert frame["output_evenness"].between(0, 1).all()


def test_names_belong_to_the_wirings(found):
    for row in found.frame.to_dict("records"):
        converter = Converter.parse(row["wiring"])
        assert (converter.id, str(converter.ratio), converter.n) == (
            row["id"], row["ratio"], row["flying_capacitors"],
        )  # fmt: skip
        assert ", ".join(family_names(4).get(converter.id, ())) == row["families"]


def test_the_gain_over_the_best_family_member(found):
    names, pool = family_names(4), found.pool
    place = next((k for k in range(len(pool)) if pool.ids[k] in names), None)
    if place is None:
        assert found.gain_over_family is None
        assert found.best_family_place is None
        assert any("No family member meets the brief" in line for line in verdict(found))
    else:
        assert found.best_family_place == place + 1
        assert found.gain_over_family == pytest.approx(pool.evaluation.area[place] / pool.evaluation.area[0])
        assert found.gain_over_family >= 1


def test_the_shipped_briefs_show_all_three_outcomes():
    said = [" ".join(verdict(shortlist(brief))) for brief in (FIXED, REGULATED, BOARD)]
    assert "The best candidate is a family member." in said[0]
    assert "No family member meets the brief" in said[1]
    assert "of the area of the best family member, at place" in said[2]


def test_the_verdict_adds_up(found):
    said, pool = verdict(found), found.pool
    assert f"complete up to {pool.complete_up_to} flying capacitors" in said[0]
    assert f"{pool.considered} converters hold the output, {len(pool)} meet the brief." in said[0]
    counts = [int(line.split()[2]) for line in said if line.startswith("Left out: ")]
    assert sum(counts) + len(pool) == pool.considered


def test_the_assumptions_name_the_job(found):
    said, brief = dict(assumptions(found.brief)), found.brief
    assert said["job"] == brief.title
    assert brief.use in said["use"]
    assert "conduction only" in said["efficiency"]
    assert brief.technology.name in said["technology"]
    assert all(value for value in said.values())
    assert ("bound" in said["element ratings"]) == (brief.use == "regulated")


def test_top_shows_no_more_than_there_are(found):
    every = shortlist(found.brief, top=15)
    assert len(every) == len(every.frame) == min(15, len(every.pool))
    assert len(shortlist(replace(found.brief, most_capacitors=1), top=10**6)) <= 1
    columns = [column.name for column in COLUMNS]  # what is said of a row whatever stands beside it
    assert every.frame[columns].head(len(found)).equals(found.frame[columns])
    one = shortlist(found.brief, top=1)
    assert one.frame["id"].tolist() == found.frame["id"].tolist()[:1]


@pytest.mark.parametrize("top", [0, -1])
def test_a_top_below_one_is_refused(top):
    with pytest.raises(CapmusterError, match="top"):
        shortlist(FIXED, top=top)


def test_an_included_wiring_is_reported_once_with_its_place():
    halver = Converter.parse("I-O/O-G")
    quarter = next(one for one in Cell.of(series_parallel(4).words).converters if one.ratio == Fraction(1, 4))
    found = shortlist(FIXED, top=3, include=[halver, quarter, halver])
    assert [one.id for one in found.included] == [halver.id, quarter.id]
    first, second = found.included
    assert found.pool.ids[first.place - 1] == halver.id
    assert first.reason == ""
    assert second.place is None
    assert second.reason == "the ratio cannot hold the output"
    said = verdict(found)
    assert f"Included {halver.id} ({halver.code}): place {first.place} of {len(found.pool)}." in said
    assert any(quarter.id in line and "left out, the ratio cannot hold" in line for line in said)


def test_including_what_is_there_anyway_changes_nothing():
    brief = replace(FIXED, most_capacitors=3)
    plain = shortlist(brief, top=3)
    place = next(k for k, n in enumerate(plain.pool.capacitors.tolist()) if n == 3)
    found = shortlist(brief, top=3, include=[plain.pool.converter(place)])
    assert found.included[0].place == place + 1
    assert found.pool.ids.tolist() == plain.pool.ids.tolist()
    area = plain.pool.evaluation.area.tolist()
    assert found.pool.evaluation.area.tolist() == pytest.approx(area, rel=1e-12)


def test_provenance_follows_the_brief_and_the_technology():
    first, same = (
        shortlist(FIXED, top=1).provenance,
        shortlist(replace(FIXED, name="other"), top=1).provenance,
    )
    assert first == same
    other = shortlist(replace(FIXED, current=0.002), top=1).provenance
    assert other["brief_fingerprint"] != first["brief_fingerprint"]
    assert other["technology_fingerprint"] == first["technology_fingerprint"]


def test_elements_of_every_row_are_those_of_the_row(found):
    for k in range(len(found)):
        sized, row = found.elements(k), found.frame.iloc[k]
        capacitors = [e for e in sized if e.kind == "capacitor"]
        switches = [e for e in sized if e.kind == "switch"]
        assert (len(capacitors), len(switches)) == (row["flying_capacitors"], row["switches"])
        assert max(e.voltage for e in capacitors) == pytest.approx(row["highest_capacitor_voltage_V"])
        assert max(e.voltage for e in switches) == pytest.approx(row["highest_blocking_voltage_V"])
        assert sum(e.area for e in sized) == pytest.approx(row["area_mm2"], rel=1e-12)
        assert all(e.stress <= 1 + 1e-9 for e in sized)
