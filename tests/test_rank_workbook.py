"""The spreadsheet read back by another library: formats, bars, assumptions, text that stays text."""

from __future__ import annotations

import io
import math
from dataclasses import replace

import openpyxl
import pytest

from capmuster.rank.files.export_workbook import to_workbook
from capmuster.rank.inputs.brief import load_brief
from capmuster.rank.shortlist import shortlist


def _read(found):
    return openpyxl.load_workbook(io.BytesIO(to_workbook(found)))


# openpyxl does not know the extension that keeps bars solid.
pytestmark = pytest.mark.filterwarnings("ignore:.*extension is not supported")


@pytest.fixture(scope="module", params=["pump-shelf", "greenhouse-node-losses"])
def found(request):
    return shortlist(load_brief(request.param), top=4)


@pytest.fixture(scope="module")
def book(found):
    return _read(found)


def test_table_is_the_frame_with_units_in_header_and_formats(found, book):
    sheet = book["Shortlist"]
    assert sheet.max_row == len(found) + 1
    symbols = {"mm2": "mm²", "S/mm2": "S/mm²", "W/mm2": "W/mm²", "ohm": "Ω"}
    for k, column in enumerate(found.columns, start=1):
        if column.unit and column.unit != "1":
            assert sheet.cell(1, k).value.endswith(f"[{symbols.get(column.unit, column.unit)}]")
        for r, value in enumerate(found.frame[column.name].tolist(), start=2):
            cell = sheet.cell(r, k)
            if isinstance(value, bool):
                assert (cell.value == "yes") == value
            elif isinstance(value, float) and not math.isnan(value):
                assert cell.value == pytest.approx(value, rel=1e-14, abs=1e-300)
                if column.unit == "1":
                    assert cell.number_format == "0.0%"
                elif column.unit:
                    assert cell.number_format.endswith(f'" {symbols.get(column.unit, column.unit)}"')
            elif isinstance(value, str):
                assert (cell.value or "") == value


def test_header_is_frozen_and_the_table_filters(book):
    assert book["Shortlist"].freeze_panes == "C2"
    assert book["Elements"].freeze_panes == "D2"
    assert book["Shortlist"].auto_filter.ref.startswith("A1:")
    assert book["Shortlist"].print_title_rows == "$1:$1"


def test_utilisations_have_bars_from_zero_to_one(book):
    sheet = book["Shortlist"]
    barred = set()
    for where, rules in sheet.conditional_formatting._cf_rules.items():
        for rule in rules:
            assert rule.type == "dataBar"
            assert [limit.val for limit in rule.dataBar.cfvo] == [0.0, 1.0]
            barred.add(sheet.cell(1, next(iter(where.sqref.ranges)).min_col).value.split(" [")[0])
    assert {"capacitor utilisation", "switch utilisation"} <= barred


def test_elements_stand_under_their_headings(found, book):
    sheet = book["Elements"]
    heads = [cell.value for cell in sheet[1]]
    assert None not in heads
    assert sheet.max_column == len(heads)
    rows = [dict(zip(heads, [cell.value for cell in row], strict=True)) for row in sheet.iter_rows(min_row=2)]
    listed = [(place, element) for place in range(len(found)) for element in found.elements(place)]
    assert len(rows) == len(listed)
    for row, (place, element) in zip(rows, listed, strict=True):
        assert row["place"] == place + 1
        assert row["element"] == element.name
        value = row["capacitance [F]"] if element.kind == "capacitor" else row["on-resistance [Ω]"]
        assert value == pytest.approx(element.value)
        assert row["must stand [V]"] == pytest.approx(element.voltage)
        assert row["stress [%]"] == pytest.approx(element.stress)
        if element.gate is not None:
            assert (row["gate while on [V]"], row["gate while off [V]"]) == pytest.approx(element.gate)
            assert row["gate supply"] == element.supply
            assert row["closed in phase"] == element.phase


def test_one_sheet_holds_the_assumptions(found, book):
    rows = {row[0].value: row[1].value for row in book["Assumptions"].iter_rows(min_row=2)}
    assert rows["job"] == found.brief.title
    assert rows["technology_fingerprint"] == found.brief.technology.fingerprint
    assert "column area" in rows


@pytest.mark.parametrize(
    "title", ["=1+1", "+1", "-1", "@SUM(A1)", '=HYPERLINK("http://x")', "http://example.org"]
)
def test_text_that_looks_like_a_formula_is_text(title):
    brief = load_brief("pump-shelf")
    technology = replace(
        brief.technology,
        capacitors=tuple(replace(one, name=f"={one.name}") for one in brief.technology.capacitors),
    )
    book = _read(shortlist(replace(brief, title=title, technology=technology), top=1))
    cells = [cell for sheet in book for row in sheet.iter_rows() for cell in row if cell.value is not None]
    assert all(cell.data_type != "f" for cell in cells)
    assert all(cell.hyperlink is None for cell in cells)
    assert title in [cell.value for cell in cells]
    assert any(str(cell.value).startswith("=ceramic") for cell in cells)


def test_same_shortlist_same_bytes(found):
    assert to_workbook(found) == to_workbook(found)
