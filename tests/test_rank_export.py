"""Shortlists as files, read back with libraries that know nothing of the project."""

from __future__ import annotations

import csv
import io
import json
import os
import signal
import subprocess
import sys
import time
from dataclasses import replace
from html import unescape

import openpyxl
import pytest
from command import environment
from markdown_it import MarkdownIt

from capmuster.enumerate.errors import CapmusterError
from capmuster.enumerate.wiring import Converter
from capmuster.rank._version import __version__
from capmuster.rank.files import export as exporting
from capmuster.rank.files.export import SUFFIXES, export
from capmuster.rank.inputs.brief import load_brief
from capmuster.rank.shortlist import shortlist

# openpyxl does not know data bars of one colour, which xlsxwriter writes as an extension.
pytestmark = pytest.mark.filterwarnings("ignore:.*extension is not supported")

HOSTILE = '=HYPERLINK("http://example.invalid","x") | <script>alert(1)</script> *bold* [a](b) `c`'


@pytest.fixture(scope="module")
def ranked():
    return shortlist(load_brief("greenhouse-node"), top=6, include=[Converter.parse("I-G/O-I")])


@pytest.fixture(scope="module")
def hostile():
    return shortlist(replace(load_brief("pump-shelf"), title=HOSTILE), top=2)


@pytest.fixture(scope="module")
def files(ranked, tmp_path_factory):
    folder = tmp_path_factory.mktemp("files")
    paths = [folder / f"shortlist{suffix}" for suffix in SUFFIXES]
    export(ranked, paths)
    return {path.suffix: path for path in paths}


def test_every_suffix_is_written_and_nothing_else(files):
    folder = files[".csv"].parent
    assert sorted(one.name for one in folder.iterdir()) == sorted(f"shortlist{one}" for one in SUFFIXES)
    assert all(path.stat().st_size > 500 for path in files.values())


def test_the_same_input_gives_the_same_bytes(files, ranked, tmp_path):
    again = [tmp_path / path.name.upper() for path in files.values()]  # suffixes in capitals are as good
    time.sleep(1.1)  # a date in a file would differ by now
    export(shortlist(ranked.brief, top=6, include=[Converter.parse("I-G/O-I")]), again)
    for path, other in zip(files.values(), again, strict=True):
        assert path.read_bytes() == other.read_bytes(), path.suffix


def test_every_file_says_where_it_came_from(files, ranked):
    import pyarrow.parquet as pq  # noqa: PLC0415 -- an optional extra

    assert ranked.provenance["capmuster_version"] == __version__
    for suffix, path in files.items():
        if suffix in (".csv", ".json", ".md", ".html"):
            text = path.read_text(encoding="utf-8")
        elif suffix == ".xlsx":
            sheet = openpyxl.load_workbook(path)["Assumptions"]
            text = " ".join(str(cell.value) for row in sheet.iter_rows() for cell in row)
        else:
            text = str(pq.read_schema(path).metadata)
        for value in ranked.provenance.values():
            assert value in text, suffix


def test_csv_is_the_frame(files, ranked):
    rows = list(csv.DictReader(io.StringIO(files[".csv"].read_text(encoding="utf-8"))))
    frame = ranked.frame
    assert list(rows[0]) == [*frame.columns, *ranked.provenance]
    for name in frame.columns:
        for row, value in zip(rows, frame[name].tolist(), strict=True):
            kind = type(value)
            assert (row[name] == "True" if kind is bool else kind(row[name])) == value


def test_json_holds_everything(files, ranked):
    found = json.loads(files[".json"].read_text(encoding="utf-8"))
    assert found["provenance"] == ranked.provenance
    assert found["search"]["candidates"] == len(ranked.pool)
    assert found["search"]["considered"] == len(ranked.pool) + sum(ranked.pool.left_out.values())
    for one in found["candidates"]:
        areas = {
            kind: sum(e["area"] for e in one["elements"] if e["kind"] == kind)
            for kind in ("capacitor", "switch")
        }
        assert areas["capacitor"] == pytest.approx(one["capacitor_area_mm2"], rel=1e-12)
        assert areas["switch"] == pytest.approx(one["silicon_area_mm2"], rel=1e-12)
        assert max(e["stress"] for e in one["elements"]) <= 1 + 1e-9
        assert isinstance(one["families"], list)


def test_workbook_is_made_for_people(files, ranked):
    book = openpyxl.load_workbook(files[".xlsx"])
    assert book.sheetnames == ["Shortlist", "Elements", "Assumptions"]
    sheet = book["Shortlist"]
    assert sheet.freeze_panes == "C2"
    assert sheet.max_row == len(ranked) + 1
    headings = [cell.value for cell in sheet[1]]
    assert "area [mm²]" in headings
    area = headings.index("area [mm²]")
    assert sheet.cell(2, area + 1).value == pytest.approx(ranked.frame["area_mm2"][0], rel=1e-12)
    efficiency = headings.index("efficiency at V_in min [%]")
    assert sheet.cell(2, efficiency + 1).number_format == "0.0%"
    assert sheet.cell(2, efficiency + 1).value == pytest.approx(ranked.frame["efficiency_minimum"][0])
    assert sheet.conditional_formatting  # bars
    elements = book["Elements"]
    assert elements.max_row == 1 + sum(len(ranked.elements(k)) for k in range(len(ranked)))
    assert all(page.page_setup.orientation == "landscape" for page in book)


def test_parquet_has_a_unit_for_every_column(files, ranked):
    import pyarrow.parquet as pq  # noqa: PLC0415 -- an optional extra

    table = pq.read_table(files[".parquet"])
    units = {field.name: (field.metadata or {}).get(b"unit", b"").decode() for field in table.schema}
    for column in ranked.columns:
        assert units[column.name] == column.unit
    assert table["area_mm2"].to_pylist() == ranked.frame["area_mm2"].tolist()
    assert table["pareto"].to_pylist() == ranked.frame["pareto"].tolist()


def test_markdown_renders_as_written(files, ranked):
    html = MarkdownIt("commonmark").enable("table").render(files[".md"].read_text(encoding="utf-8"))
    assert html.count("<table>") == 2 + len(ranked)
    assert html.count("<h2>") == len(ranked)
    for place in range(len(ranked)):
        assert f"<code>{ranked.pool.code(place)}</code>" in html
    assert "Area_" not in html
    assert "<em>" not in html


def test_a_hostile_title_stays_text(hostile, tmp_path):
    paths = {suffix: tmp_path / f"x{suffix}" for suffix in SUFFIXES}
    export(hostile, list(paths.values()))
    book = openpyxl.load_workbook(paths[".xlsx"])
    cells = [cell for sheet in book for row in sheet.iter_rows() for cell in row]
    assert HOSTILE in [cell.value for cell in cells]
    assert not [cell for cell in cells if cell.data_type == "f" or cell.hyperlink]
    html = (
        MarkdownIt("commonmark", {"html": True})
        .enable("table")
        .render(paths[".md"].read_text(encoding="utf-8"))
    )
    assert "<script" not in html
    assert "<strong>bold" not in html
    assert "<a " not in html
    assert HOSTILE in unescape(html)
    assert "<script>alert(1)" not in paths[".html"].read_text(encoding="utf-8")


def test_a_csv_cell_never_starts_a_formula(hostile):
    """Common practice: a spreadsheet runs a CSV cell that begins with =, +, - or @ and is no number."""
    from capmuster.rank.files.export_text import to_csv  # noqa: PLC0415

    for row in csv.reader(io.StringIO(to_csv(hostile).decode())):
        for cell in row:
            if cell[:1] in ("=", "+", "-", "@"):
                float(cell)


def test_all_or_none(ranked, tmp_path, monkeypatch):
    kept = tmp_path / "a.csv"
    kept.write_text("before", encoding="utf-8")

    def failing(_):
        raise CapmusterError("cannot be rendered")

    monkeypatch.setattr("capmuster.rank.files.export_workbook.to_workbook", failing)
    with pytest.raises(CapmusterError, match="cannot be rendered"):
        export(ranked, [kept, tmp_path / "b.xlsx"])
    assert [one.name for one in tmp_path.iterdir()] == ["a.csv"]
    assert kept.read_text(encoding="utf-8") == "before"


def test_a_full_disk_changes_nothing(ranked, tmp_path, monkeypatch):
    kept = tmp_path / "a.csv"
    kept.write_text("before", encoding="utf-8")
    real, calls = os.fsync, []

    def full(handle):
        calls.append(handle)
        if len(calls) == 2:
            raise OSError(28, "No space left on device")
        real(handle)

    monkeypatch.setattr(exporting.os, "fsync", full)
    with pytest.raises(CapmusterError, match="No space left on device"):
        export(ranked, [kept, tmp_path / "b.json"])
    assert [one.name for one in tmp_path.iterdir()] == ["a.csv"]
    assert kept.read_text(encoding="utf-8") == "before"


SLOW_WRITE = """
import sys, time
from pathlib import Path
from capmuster.rank.files import export
real = export.os.fsync
def slow(handle):
    print("writing", flush=True)
    time.sleep(20)
export.os.fsync = slow
export.write_all([Path(sys.argv[1])], [b"after" * 100000])
"""


@pytest.mark.parametrize("how", [signal.SIGINT, signal.SIGKILL])
def test_a_process_that_dies_while_it_writes_leaves_the_old_file(tmp_path, how):
    kept = tmp_path / "a.csv"
    kept.write_text("before", encoding="utf-8")
    with subprocess.Popen(
        [sys.executable, "-c", SLOW_WRITE, str(kept)],
        env=environment(),
        stdout=subprocess.PIPE,
        stderr=subprocess.DEVNULL,
        encoding="utf-8",
    ) as writing:
        assert writing.stdout.readline() == "writing\n"
        writing.send_signal(how)
        writing.wait(timeout=30)
    assert kept.read_text(encoding="utf-8") == "before"
    if how == signal.SIGINT:
        assert [one.name for one in tmp_path.iterdir()] == ["a.csv"]


def test_a_link_is_written_through_and_permissions_follow_the_user(ranked, tmp_path):
    target, link = tmp_path / "real.csv", tmp_path / "link.csv"
    target.write_text("before", encoding="utf-8")
    link.symlink_to(target)
    export(ranked, [link])
    assert link.is_symlink()
    assert target.read_text(encoding="utf-8").startswith("place,")
    mask = os.umask(0)
    os.umask(mask)
    assert target.stat().st_mode & 0o777 == 0o666 & ~mask


def test_a_missing_package_is_named(ranked, tmp_path, monkeypatch):
    monkeypatch.setitem(sys.modules, "pyarrow", None)
    with pytest.raises(CapmusterError, match="pyarrow") as stopped:
        export(ranked, [tmp_path / "a.csv", tmp_path / "b.parquet"])
    assert "pip install" in stopped.value.accepted
    assert list(tmp_path.iterdir()) == []


def test_an_empty_shortlist_is_a_file_too(tmp_path):
    none = shortlist(replace(load_brief("greenhouse-node"), area=1e-6), top=3)
    assert len(none) == 0
    paths = [tmp_path / f"none{suffix}" for suffix in SUFFIXES]
    export(none, paths)
    assert json.loads(paths[SUFFIXES.index(".json")].read_text(encoding="utf-8"))["candidates"] == []
    assert len(paths[SUFFIXES.index(".csv")].read_text(encoding="utf-8").splitlines()) == 1
    openpyxl.load_workbook(paths[SUFFIXES.index(".xlsx")])
