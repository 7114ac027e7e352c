"""Rows for people and programs: an aligned text table, CSV, JSON."""

from __future__ import annotations

import csv
import io
import json
import math
from typing import TYPE_CHECKING, TypeAlias

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence

Json: TypeAlias = "str | int | float | bool | Sequence[Json] | Mapping[str, Json] | None"

_GAP = 2
_SMALL, _LARGE = "mµnpf", "kMG"


def text_table(
    header: Sequence[str],
    rows: Sequence[Sequence[str]],
    right: Sequence[bool],
    groups: Sequence[tuple[int, int, str]] = (),
) -> str:
    """Align columns with two spaces between them, never cut.

    Parameters
    ----------
    header
        Headings; one with line breaks takes several lines.
    rows
        Cells; one with line breaks takes several lines.
    right
        Which columns are set flush right.
    groups
        First column, last column and text of headings that stand above several columns.
    """
    lined = [cell.split("\n") for cell in header]
    depth = max(map(len, lined), default=0)
    head = [[""] * (depth - len(lines)) + lines for lines in lined]
    body = [_lines(row) for row in rows]
    widths = [
        max(map(len, (*lines, *(line[k] for row in body for line in row)))) for k, lines in enumerate(head)
    ]
    for first, last, text in groups:
        widths[last] += max(0, len(text) - sum(widths[first : last + 1]) - _GAP * (last - first))
    lines = [
        (" " * _GAP)
        .join(
            cell.rjust(width) if flush else cell.ljust(width)
            for cell, width, flush in zip(row, widths, right, strict=True)
        )
        .rstrip()
        for row in (*zip(*head, strict=True), *(line for row in body for line in row))
    ]
    return "\n".join(([_group_line(widths, groups)] if groups else []) + lines)


def _lines(row: Sequence[str]) -> list[list[str]]:
    """Lines that a row takes, each with a cell for every column."""
    cells = [cell.split("\n") for cell in row]
    depth = max(map(len, cells), default=1)
    return [[cell[k] if k < len(cell) else "" for cell in cells] for k in range(depth)]


def _group_line(widths: Sequence[int], groups: Sequence[tuple[int, int, str]]) -> str:
    line = ""
    for first, last, text in groups:
        start = sum(widths[:first]) + _GAP * first
        room = sum(widths[first : last + 1]) + _GAP * (last - first)
        line = line.ljust(start) + text.center(room)
    return line.rstrip()


def prefixed(values: Sequence[float]) -> tuple[str, list[str]]:
    """Write one column of figures with the SI prefix of its smallest one; return prefix and figures."""
    least = min((abs(value) for value in values if value and math.isfinite(value)), default=1.0)
    power = min(max(math.floor(math.log10(least) / 3), -len(_SMALL)), len(_LARGE))
    prefix = "" if power == 0 else _SMALL[-power - 1] if power < 0 else _LARGE[power - 1]
    return prefix, figures([value / 1000.0**power for value in values])


def figures(values: Sequence[float]) -> list[str]:
    """Write one column of figures with as many decimals each as show four digits of the smallest one."""
    sizes = [abs(value) for value in values if value and math.isfinite(value)]
    least, most = min(sizes, default=1.0), max(sizes, default=1.0)
    if most >= 1e6 or least < 1e-3 or most / least > 1e4:  # noqa: PLR2004 -- too wide to line up
        return [f"{value:.4g}" for value in values]
    decimals = max(0, 3 - math.floor(math.log10(least)))
    return [f"{value:.{decimals}f}" for value in values]


def csv_text(header: Sequence[str], rows: Sequence[Sequence[str]]) -> str:
    """Comma-separated values with a header line, lines ended by a newline."""
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow(header)
    writer.writerows(rows)
    return out.getvalue()


def json_text(content: Json) -> str:
    """Write one JSON document on one line."""
    return json.dumps(content, ensure_ascii=False)
