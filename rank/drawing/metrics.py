"""Widths of text, without a font library: the drawings' boxes are computed from this table.

The table holds the advance widths of DejaVu Sans, one of the widest sans-serif faces in use (Verdana's twin),
so a box that fits this face holds any face that a viewer puts in its place.
"""

from __future__ import annotations

ASCENT = 0.77
"""Height above the baseline of the tallest character used, a bracket, per unit of type size."""
DESCENT = 0.24
"""Depth below the baseline, per unit of type size."""
CAP_HEIGHT = 0.73
"""Height of capitals and figures, per unit of type size."""

_PER_EM = 2048
_WIDEST = 2048  # for a character that is not in the table: a full square
_EXTRA = "Ωµ·\N{MULTIPLICATION SIGN}\N{EN DASH}\N{MINUS SIGN}≤≥≈²°φη→…Δ"
_REGULAR = (
    "651 821 942 1716 1303 1946 1597 563 799 799 1024 1716 651 739 651 690 1303 1303 1303 1303 1303 1303 "
    "1303 1303 1303 1303 690 690 1716 1716 1716 1087 2048 1401 1405 1430 1577 1294 1178 1587 1540 604 604 "
    "1343 1141 1767 1532 1612 1235 1612 1423 1300 1251 1499 1401 2025 1403 1251 1403 799 690 799 1716 "
    "1024 1024 1255 1300 1126 1300 1260 721 1300 1298 569 569 1186 569 1995 1298 1253 1300 1300 842 1067 "
    "803 1298 1212 1675 1212 1212 1075 1303 690 1303 1716 1565 1303 651 1716 1024 1716 1716 1716 1716 821 "
    "1024 1351 1298 1716 2048 1401"
)
_BOLD = (
    "713 934 1067 1716 1425 2052 1786 627 936 936 1071 1716 778 850 778 748 1425 1425 1425 1425 1425 1425 "
    "1425 1425 1425 1425 819 819 1716 1716 1716 1188 2048 1585 1561 1503 1700 1399 1399 1681 1714 762 762 "
    "1587 1305 2038 1714 1741 1501 1741 1577 1475 1397 1663 1585 2259 1579 1483 1485 936 748 936 1716 "
    "1024 1024 1382 1466 1214 1466 1389 891 1466 1458 702 702 1362 702 2134 1458 1407 1466 1466 1010 1219 "
    "979 1458 1335 1892 1321 1335 1192 1458 748 1458 1716 1741 1507 778 1716 1024 1716 1716 1716 1716 897 "
    "1024 1602 1458 1716 2048 1585"
)
_CHARACTERS = [chr(code) for code in range(32, 127)] + list(_EXTRA)
_WIDTHS = {
    bold: dict(zip(_CHARACTERS, map(int, table.split()), strict=True))
    for bold, table in ((False, _REGULAR), (True, _BOLD))
}


def text_width(text: str, size: float, *, bold: bool = False) -> float:
    """Return the width of a line of text.

    Parameters
    ----------
    text
        One line.
    size
        Type size [px].
    bold
        Whether it is set in bold.

    Returns
    -------
    float
        Width [px]; an upper bound where a character is unknown to the table.
    """
    widths = _WIDTHS[bold]
    return size * sum(widths.get(character, _WIDEST) for character in text) / _PER_EM
