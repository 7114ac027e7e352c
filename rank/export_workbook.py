"""The shortlist as a spreadsheet made for people: the table, the elements, the assumptions."""

from __future__ import annotations

import datetime as dt
import io
from typing import TYPE_CHECKING

from capmuster.rank.export_text import heading
from capmuster.rank.summary import assumptions, verdict

if TYPE_CHECKING:
    from xlsxwriter.format import Format
    from xlsxwriter.workbook import Workbook
    from xlsxwriter.worksheet import Worksheet

    from capmuster.rank.shortlist import Shortlist

_SHARES = {"capacitor_utilisation", "switch_utilisation", "output_evenness"}
_WIDTHS = {"id": 14, "families": 24, "wiring": 48}
_ELEMENT_HEADINGS = (
    "place", "id", "element", "positive node", "negative node", "closed in phase", "class", "in series",
    "area [mm²]", "value", "unit", "charge multiplier", "must stand [V]", "derated rating [V]", "stress [%]",
)  # fmt: skip


def to_workbook(shortlist: Shortlist) -> bytes:
    """Three sheets: shortlist (frozen header, bars for the utilisations), elements, assumptions."""
    import xlsxwriter  # noqa: PLC0415 -- only for this format

    out = io.BytesIO()
    # Text is text: a title or a name that begins like a formula or an address stays what it is.
    book = xlsxwriter.Workbook(
        out,
        {
            "in_memory": True,
            "strings_to_formulas": False,
            "strings_to_urls": False,
            "strings_to_numbers": False,
        },
    )
    # The date of creation would make every file differ.
    book.set_properties({"title": "Shortlist", "created": dt.datetime(2000, 1, 1, tzinfo=dt.UTC)})
    head = book.add_format({"bold": True, "text_wrap": True, "valign": "top", "bottom": 1})
    _shortlist_sheet(book, head, shortlist)
    _element_sheet(book, head, shortlist)
    _assumption_sheet(book, head, shortlist)
    book.close()
    return out.getvalue()


def _shortlist_sheet(book: Workbook, head: Format, shortlist: Shortlist) -> None:
    sheet = book.add_worksheet("Shortlist")
    formats = {
        "percent": book.add_format({"num_format": "0.0%"}),
        "figure": book.add_format({"num_format": "0.0000"}),
        "small": book.add_format({"num_format": "0.00E+00"}),
        "whole": book.add_format({"num_format": "0"}),
    }
    rows = shortlist.frame.to_dict("records")
    for k, column in enumerate(shortlist.columns):
        sheet.write_string(0, k, heading(column), head)
        sheet.set_column(k, k, _WIDTHS.get(column.name, 12))
        for r, row in enumerate(rows, start=1):
            value = row[column.name]
            if isinstance(value, bool):
                sheet.write_string(r, k, "yes" if value else "")
            elif isinstance(value, str):
                sheet.write_string(r, k, value)
            elif column.unit == "1":
                sheet.write_number(r, k, value, formats["percent"])
            elif isinstance(value, int):
                sheet.write_number(r, k, value, formats["whole"])
            else:
                ordinary = 1e-2 <= abs(value) < 1e5  # noqa: PLR2004 -- readable without an exponent
                sheet.write_number(r, k, value, formats["figure" if ordinary else "small"])
        if column.name in _SHARES and rows:
            bars = {"type": "data_bar", "min_type": "num", "min_value": 0, "max_type": "num", "max_value": 1}
            sheet.conditional_format(1, k, len(rows), k, {**bars, "bar_solid": True, "bar_color": "#9DC3E6"})
    sheet.freeze_panes(1, 2)
    if rows:
        sheet.autofilter(0, 0, len(rows), len(shortlist.columns) - 1)
    _for_print(sheet)


def _element_sheet(book: Workbook, head: Format, shortlist: Shortlist) -> None:
    sheet = book.add_worksheet("Elements")
    figure, percent = book.add_format({"num_format": "0.0000"}), book.add_format({"num_format": "0.0%"})
    exponent = book.add_format({"num_format": "0.000E+00"})
    for k, text in enumerate(_ELEMENT_HEADINGS):
        sheet.write_string(0, k, text, head)
        sheet.set_column(k, k, 14 if text in {"id", "class"} else 11)
    r = 0
    for place in range(len(shortlist)):
        for e in shortlist.elements(place):
            r += 1
            sheet.write_number(r, 0, place + 1)
            for k, text in (
                (1, str(shortlist.pool.ids[place])),
                (2, e.name),
                (3, e.nodes[0]),
                (4, e.nodes[1]),
            ):
                sheet.write_string(r, k, text)
            if e.phase:
                sheet.write_number(r, 5, e.phase)
            sheet.write_string(r, 6, e.device)
            sheet.write_number(r, 7, e.series)
            sheet.write_number(r, 8, e.area, figure)
            sheet.write_number(r, 9, e.value, exponent)
            sheet.write_string(r, 10, "F" if e.kind == "capacitor" else "Ω")
            for k, value, form in (
                (11, e.multiplier, figure),
                (12, e.voltage, figure),
                (13, e.rating, figure),
            ):
                sheet.write_number(r, k, value, form)
            sheet.write_number(r, 14, e.stress, percent)
            if e.source is not None and e.gate is not None:
                sheet.write_string(r, 15, e.polarity)
                for k, value in enumerate((*e.source, *e.gate), start=16):
                    sheet.write_number(r, k, value, figure)
                sheet.write_string(r, 20, e.supply)
    sheet.freeze_panes(1, 3)
    if r:
        sheet.autofilter(0, 0, r, len(_ELEMENT_HEADINGS) - 1)
    _for_print(sheet)


def _assumption_sheet(book: Workbook, head: Format, shortlist: Shortlist) -> None:
    sheet = book.add_worksheet("Assumptions")
    wrapped = book.add_format({"text_wrap": True, "valign": "top"})
    sheet.set_column(0, 0, 28)
    sheet.set_column(1, 1, 100, wrapped)
    rows = [
        *assumptions(shortlist.brief),
        *(("search", line) for line in verdict(shortlist)),
        *(("caution", text) for text in shortlist.cautions),
        *((f"column {column.heading}", column.meaning) for column in shortlist.columns),
        *shortlist.provenance.items(),
    ]
    sheet.write_string(0, 0, "what", head)
    sheet.write_string(0, 1, "value", head)
    for r, (name, value) in enumerate(rows, start=1):
        sheet.write_string(r, 0, name, wrapped)
        sheet.write_string(r, 1, value, wrapped)
    sheet.freeze_panes(1, 0)
    _for_print(sheet)


def _for_print(sheet: Worksheet) -> None:
    sheet.set_landscape()
    sheet.set_paper(9)  # A4
    sheet.fit_to_pages(1, 0)
    sheet.repeat_rows(0)
