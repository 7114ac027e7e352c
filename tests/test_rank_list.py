"""Listings: everything is there, once, in the promised order, and filters do what they say."""

from __future__ import annotations

import csv
import io
import json
from fractions import Fraction

import pytest
from command import run
from plain_converter import unmatched
from plain_enumerator import plain_census

from capmuster.enumerate.errors import CapmusterError
from capmuster.enumerate.families import members
from capmuster.enumerate.wiring import Converter
from capmuster.rank.scores.filters import Filters
from capmuster.rank.scores.listed import COLUMN_UNITS
from capmuster.rank.scores.listing import find_converters, list_converters
from capmuster.rank.scores.utilisation import charge_flow


def rows_of(ratio, capacitors, **options):
    return find_converters(Fraction(ratio), capacitors, **options).converters


@pytest.mark.parametrize("ratio", ["1/2", "2", "-1", "2/3", "3", "-1/2", "1"])
def test_two_capacitors_against_the_plain_enumerator(ratio):
    # The plain enumerator shares nothing with ours; sameness is decided by networkx.
    plain = [
        c.wiring
        for n in (1, 2)
        for cell in plain_census(n)[0]
        for c in cell.converters
        if c.ratio == Fraction(ratio)
    ]
    listing = find_converters(Fraction(ratio), 2, include_unclean=True)
    assert unmatched(plain, [row.wiring for row in listing.converters]) == ([], [])
    assert listing.count_all == len(plain)


def test_the_order_is_the_promised_one_and_a_limit_cuts_it():
    rows = rows_of("2/5", 4)
    keys = [
        (
            -round(row.capacitor_utilisation * row.switch_utilisation, 12),
            row.flying_capacitors,
            row.switches,
            -row.capacitor_utilisation,
            row.id,
        )
        for row in rows
    ]
    assert keys == sorted(keys)
    for limit in (0, 1, 3, 17, len(rows), len(rows) + 5):
        assert rows_of("2/5", 4, limit=limit) == rows[:limit]


def test_every_column_is_what_the_exact_path_says():
    for row in rows_of("3/5", 4)[::97]:
        flow = charge_flow(Converter.parse(row.wiring))
        assert row.switches == len(flow.network.switches)
        assert row.capacitor_utilisation == float(flow.capacitor_utilisation)
        assert row.switch_utilisation == float(flow.switch_utilisation)
        assert row.highest_capacitor_voltage == float(max(flow.voltages))
        assert row.highest_blocking_voltage == float(max(s.blocking_voltage for s in flow.network.switches))
        assert row.output_evenness == float(flow.output_evenness)
        assert row.clean == flow.network.clean


@pytest.mark.parametrize(
    ("filters", "keeps"),
    [
        (Filters(switches=9), lambda row: row.switches <= 9),
        (Filters(blocking_voltage=0.6), lambda row: row.highest_blocking_voltage <= 0.6 + 1e-9),
        (Filters(capacitor_utilisation=0.8), lambda row: row.capacitor_utilisation >= 0.8 - 1e-9),
        (Filters(switch_utilisation=6 / 7), lambda row: row.switch_utilisation >= 6 / 7 - 1e-9),
        (Filters(output_evenness=0.8), lambda row: row.output_evenness >= 0.8 - 1e-9),
        (
            Filters(plate_on_ports=True),
            lambda row: all(
                any(
                    set(plate) <= set("GIO")
                    for plate in zip(*(p.split("-") for p in word.split("/")), strict=True)
                )
                for word in row.wiring.split()
            ),
        ),
        (
            Filters(switches=11, switch_utilisation=0.9),
            lambda row: row.switches <= 11 and row.switch_utilisation >= 0.9 - 1e-9,
        ),
    ],
)
def test_filters_keep_what_they_say_and_counts_follow(filters, keeps):
    everything = rows_of("2/5", 4, include_unclean=True)
    listing = find_converters(Fraction(2, 5), 4, filters=filters)
    expected = [row for row in everything if keeps(row)]
    assert list(listing.converters) == [row for row in expected if row.clean]
    assert 0 < listing.count == len(listing.converters) < len(everything)
    assert listing.count_all == len(expected)


@pytest.mark.parametrize("family", ["series-parallel", "ladder", "Dickson", "Fibonacci", "doubler chain"])
def test_a_family_filter_lists_its_members(family):
    for ratio in (Fraction(3), Fraction(1, 4), Fraction(2, 3), Fraction(-1, 2), Fraction(5), Fraction(1, 7)):
        expected = {m.converter.id for m in members(7) if m.family == family and m.converter.ratio == ratio}
        listing = find_converters(ratio, 7, filters=Filters(families=(family.upper(),)), include_unclean=True)
        assert {row.id for row in listing.converters} == expected
        assert all(family in row.families for row in listing.converters)


def test_the_frontier_is_what_no_other_beats():
    rows = rows_of("3/5", 4)
    costs = {
        row.id: (
            row.flying_capacitors,
            row.switches,
            -row.capacitor_utilisation,
            -row.switch_utilisation,
            row.highest_blocking_voltage,
        )
        for row in rows
    }
    distinct = set(costs.values())
    unbeaten = {
        cost
        for cost in distinct
        if not any(
            other != cost and all(a <= b for a, b in zip(other, cost, strict=True)) for other in distinct
        )
    }
    frontier = rows_of("3/5", 4, frontier_only=True)
    assert [row.id for row in frontier] == [row.id for row in rows if costs[row.id] in unbeaten]


def test_five_capacitors_contain_four_and_count_once_more():
    four, five = (find_converters(Fraction(5, 8), n, include_unclean=True) for n in (4, 5))
    assert five.complete_up_to == 5
    assert {row.id for row in four.converters} <= {row.id for row in five.converters}
    assert len({row.wiring for row in five.converters}) == five.count_all > four.count_all


def test_the_data_frame_has_the_rows_and_says_its_units():
    frame = list_converters("2/5", 3)
    listing = find_converters(Fraction(2, 5), 3)
    assert list(frame.columns) == list(COLUMN_UNITS) == list(frame.attrs["units"])
    assert frame["id"].tolist() == [row.id for row in listing.converters]
    assert frame["ratio"].tolist() == ["2/5"] * len(frame)
    assert (frame.attrs["count"], frame.attrs["count_all"]) == (listing.count, listing.count_all)
    assert len(list_converters("7/5", 3)) == 0


@pytest.mark.parametrize(
    ("ratio", "capacitors", "says"),
    [
        ("7/10", 3, ["takes 5 flying capacitors", "2/3 and 3/4"]),
        ("-7/10", 4, ["takes 6 flying capacitors", "-2/3 and -3/4"]),
        ("9", 4, ["takes 5 flying capacitors", "nearest with at most 4: 8"]),
        ("24/11", 5, ["takes 6 flying capacitors", "13/6 and 11/5"]),
        ("1/100", 2, ["takes at most 10 flying capacitors", "1/3"]),
    ],
)
def test_out_of_reach_is_no_error(ratio, capacitors, says):
    done = run("list", "--ratio", ratio, "--capacitors", str(capacitors))
    assert done.returncode == 0
    assert all(text in done.stdout for text in ["0 converters", *says])
    in_json = json.loads(
        run("list", "--ratio", ratio, "--capacitors", str(capacitors), "--format", "json").stdout
    )
    assert (in_json["count"], in_json["count_all"], in_json["converters"]) == (0, 0, [])
    assert all(value in says[1] for value in in_json["nearest"])
    in_csv = run("list", "--ratio", ratio, "--capacitors", str(capacitors), "--format", "csv")
    assert len(in_csv.stdout.splitlines()) == 1
    assert says[0] in in_csv.stderr


def test_formats_agree_and_the_table_says_how_many_there_are():
    arguments = ("list", "--ratio", "3/4", "--capacitors", "3")
    found = json.loads(run(*arguments, "--format", "json").stdout)
    in_csv = list(csv.DictReader(io.StringIO(run(*arguments, "--format", "csv").stdout)))
    assert [row["id"] for row in in_csv] == [row["id"] for row in found["converters"]]
    assert [float(row["switch_utilisation"]) for row in in_csv] == [
        row["switch_utilisation"] for row in found["converters"]
    ]
    table = run(*arguments, "--limit", "2").stdout
    assert f"{found['count']} converters" in table
    assert f"2 of {found['count']} shown" in table
    assert sum(line.startswith("3-") for line in table.splitlines()) == 2


@pytest.mark.parametrize(
    ("options", "names"),
    [
        (("--ratio", "0", "--capacitors", "3"), "ratio"),
        (("--ratio", "2", "--capacitors", "0"), "capacitors: 0"),
        (("--ratio", "2", "--capacitors", "41"), "capacitors: 41"),
        (("--ratio", "2", "--capacitors", "3", "--limit", "-1"), "limit: -1"),
        (("--ratio", "2", "--capacitors", "3", "--switches", "-2"), "switches: -2"),
        (("--ratio", "2", "--capacitors", "3", "--family", "Marx"), "family: 'Marx'"),
        (("--ratio", "2", "--capacitors", "3", "--blocking-voltage", "nan"), "blocking voltage: nan"),
        (("--ratio", "2", "--capacitors", "3", "--switch-utilisation", "1.5"), "switch utilisation: 1.5"),
        (("--ratio", "2", "--capacitors", "3", "--output-evenness", "inf"), "output evenness: inf"),
    ],
)
def test_bad_bounds_are_one_clear_line(options, names):
    done = run("list", *options)
    assert done.returncode == 2
    assert done.stdout == ""
    (line,) = done.stderr.splitlines()
    assert names in line


def test_a_filter_out_of_range_is_refused_from_python_too():
    with pytest.raises(CapmusterError, match="capacitor utilisation: -1"):
        Filters(capacitor_utilisation=-1)
