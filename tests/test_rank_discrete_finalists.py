"""The finalists of a board brief, built from parts: the whole way, and the command."""

from __future__ import annotations

import csv
import io
import json
import math
import subprocess
import sys
from dataclasses import replace
from fractions import Fraction
from pathlib import Path

import numpy as np
import openpyxl
import pytest
from command import environment, run
from scipy.optimize import Bounds, LinearConstraint, milp

from capmuster import catalogs
from capmuster.enumerate.errors import CapmusterError
from capmuster.enumerate.wiring import Converter
from capmuster.rank.cli import main
from capmuster.rank.discrete.blends import LOOP, QUADRATIC
from capmuster.rank.discrete.bulk import pool_bounds
from capmuster.rank.discrete.certify import certify
from capmuster.rank.discrete.choose import choose_parts
from capmuster.rank.discrete.labels import search
from capmuster.rank.discrete.options import NoPartError, OptionBook, Units
from capmuster.rank.discrete.problem import pose, reported, resolved, stacked
from capmuster.rank.discrete.relaxed import relax
from capmuster.rank.discrete.report import COLUMNS, ELEMENT_COLUMNS, TERMS, document, element_frame, frame
from capmuster.rank.discrete.slots import slots_of
from capmuster.rank.inputs.brief import load_brief
from capmuster.rank.inputs.parts import Stock
from capmuster.rank.pool import gather
from capmuster.rank.scores.switching import switch_network

SHELF = load_brief("pump-shelf")
HELD = replace(SHELF, use="regulated", required=10.0, efficiency_floor=None, objective="least-loss", duty=0.4)
QUARTERS = replace(SHELF, ratios=(Fraction(1, 4),), most_capacitors=3)


def alone(brief, request, converter):
    """Best value of one converter over all frequencies, without any screening."""
    request = resolved(request, brief)
    counts = (True, True)  # more options than needed change nothing
    values = [math.inf]
    for frequency in request.frequencies:
        book = OptionBook(request, Units.of(request), frequency, counts)
        try:
            problem = pose(slots_of(converter, brief), converter.ratio, brief, book, QUADRATIC)
        except NoPartError:
            continue
        found = certify(problem, search(problem))
        assert found.proven
        scale = {"footprint": 1 / book.units.per_mm2, "price": 1 / book.units.per_eur, "loss": 1.0}
        values.append(
            found.objective * scale[request.least] + (problem.offset if request.least == "loss" else 0)
        )
    return min(values)


@pytest.mark.parametrize(
    "changes",
    [
        pytest.param({"footprint": 420.0}, id="loss"),
        pytest.param(
            {"least": "footprint", "footprint": None, "efficiency": 0.98},
            id="footprint",
            marks=pytest.mark.long,
        ),
        pytest.param(
            {"footprint": 420.0, "price": 11.0, "frequencies": (80e3, 160e3)},
            id="two budgets and frequencies",
            marks=pytest.mark.long,
        ),
        pytest.param({"least": "price", "footprint": 500.0, "loss": 2.5}, id="price", marks=pytest.mark.long),
    ],
)
def test_screening_loses_no_finalist(changes):
    request = replace(SHELF.parts, **changes)
    found = choose_parts(QUARTERS, request, top=3)
    pool = gather(replace(QUARTERS, area=None))
    converters = [pool.converter(k) for k in range(len(pool))]
    expected = sorted((alone(QUARTERS, request, one), one.n, one.id) for one in converters)
    assert found.candidates == len(pool)
    assert [one.objective for one in found.finalists] == pytest.approx(
        [value for value, *_ in expected[: len(found)]], rel=1e-9
    )
    assert len(found) == min(3, sum(value < math.inf for value, *_ in expected))
    for one in found.finalists:
        assert one.proven
        assert one.relaxed <= one.bound * (1 + 1e-7)
        assert one.bound <= one.objective
        assert one.gap <= 1e-7
        assert one.highest_stress <= 1 + 1e-9
        assert request.footprint is None or one.footprint <= request.footprint
        assert request.price is None or one.price <= request.price
        assert request.loss is None or one.operating.losses.total <= request.loss * (1 + 1e-9)
        assert request.efficiency is None or one.operating.efficiency >= request.efficiency - 1e-9
        assert one.conditions[0].output_voltage >= QUARTERS.required * (1 - 1e-9)
    assert found.exact
    assert f"No other of all {len(pool)} candidates has less {request.least}" in found.certificate


def test_a_general_integer_solver_finds_no_better_parts():
    # HiGHS, by scipy, with the quadratic blend as 400 tangents: they are low by 1 - cos(half a step) at most.
    request = resolved(SHELF.parts, SHELF)
    book = OptionBook(request, Units.of(request), SHELF.frequency, (True, False))
    converter = Converter.parse("O-G/a-O a-O/O-G a-G/I-a")
    problem = pose(slots_of(converter, SHELF), converter.ratio, SHELF, book, QUADRATIC)
    slow, fast, fixed, area = (stacked(problem, name) for name in ("slow", "fast", "fixed", "footprint"))
    angles = np.linspace(0, np.pi / 2, 400)
    tangents = np.cos(angles)[:, None] * slow + np.sin(angles)[:, None] * fast
    sizes = [len(group.options) for group in problem.groups]
    groups = np.repeat(np.eye(len(sizes)), sizes, axis=1)
    members = [len(group.names) for group in problem.groups]
    result = milp(
        np.append(fixed, problem.square_current),
        integrality=[1] * sum(sizes) + [0],
        bounds=Bounds(0, np.append(np.repeat(members, sizes), problem.impedance_limit)),
        constraints=[
            LinearConstraint(np.column_stack([tangents, -np.ones(len(angles))]), ub=0),
            LinearConstraint(np.append(area, 0.0), ub=problem.footprint),
            LinearConstraint(np.column_stack([groups, np.zeros(len(sizes))]), members, members),
        ],
        options={"mip_rel_gap": 1e-9},
    )
    assert result.status == 0
    ours = search(problem).objective
    assert result.fun <= ours * (1 + 1e-7)
    assert result.fun >= ours * math.cos(angles[1] / 2) * (1 - 1e-7)


@pytest.mark.parametrize(
    ("brief", "changes"),
    [
        pytest.param(SHELF, {}, id="loss"),
        pytest.param(
            SHELF,
            {"least": "price", "footprint": None, "efficiency": 0.97, "series": 2},
            id="price",
            marks=pytest.mark.long,
        ),
        pytest.param(HELD, {"frequencies": (60e3, 120e3)}, id="regulated", marks=pytest.mark.long),
    ],
)
def test_bounds_of_a_pool_are_those_of_its_candidates_one_by_one(brief, changes):
    request = resolved(replace(SHELF.parts, **changes), brief)
    pool = gather(replace(brief, objective="conduction-area", duty=0.5, area=None))
    units = Units.of(request)
    books = [OptionBook(request, units, frequency, (True, True)) for frequency in request.frequencies]

    def problems(converter):
        slots = slots_of(converter, brief)
        return [pose(slots, converter.ratio, brief, book, QUADRATIC) for book in books]

    seeds = [
        problems(Converter.parse(code)) for code in ("O-G/a-O O-G/b-a O-G/I-b", "O-G/a-O a-O/O-G a-G/I-a")
    ]
    prices = [[relax(seed[b]).multipliers for seed in seeds] for b in range(len(books))]
    known = pool_bounds(pool, brief, books, prices, QUADRATIC)
    rng = np.random.default_rng(1)
    able, lacking = np.flatnonzero(~known.lacking), np.flatnonzero(known.lacking)
    for place in [*rng.choice(able, 40, replace=False), *lacking[:10]]:
        try:
            posed = problems(pool.converter(place))
        except NoPartError:
            assert known.lacking[place]
            continue
        assert not known.lacking[place]
        expected = min(
            reported(problem, units, max(one.bound(problem) for one in here))
            for problem, here in zip(posed, prices, strict=True)
        )
        if known.bounds[place] < math.inf:
            assert known.bounds[place] == pytest.approx(expected, rel=1e-9)
        else:  # so small a budget that the least of every element is above it, or no impedance is left
            assert all(search(problem).selection is None for problem in posed)


def test_finalists_are_in_order_and_complete():
    found = choose_parts(SHELF, SHELF.parts, top=4)
    assert [one.objective for one in found.finalists] == sorted(one.objective for one in found.finalists)
    assert len(found) <= found.searched < found.candidates
    table, elements = frame(found), element_frame(found)
    assert list(table.columns) == [column.name for column in COLUMNS]
    assert list(elements.columns) == [column.name for column in ELEMENT_COLUMNS]
    assert table.attrs["units"]["footprint_mm2"] == "mm2"
    sums = elements.groupby("place")[["footprint_mm2", "price_EUR"]].sum()
    assert sums["footprint_mm2"].to_list() == pytest.approx(table["footprint_mm2"].to_list())
    assert sums["price_EUR"].to_list() == pytest.approx(table["price_EUR"].to_list())
    assert (table["footprint_mm2"] <= SHELF.parts.footprint).all()
    terms = table[[f"loss_{term}_W" for term in TERMS]].sum(axis=1)
    assert terms.to_list() == pytest.approx(table["loss_W"].to_list())
    assert (elements["stress"] <= 1 + 1e-9).all()
    # The exact impedance is never above the sum of both limits, nor below the loop blend.
    lead = SHELF.technology.wiring_resistance
    for _, row in table.iterrows():
        assert row.exact_impedance_ohm <= row.slow_limit_ohm + row.fast_limit_ohm + lead
        loop = float(LOOP.value(row.slow_limit_ohm, row.fast_limit_ohm))
        assert row.exact_impedance_ohm >= (loop + lead) * (1 - 1e-9)


def test_an_included_wiring_is_ranked_clean_or_not():
    wiring = Converter.parse("O-G/a-O O-G/b-a O-G/I-b")
    found = choose_parts(SHELF, SHELF.parts, top=2, include=[wiring])
    assert found.finalists[1].converter == wiring
    plain = choose_parts(SHELF, SHELF.parts, top=2)
    assert [one.objective for one in plain.finalists] == [one.objective for one in found.finalists]
    idle = Converter.parse("O-G/a-O G-a/a-G G-a/I-a")
    assert not switch_network(idle).clean
    alone_there = choose_parts(QUARTERS, SHELF.parts, top=1, include=[idle])
    assert alone_there.candidates == choose_parts(QUARTERS, SHELF.parts, top=1).candidates + 1


def test_without_parts_or_room_nothing_is_found_and_the_reason_is_counted():
    targeted = {"least": "price", "footprint": None, "efficiency": 0.999}
    for changes in ({"footprint": 5.0}, targeted, {**targeted, "efficiency": 0.98, "footprint": 200.0}):
        none = choose_parts(QUARTERS, replace(SHELF.parts, **changes))
        assert len(none) == 0
        assert none.left_out == {"no choice of parts keeps the limits": none.candidates}
        assert none.certificate == "No candidate can be built from the stock within the limits."
    low = Stock(SHELF.parts.stock.names, SHELF.parts.stock.capacitors[:1], SHELF.parts.stock.switches)
    lacking = choose_parts(QUARTERS, replace(SHELF.parts, stock=low))
    assert lacking.left_out == {"no part of the stock stands a voltage": lacking.candidates}
    with pytest.raises(CapmusterError, match="top: 0 is too small"):
        choose_parts(QUARTERS, SHELF.parts, top=0)


def test_regulated_use_takes_the_least_fixed_loss_that_still_holds():
    brief = replace(QUARTERS, use="regulated", required=10.5, efficiency_floor=None)
    found = choose_parts(brief, SHELF.parts, top=2)
    assert len(found) == 2
    for one in found.finalists:
        at, losses = one.operating, one.operating.losses
        assert at.input_voltage == brief.input_minimum
        assert at.output_voltage == 10.5
        assert losses.held == pytest.approx((11 - 10.5) * 8)
        assert losses.redistribution == losses.on_resistance == losses.wiring == 0
        assert at.impedance <= 0.5 / 8 * (1 + 1e-9)


def test_what_falls_short_or_needs_care_is_said():
    brief = replace(QUARTERS, efficiency_floor=0.985)
    request = replace(SHELF.parts, least="price", footprint=None, efficiency=0.97)
    found = choose_parts(replace(brief, efficiency_floor=None), request, top=1)
    assert not any("floor" in text for text in found.cautions)
    told = replace(found, brief=brief).cautions
    worst = min(condition.efficiency for condition in found.finalists[0].conditions)
    assert any(f"Place 1 reaches {worst:.1%}".replace("%", " %") in text for text in told)
    assert any("V between terminals" in text for text in told)
    stock = SHELF.parts.stock
    low = replace(stock, switches=tuple(one for one in stock.switches if one.rating <= 30))
    stacked_up = choose_parts(QUARTERS, replace(SHELF.parts, stock=low, series=2), top=1)
    assert any("parts in series" in text for text in stacked_up.cautions)


# The command.


@pytest.fixture(scope="module")
def quarters(tmp_path_factory):
    """Write a brief of few candidates and return its path."""
    text = catalogs.find("briefs", "pump-shelf").read_text(encoding="utf-8")
    narrow = text.replace('ratios = "any"', 'ratios = ["1/4"]').replace("capacitors = 4", "capacitors = 3")
    assert narrow.count("1/4") > text.count("1/4")
    path = tmp_path_factory.mktemp("briefs") / "quarters.toml"
    path.write_text(narrow, encoding="utf-8")
    return str(path)


def call(capsys, *arguments):
    """Run the command in this process: exit status, what it wrote, what it complained of."""
    with pytest.raises(SystemExit) as left:
        main(["parts", *arguments])
    written = capsys.readouterr()
    return left.value.code, written.out, written.err


@pytest.mark.long
def test_the_command_gives_the_same_bytes_each_time(quarters):
    arguments = ("parts", quarters, "--top", "2", "--format", "json")
    first, second = run(*arguments), run(*arguments)
    assert first.returncode == 0, first.stderr
    assert first.stdout == second.stdout
    content = json.loads(first.stdout)
    brief = load_brief(quarters)
    expected = document(choose_parts(brief, brief.parts, top=2))
    assert content == json.loads(json.dumps(expected))
    assert [one["place"] for one in content["finalists"]] == [1, 2]
    origin = content["provenance"]
    assert origin["stock_fingerprint"] == SHELF.parts.stock.fingerprint
    other = json.loads(run(*arguments, "--temperature", "90 degC").stdout)["provenance"]
    assert {name for name in origin if origin[name] != other[name]} == {"request_fingerprint"}


def test_the_command_writes_rows_of_candidates_and_of_elements(capsys, quarters):
    common = (quarters, "--top", "1", "--footprint", "4.5 cm2", "--format", "csv")
    (row,) = csv.DictReader(io.StringIO(call(capsys, *common)[1]))
    elements = list(csv.DictReader(io.StringIO(call(capsys, *common, "--elements")[1])))
    assert float(row["footprint_mm2"]) <= 450
    assert row["proven"] == "True"
    assert len(elements) == int(row["flying_capacitors"]) + int(row["switches"])
    assert sum(int(one["parallel"]) * int(one["series"]) for one in elements) == int(row["parts"])


def test_the_command_says_what_was_asked_and_what_is_proven(capsys, quarters):
    changes = ("--least", "price", "--efficiency", "98 %", "--temperature", "100 degC")
    changes += ("--capacitor-derating", "70 %")
    status, text, _ = call(capsys, quarters, "--top", "1", *changes)
    assert status == 0
    assert "made least         price" in text
    assert "efficiency at least 98 %" in text
    assert "junctions at       100 degC" in text
    assert "capacitors to 70 %, switches to 80 % of the rating" in text
    assert "proven best" in text
    assert "has less price than place 1." in text


def test_files_hold_what_the_command_prints_and_the_same_bytes_each_time(capsys, quarters, tmp_path):
    names = ("parts.csv", "parts.json", "parts.xlsx")
    first, second = tmp_path / "first", tmp_path / "second"
    for folder in (first, second):
        folder.mkdir()
        targets = [word for name in names for word in ("--to", str(folder / name))]
        status, text, _ = call(capsys, quarters, "--top", "2", *targets)
        assert status == 0
        assert text.count("Written: ") == 3
        assert "proven best" in text
    for name in names:
        assert (first / name).read_bytes() == (second / name).read_bytes()
    printed = call(capsys, quarters, "--top", "2", "--format", "csv", "--elements")[1]
    assert (first / "parts.csv").read_text(encoding="utf-8") == printed
    printed = call(capsys, quarters, "--top", "2", "--format", "json")[1]
    assert json.loads((first / "parts.json").read_text(encoding="utf-8")) == json.loads(printed)
    book = openpyxl.load_workbook(first / "parts.xlsx")
    assert book.sheetnames == ["Finalists", "Parts", "Settings"]
    header, *rows = book["Parts"].iter_rows(values_only=True)
    assert len(header) == len(ELEMENT_COLUMNS)
    part = header.index("part")
    listed = (first / "parts.csv").read_text(encoding="utf-8")
    assert [row[part] for row in rows] == [line["part"] for line in csv.DictReader(io.StringIO(listed))]
    notes = dict(row[:2] for row in book["Settings"].iter_rows(values_only=True))
    assert notes["certificate"] == json.loads(printed)["certificate"]


def test_nothing_is_written_where_one_file_cannot_be(capsys, quarters, tmp_path):
    complaints = {"no.pdf": "unknown suffix", "none/a.csv": "does not exist", "a.csv": "named twice"}
    for other, complaint in complaints.items():
        targets = ("--to", str(tmp_path / "a.csv"), "--to", str(tmp_path / other))
        status, text, error = call(capsys, quarters, *targets)
        assert (status, text) == (2, "")
        assert complaint in error
        assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (("greenhouse-node",), "is for a chip"),
        (("no-such",), "unknown brief 'no-such'"),
        (("pump-shelf", "--footprint", "3 V"), "--footprint: value '3 V' has the wrong unit"),
        (("pump-shelf", "--price", "-1"), "--price: value '-1' is negative"),
        (("pump-shelf", "--efficiency", "120 %"), "parts.efficiency: value 1.2 is not allowed"),
        (("pump-shelf", "--frequency", "0 Hz"), "--frequency: value '0 Hz' is zero"),
        (("pump-shelf", "--temperature", "400 degC"), "parts.temperature: value 400 is not allowed"),
        (("pump-shelf", "--loss", "2 W", "--efficiency", "90 %"), "loss and efficiency are both given"),
        (("pump-shelf", "--switch-derating", "110 %"), "parts.switch_derating: value 1.1 is not allowed"),
        (("pump-shelf", "--series", "0"), "parts.series: value 0 is not allowed"),
        (("pump-shelf", "--top", "0"), "top: 0 is too small"),
        (("pump-shelf", "--include", "I-G"), "I-G"),
    ],
)
def test_bad_input_is_one_line_and_status_2(capsys, arguments, message):
    status, text, complaint = call(capsys, *arguments)
    assert status == 2
    assert text == ""
    assert message in complaint
    assert len(complaint.strip().splitlines()) == 1


def test_a_board_brief_without_a_table_of_parts_takes_the_shipped_ones(capsys, quarters, tmp_path):
    text = Path(quarters).read_text(encoding="utf-8")
    path = tmp_path / "plain.toml"
    path.write_text(text[: text.index("[parts]")], encoding="utf-8")
    status, written, _ = call(capsys, str(path), "--top", "1", "--format", "json")
    assert status == 0
    settings = json.loads(written)["settings"]
    assert settings["budgets"] == "footprint 800 mm²"
    assert settings["parts"].startswith("board-ceramics and board-mosfets")


def test_help_loads_no_solver():
    code = (
        "import sys, atexit; from capmuster.rank.cli import main;"
        "atexit.register(lambda: print('loaded', sorted({'ortools', 'scipy', 'pandas'} & set(sys.modules))));"
        "main(['parts', '--help'])"
    )
    done = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, env=environment(), check=True
    )
    assert "Examples:" in done.stdout
    assert done.stdout.strip().endswith("loaded []")
