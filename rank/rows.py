"""Rows for people and programs: an aligned text table, CSV, JSON."""

from __future__ import annotations

import csv
import io
import json
from typing import TYPE_CHECKING, TypeAlias

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence

Json: TypeAlias = "str | int | float | bool | Sequence[Json] | Mapping[str, Json] | None"


def text_table(header: Sequence[str], rows: Sequence[Sequence[str]], right: Sequence[bool]) -> str:
    """Align columns with two spaces between them, never cut; ``right`` says which are set flush right."""
    widths = [max(map(len, column)) for column in zip(header, *rows, strict=True)]
    lines = [
        "  ".join(
            cell.rjust(width) if flush else cell.ljust(width)
            for cell, width, flush in zip(row, widths, right, strict=True)
        ).rstrip()
        for row in (header, *rows)
    ]
    return "\n".join(lines)


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
