"""Finalists and their parts as files: CSV with a row per element, JSON, XLSX, by suffix."""

from __future__ import annotations

import datetime as dt
import io
import json
from pathlib import Path
from typing import TYPE_CHECKING

from capmuster.enumerate.errors import CapmusterError
from capmuster.rank.discrete.report import (
    COLUMNS,
    ELEMENT_COLUMNS,
    candidate_rows,
    document,
    element_rows,
    provenance,
    settings,
)
from capmuster.rank.files.export import check_writable, write_all
from capmuster.rank.files.export_text import heading
from capmuster.rank.files.rows import csv_text

if TYPE_CHECKING:
    from collections.abc import Sequence

    from xlsxwriter.format import Format
    from xlsxwriter.workbook import Workbook
    from xlsxwriter.worksheet import Worksheet

    from capmuster.rank.discrete.finalists import PartsShortlist
    from capmuster.rank.discrete.report import Row
    from capmuster.rank.files.columns import Column

SUFFIXES = (".csv", ".json", ".xlsx")
"""Kinds of file that finalists can be written to."""

_FORMATS = {"1": "0.0%", "EUR": "0.00", "mm2": "0.0"}
_WIDTHS = {"wiring": 40, "part": 18, "families": 20, "id": 12}


def check_parts_targets(paths: Sequence[str | Path]) -> None:
    """Refuse paths that cannot be written, before any work is done.

    Raises
    ------
    CapmusterError
        When a suffix is unknown, a path is named twice or cannot be written.
    """
    seen: set[Path] = set()
    for path in map(Path, paths):
        if path.suffix.lower() not in SUFFIXES:
            has = f"the unknown suffix '{path.suffix}'" if path.suffix else "no suffix"
            raise CapmusterError(f"to: '{path}' has {has}", accepted=", ".join(SUFFIXES))
        if path.resolve() in seen:
            raise CapmusterError(f"to: '{path}' is named twice", accepted="each file once")
        seen.add(path.resolve())
        check_writable(path)


def write_parts(found: PartsShortlist, paths: Sequence[str | Path]) -> None:
    """Write finalists to files, each in the format of its suffix: all of them or none.

    Raises
    ------
    CapmusterError
        As `check_parts_targets`, or when there is no room.
    """
    check_parts_targets(paths)
    renderers = {".csv": _to_csv, ".json": _to_json, ".xlsx": _to_workbook}
    write_all([Path(path) for path in paths], [renderers[Path(path).suffix.lower()](found) for path in paths])


def rows_as_csv(columns: Sequence[Column], rows: Sequence[Row], found: PartsShortlist) -> str:
    """Rows with version and fingerprints in the last columns."""
    origin = provenance(found)
    texts = [["" if cell is None else str(cell) for cell in (*row, *origin.values())] for row in rows]
    return csv_text([*(column.name for column in columns), *origin], texts)


def _to_csv(found: PartsShortlist) -> bytes:
    return rows_as_csv(ELEMENT_COLUMNS, element_rows(found), found).encode()


def _to_json(found: PartsShortlist) -> bytes:
    return (json.dumps(document(found), ensure_ascii=False, indent=1) + "\n").encode()


def _to_workbook(found: PartsShortlist) -> bytes:
    """Three sheets: finalists, their parts, and what was asked and proven."""
    import xlsxwriter  # noqa: PLC0415 -- only for this format

    out = io.BytesIO()
    # Text is text: a title or a name that begins like a formula or an address stays what it is.
    book = xlsxwriter.Workbook(
        out, {"in_memory": True, "strings_to_formulas": False, "strings_to_urls": False}
    )
    # The date of creation would make every file differ.
    book.set_properties({"title": "Parts", "created": dt.datetime(2000, 1, 1, tzinfo=dt.UTC)})
    head = book.add_format({"bold": True, "text_wrap": True, "valign": "top", "bottom": 1})
    _table(book, head, "Finalists", COLUMNS, candidate_rows(found))
    _table(book, head, "Parts", ELEMENT_COLUMNS, element_rows(found))
    notes = [
        *settings(found),
        ("certificate", found.certificate),
        *(("left out", f"{count} {reason}") for reason, count in found.left_out.items()),
        *(("caution", text) for text in found.cautions),
        *((f"column {column.heading}", column.meaning) for column in (*COLUMNS, *ELEMENT_COLUMNS)),
        *provenance(found).items(),
    ]
    sheet = book.add_worksheet("Settings")
    wrapped = book.add_format({"text_wrap": True, "valign": "top"})
    sheet.set_column(0, 0, 28)
    sheet.set_column(1, 1, 100)
    for r, pair in enumerate(notes):
        for k, text in enumerate(pair):
            sheet.write_string(r, k, text, wrapped)
    _for_print(sheet)
    book.close()
    return out.getvalue()


def _table(book: Workbook, head: Format, name: str, columns: Sequence[Column], rows: Sequence[Row]) -> None:
    sheet = book.add_worksheet(name)
    for k, column in enumerate(columns):
        code = "0.0E+0" if column.name == "gap" else _FORMATS.get(column.unit, "General")
        number = book.add_format({"num_format": code})
        sheet.write_string(0, k, heading(column), head)
        sheet.set_column(k, k, _WIDTHS.get(column.name, 13))
        for r, row in enumerate(rows, start=1):
            value = row[k]
            if isinstance(value, bool):
                sheet.write_string(r, k, "yes" if value else "no")
            elif isinstance(value, int | float):
                sheet.write_number(r, k, value, number)
            elif value is not None:
                sheet.write_string(r, k, value)
    sheet.freeze_panes(1, 2)
    if rows:
        sheet.autofilter(0, 0, len(rows), len(columns) - 1)
    _for_print(sheet)


def _for_print(sheet: Worksheet) -> None:
    sheet.set_landscape()
    sheet.set_paper(9)  # A4
    sheet.fit_to_pages(1, 0)
    sheet.repeat_rows(0)
