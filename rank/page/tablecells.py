"""The columns of a shortlist as a page shows them: units with one prefix per unit, shares with bars."""

from __future__ import annotations

import math
from dataclasses import dataclass
from fractions import Fraction
from typing import TYPE_CHECKING, Literal

from capmuster.rank.page.data import Cell, PageColumn

if TYPE_CHECKING:
    from collections.abc import Sequence

    import pandas as pd

    from capmuster.rank.files.columns import Column

_SYMBOLS = {"mm2": "mm²", "S/mm2": "S/mm²", "W/mm2": "W/mm²", "ohm": "Ω", "1": "%"}
_PREFIXED = {"Hz", "W", "A", "ohm"}
_PREFIXES = {-12: "p", -9: "n", -6: "µ", -3: "m", 0: "", 3: "k", 6: "M", 9: "G"}
_LEAST_SHARE = 0.05  # [%] that one decimal shows
_PLAIN = (1e-4, 1e6)
_SHARES = {"capacitor_utilisation", "switch_utilisation", "output_evenness"}
_OUT_OF_SCALE = {"inrush_A"}  # thousands of times the load: it must not set the prefix of all currents
_NAMES = {"id", "ratio"}
_TEXTS = {"families", "wiring", "overstressed"}
_FLAGS = {"pareto", "exact_fits"}
_SHOWN = {
    "place",
    "id",
    "ratio",
    "families",
    "flying_capacitors",
    "switches",
    "area_mm2",
    "exact_area_mm2",
    "efficiency_minimum",
    "efficiency_nominal",
    "efficiency_maximum",
    "highest_blocking_voltage_V",
    "pareto",
}
_SHOWN_WITHOUT_LOSSES = {
    "impedance_ohm",
    "exact_ohm",
    "capacitor_utilisation",
    "switch_utilisation",
}
_SHOWN_WITH_LOSSES = {"power_density_W_per_mm2", "loss_W", "profile_loss_W"}


@dataclass(frozen=True, slots=True)
class Table:
    """Columns, and a row of cells for each candidate."""

    columns: tuple[PageColumn, ...]
    rows: tuple[tuple[Cell, ...], ...]


def page_table(columns: Sequence[Column], frame: pd.DataFrame) -> Table:
    """Write the table of a shortlist.

    Parameters
    ----------
    columns
        Its columns.
    frame
        Its rows, in the units of the columns.

    Returns
    -------
    Table
        Hertz, watt, ampere and ohm have a prefix in the heading, the same in all columns of that unit; so
        has what a cell is sorted and filtered by.
    """
    powers = {unit: _common_power(unit, columns, frame) for unit in _PREFIXED}
    counts_losses = any(column.name == "loss_W" for column in columns)
    shown = _SHOWN | (_SHOWN_WITH_LOSSES if counts_losses else _SHOWN_WITHOUT_LOSSES)
    written = []
    for column in columns:
        symbol = _SYMBOLS.get(column.unit, column.unit)
        written.append(
            PageColumn(
                key=column.name,
                heading=column.heading,
                unit=_PREFIXES[powers.get(column.unit, 0)] + symbol,
                meaning=column.meaning,
                kind=_kind(column.name),
                shown=column.name in shown,
            )
        )
    records = frame.to_dict("records")
    rows = [
        tuple(_cell(column, record[column.name], powers.get(column.unit, 0)) for column in columns)
        for record in records
    ]
    return Table(tuple(written), tuple(rows))


def _kind(name: str) -> Literal["text", "name", "number", "share", "flag"]:
    if name in _FLAGS:
        return "flag"
    if name in _NAMES:
        return "name"
    if name in _TEXTS:
        return "text"
    return "share" if name in _SHARES else "number"


def _common_power(unit: str, columns: Sequence[Column], frame: pd.DataFrame) -> int:
    """Power of ten, a multiple of three, under which the largest value of a unit has one to three figures."""
    names = [c.name for c in columns if c.unit == unit and c.name not in _OUT_OF_SCALE]
    largest = max((abs(float(v)) for name in names for v in frame[name] if math.isfinite(v)), default=0.0)
    if largest == 0.0:
        return 0
    power = 3 * math.floor(math.log10(largest) / 3 + 1e-9)
    return min(max(power, min(_PREFIXES)), max(_PREFIXES))


def _cell(column: Column, value: object, power: int) -> Cell:
    if column.name in _FLAGS:
        return Cell("yes" if value else "", float(bool(value)))
    if column.name in _NAMES | _TEXTS:
        return Cell(str(value), float(Fraction(str(value))) if column.name == "ratio" else None)
    number = float(str(value))
    if not math.isfinite(number):
        return Cell("")
    if column.unit == "1":
        share = 100.0 * number
        text = f"{share:.1e}" if 0 < share < _LEAST_SHARE else f"{round(share, 1) + 0.0:.1f}"
        return Cell(text, share)
    if number.is_integer() and not column.unit:
        return Cell(f"{number:.0f}", number)
    scaled = number / 10.0**power
    return Cell(_plain(scaled), scaled)


def _plain(value: float) -> str:
    """Four figures without an exponent where that stays short."""
    rounded = float(f"{value:.4g}")
    if rounded == 0 or not _PLAIN[0] <= abs(rounded) < _PLAIN[1]:
        return f"{rounded:.4g}"
    return f"{rounded:.{max(0, 3 - math.floor(math.log10(abs(rounded))))}f}"
