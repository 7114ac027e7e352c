"""What other programs may rely on: the JSON and CSV of list, show, count and rank."""

from __future__ import annotations

import csv
import io
import json
from fractions import Fraction

import pytest

from capmuster.enumerate.wiring import Converter
from capmuster.rank.cli import main
from capmuster.rank.shortlist import shortlist  # noqa: F401 -- loaded once, not in the first test's time


@pytest.fixture
def called(capsys):
    """Run the command here; return what it prints."""

    def call(*arguments):
        with pytest.raises(SystemExit) as stopped:
            main(list(arguments))
        out, err = capsys.readouterr()
        assert stopped.value.code == 0, err
        return out

    return call


def test_list_has_the_promised_fields(called):
    found = json.loads(called("list", "--ratio", "2/5", "--capacitors", "4", "--format", "json"))
    assert list(found) == [
        "ratio", "max_capacitors", "complete_up_to", "count", "count_all", "converters",
    ]  # fmt: skip
    assert (found["ratio"], found["max_capacitors"], found["complete_up_to"]) == ("2/5", 4, 4)
    rows = found["converters"]
    assert len(rows) == found["count"] < found["count_all"]
    assert len({row["id"] for row in rows}) == len({row["wiring"] for row in rows}) == len(rows)
    for row in rows[:50]:
        assert list(row) == [
            "id", "wiring", "flying_capacitors", "switches", "ratio", "capacitor_utilisation",
            "switch_utilisation", "families",
        ]  # fmt: skip
        converter = Converter.parse(row["wiring"])
        assert (converter.id, converter.code) == (row["id"], row["wiring"])
        assert str(converter.ratio) == row["ratio"] == "2/5"
        assert converter.n == row["flying_capacitors"] <= 4
        assert 0 < row["capacitor_utilisation"] <= 1
        assert 0 < row["switch_utilisation"] <= 1
        assert isinstance(row["families"], list)


def test_list_counts_before_the_limit_and_all_includes_what_is_not_clean(called):
    arguments = ("list", "--ratio", "1/2", "--capacitors", "3", "--format", "json")
    clean = json.loads(called(*arguments))
    limited = json.loads(called(*arguments, "--limit", "2"))
    everything = json.loads(called(*arguments, "--all"))
    assert len(limited["converters"]) == 2
    assert limited["converters"] == clean["converters"][:2]
    assert [limited[name] for name in ("count", "count_all")] == [clean["count"], clean["count_all"]]
    assert len(everything["converters"]) == clean["count_all"]
    assert {one["id"] for one in clean["converters"]} < {one["id"] for one in everything["converters"]}


def test_list_beyond_the_census_adds_families_that_the_counts_leave_out(called):
    most = json.loads(called("list", "--ratio", "9", "--capacitors", "5", "--format", "json"))[
        "complete_up_to"
    ]
    found = json.loads(
        called("list", "--ratio", "13", "--capacitors", "12", "--format", "json", "--limit", "40")
    )
    assert found["complete_up_to"] < 12
    assert found["complete_up_to"] >= most > 0
    beyond = [one for one in found["converters"] if one["flying_capacitors"] > found["complete_up_to"]]
    # Common practice: series-parallel and Dickson reach 1:13 with 12 capacitors.
    assert {"series-parallel", "Dickson"} <= {name for one in beyond for name in one["families"]}
    assert found["count"] <= len(found["converters"]) - len(beyond)


def test_list_out_of_reach_is_no_error_and_helps(called):
    # Makowski and Maksimovic 1995: 4 takes P <= F, so three capacitors reach at most 5, and 6 takes four.
    found = json.loads(called("list", "--ratio", "6", "--capacitors", "3", "--format", "json"))
    assert (found["count"], found["count_all"], found["converters"]) == (0, 0, [])
    assert found["nearest"] == ["5"]
    assert found["capacitors_needed"] == 4
    inverting = json.loads(called("list", "--ratio", "-9/4", "--capacitors", "3", "--format", "json"))
    assert all(Fraction(one) < 0 for one in inverting["nearest"])
    assert "takes 4 flying capacitors" in called("list", "--ratio", "6", "--capacitors", "3")


@pytest.mark.parametrize(
    "wiring", ["I-G/O-I", "I-G/a-I I-G/O-a", "a-G/a-O O-a/b-O O-a/I-b O-G/I-a", "G-I/O-G"]
)
def test_show_is_exact_and_consistent(called, wiring):
    code = Converter.parse(wiring).code
    found = json.loads(called("show", wiring, "--format", "json"))
    for name in ("id", "wiring", "ratio", "capacitors", "switches"):
        assert name in found
    assert found["wiring"] == code
    assert json.loads(called("show", found["id"], "--format", "json")) == found
    ratio = Fraction(found["ratio"])
    for one in found["capacitors"]:
        assert {"name", "multiplier", "voltage"} <= set(one)
    for one in found["switches"]:
        assert {"name", "nodes", "phase", "multiplier", "blocking_voltage"} <= set(one)
        assert len(one["nodes"]) == 2
        assert one["phase"] in (1, 2)
    # Seeman and Sanders 2008; energy lifted per output energy: |1 - M|, |1 - 1/M|, or 1 when inverting.
    lifted = 1 if ratio < 0 else abs(1 - ratio) / max(ratio, 1)
    lifted *= abs(ratio)
    over_capacitors = sum(Fraction(c["multiplier"]) * Fraction(c["voltage"]) for c in found["capacitors"])
    over_switches = sum(
        Fraction(s["multiplier"]) * Fraction(s["blocking_voltage"]) for s in found["switches"]
    )
    assert Fraction(found["capacitor_utilisation"]) == lifted / over_capacitors
    assert Fraction(found["switch_utilisation"]) == 4 * lifted / over_switches
    assert found["clean"] is True


def test_show_csv_has_the_rows_of_json(called):
    found = json.loads(called("show", "I-G/a-I I-G/O-a", "--format", "json"))
    rows = list(csv.DictReader(io.StringIO(called("show", "I-G/a-I I-G/O-a", "--format", "csv"))))
    assert [row["element"] for row in rows] == [
        one["name"] for one in found["capacitors"] + found["switches"]
    ]
    assert [row["charge multiplier"] for row in rows] == [
        one["multiplier"] for one in found["capacitors"] + found["switches"]
    ]


@pytest.mark.parametrize(("n", "labelled"), [(1, 12), (2, 864), (3, 220608)])  # 12 and 864: the issue's own
def test_count_has_the_promised_fields(called, n, labelled):
    found = json.loads(called("count", str(n), "--format", "json"))
    assert list(found) == [
        "max_capacitors", "cells", "degenerate", "clean", "unity", "labelled_listed", "labelled_counted",
        "triples",
    ]  # fmt: skip
    assert found["max_capacitors"] == n
    assert found["labelled_listed"] == found["labelled_counted"] == labelled
    assert sum(found["triples"].values()) == found["cells"] >= found["degenerate"] + found["clean"]
    for triple in found["triples"]:
        a, b, c = map(int, triple.split(","))
        assert 0 < a <= b
        assert a + b == c


def test_rank_csv_json_and_table_agree(called):
    arguments = ("rank", "greenhouse-node", "--top", "7")
    rows = list(csv.DictReader(io.StringIO(called(*arguments, "--format", "csv"))))
    found = json.loads(called(*arguments, "--format", "json"))
    table = called(*arguments)
    assert [row["id"] for row in rows] == [one["id"] for one in found["candidates"]]
    assert len(rows) == 7
    assert [int(row["place"]) for row in rows] == list(range(1, 8))
    for row, one in zip(rows, found["candidates"], strict=True):
        assert float(row["area_mm2"]) == one["area_mm2"]
        assert row["wiring"] == one["wiring"]
        assert row["id"] in table
        assert Converter.parse(row["wiring"]).id == row["id"]
    assert "conduction only" in table
    assert set(found["units"]) == set(found["candidates"][0]) - {"elements"}
    assert found["units"]["area_mm2"] == "mm2"


def test_rank_shows_the_columns_that_are_asked_for(called):
    names = "wiring,area_mm2,efficiency_minimum,id"
    arguments = ("rank", "pump-shelf", "--top", "3", "--columns", names)
    rows = list(csv.DictReader(io.StringIO(called(*arguments, "--format", "csv"))))
    assert list(rows[0])[:4] == names.split(",")
    every = list(csv.DictReader(io.StringIO(called(*arguments[:4], "--format", "csv"))))
    assert [row["area_mm2"] for row in rows] == [row["area_mm2"] for row in every]
    lines = called(*arguments).splitlines()
    heading = next(line for line in lines if line.startswith("wiring"))
    assert heading.split("  ")[0] == "wiring"
    assert "area [mm²]" in heading
    assert any(line.startswith(rows[0]["wiring"]) and line.endswith(rows[0]["id"]) for line in lines)


def test_the_table_of_rank_fits_a_wide_terminal(called):
    for brief in ("greenhouse-node", "greenhouse-node-regulated", "pump-shelf"):
        lines = called("rank", brief, "--top", "5").splitlines()
        heading = next(k for k, line in enumerate(lines) if line.startswith("place"))
        assert all(len(line) <= 160 for line in lines[heading - 2 : heading + 6])
        assert lines[heading].index("families") < 140


def test_table_output_ends_with_one_newline(called):
    for arguments in (["show", "1-0h"], ["rank", "pump-shelf", "--top", "1"], ["count", "1"]):
        out = called(*arguments)
        assert out.endswith("\n")
        assert not out.endswith("\n\n")
