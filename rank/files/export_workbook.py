"""The shortlist as a spreadsheet made for people: the table, the elements, the assumptions."""

from __future__ import annotations

import datetime as dt
import io
import math
from typing import TYPE_CHECKING

from capmuster.rank.files.export_text import heading
from capmuster.rank.files.summary import assumptions, verdict

if TYPE_CHECKING:
    from xlsxwriter.format import Format
    from xlsxwriter.workbook import Workbook
    from xlsxwriter.worksheet import Worksheet

    from capmuster.rank.elements import Element
    from capmuster.rank.shortlist import Shortlist

_SHARES = {"capacitor_utilisation", "switch_utilisation", "output_evenness"}
_WIDTHS = {"id": 14, "families": 24, "wiring": 48}
_SYMBOLS = {"mm2": "mm²", "S/mm2": "S/mm²", "W/mm2": "W/mm²", "ohm": "Ω"}
_PLAIN = (1e-2, 1e5)  # figures that are read without an exponent
_ELEMENT_COLUMNS = (
    ("place", ""),
    ("id", ""),
    ("element", ""),
    ("positive node", ""),
    ("negative node", ""),
    ("closed in phase", ""),
    ("class", ""),
    ("polarity", ""),
    ("in series", ""),
    ("area", "mm2"),
    ("capacitance", "F"),
    ("on-resistance", "ohm"),
    ("charge multiplier", ""),
    ("must stand", "V"),
    ("derated rating", "V"),
    ("stress", "1"),
    ("source while on", "V"),
    ("source while off", "V"),
    ("gate while on", "V"),
    ("gate while off", "V"),
    ("gate supply", ""),
)


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


class _Writer:
    """Writes values into a sheet: text as text, numbers in formats that carry their unit, nothing for NaN."""

    def __init__(self, book: Workbook, sheet: Worksheet) -> None:
        self.book = book
        self.sheet = sheet
        self.formats: dict[str, Format] = {}

    def write(self, row: int, column: int, value: object, unit: str = "") -> None:
        """Write a value in the unit [`unit`] of its column."""
        if isinstance(value, bool):
            self.sheet.write_string(row, column, "yes" if value else "")
        elif isinstance(value, int):
            self.sheet.write_number(row, column, value, self._format("0"))
        elif isinstance(value, float):
            if math.isfinite(value):
                self.sheet.write_number(row, column, value, self._format(_number_format(value, unit)))
        elif value is not None:
            self.sheet.write_string(row, column, str(value))

    def _format(self, code: str) -> Format:
        if code not in self.formats:
            self.formats[code] = self.book.add_format({"num_format": code})
        return self.formats[code]


def _number_format(value: float, unit: str) -> str:
    """Choose decimals or, for very small and large figures, an exponent that is a multiple of three."""
    if unit == "1":
        return "0.0%"
    plain = value == 0 or _PLAIN[0] <= abs(value) < _PLAIN[1]
    symbol = _SYMBOLS.get(unit, unit)
    return ("0.0000" if plain else "##0.000E+0") + (f'" {symbol}"' if symbol else "")


def _shortlist_sheet(book: Workbook, head: Format, shortlist: Shortlist) -> None:
    sheet = book.add_worksheet("Shortlist")
    writer = _Writer(book, sheet)
    rows = shortlist.frame.to_dict("records")
    for k, column in enumerate(shortlist.columns):
        sheet.write_string(0, k, heading(column), head)
        sheet.set_column(k, k, _WIDTHS.get(column.name, 13))
        for r, row in enumerate(rows, start=1):
            writer.write(r, k, row[column.name], column.unit)
        if column.name in _SHARES and rows:
            bars = {"type": "data_bar", "min_type": "num", "min_value": 0, "max_type": "num", "max_value": 1}
            sheet.conditional_format(1, k, len(rows), k, {**bars, "bar_solid": True, "bar_color": "#9DC3E6"})
    sheet.freeze_panes(1, 2)
    if rows:
        sheet.autofilter(0, 0, len(rows), len(shortlist.columns) - 1)
    _for_print(sheet)


def _element_sheet(book: Workbook, head: Format, shortlist: Shortlist) -> None:
    sheet = book.add_worksheet("Elements")
    writer = _Writer(book, sheet)
    for k, (name, unit) in enumerate(_ELEMENT_COLUMNS):
        symbol = "%" if unit == "1" else _SYMBOLS.get(unit, unit)
        sheet.write_string(0, k, f"{name} [{symbol}]" if unit else name, head)
        sheet.set_column(k, k, 15 if name in {"id", "class"} else 12)
    r = 0
    for place in range(len(shortlist)):
        for element in shortlist.elements(place):
            r += 1
            values = (place + 1, str(shortlist.pool.ids[place]), *_element_values(element))
            for k, (value, (_, unit)) in enumerate(zip(values, _ELEMENT_COLUMNS, strict=True)):
                writer.write(r, k, value, unit)
    sheet.freeze_panes(1, 3)
    if r:
        sheet.autofilter(0, 0, r, len(_ELEMENT_COLUMNS) - 1)
    _for_print(sheet)


def _element_values(element: Element) -> tuple[str | int | float | None, ...]:
    """Return the values of the columns from the element on; None where a column is not for its kind."""
    capacitor = element.kind == "capacitor"
    nothing = (None, None)
    return (
        element.name,
        *element.nodes,
        element.phase,
        element.device,
        element.polarity or None,
        element.series,
        element.area,
        element.value if capacitor else None,
        None if capacitor else element.value,
        element.multiplier,
        element.voltage,
        element.rating,
        element.stress,
        *(element.source or nothing),
        *(element.gate or nothing),
        element.supply or None,
    )


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
