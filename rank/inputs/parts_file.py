"""Read a catalog of parts: a CSV file whose header names each column with its unit, such as ``rating [V]``.

Lines that start with ``#`` and empty lines are skipped. Cells are plain numbers in the unit of their column.
Everything that is wrong is reported at once, each with file and line.
"""

from __future__ import annotations

import csv
import difflib
import re
from dataclasses import dataclass
from itertools import pairwise
from pathlib import Path
from typing import TYPE_CHECKING, Final, Literal, TypeAlias

from capmuster import catalogs
from capmuster.enumerate.errors import CapmusterError
from capmuster.rank.inputs.parts import CapacitorPart, SwitchPart
from capmuster.rank.inputs.quantity import Sign, Unit, parse_quantity, show_value

if TYPE_CHECKING:
    from collections.abc import Sequence

Curve: TypeAlias = "tuple[tuple[float, float], ...]"
Value: TypeAlias = "str | float | Curve"


@dataclass(frozen=True, slots=True)
class _Column:
    """A column: its heading, the field it fills, its unit and what it accepts."""

    heading: str
    field: str
    unit: Unit | Literal["text", "curve", "1/K"]
    sign: Sign = "positive"
    most: float | None = None


_SHARED: Final = (
    _Column("case", "case", "text"),
    _Column("rating", "rating", "V"),
    _Column("footprint", "footprint", "mm2"),
    _Column("price", "price", "EUR", "not negative"),
)
_CAPACITOR: Final = (
    _Column("part", "name", "text"),
    *_SHARED,
    _Column("dielectric", "dielectric", "text"),
    _Column("nominal", "nominal", "F"),
    _Column("tolerance", "tolerance", "1", "not negative", most=0.9),
    _Column("bias curve", "bias", "curve"),
    _Column("series resistance", "series_resistance", "ohm", "not negative"),
)
_SWITCH: Final = (
    _Column("part", "name", "text"),
    *_SHARED,
    _Column("on-resistance", "resistance", "ohm"),
    _Column("drive", "drive", "V"),
    _Column("resistance rise", "rise", "1/K", "not negative", most=0.05),
    _Column("gate charge", "gate_charge", "C", "not negative"),
    _Column("output charge", "output_charge", "C", "not negative"),
    _Column("output charge voltage", "output_charge_voltage", "V"),
    _Column("output charge exponent", "output_charge_exponent", "1", most=1.0),
)
_PER_KELVIN: Final = {"%/K": "%", "1/K": ""}
_CURVE_UNIT: Final = "V:%"
_HEADING: Final = re.compile(r"([^\[\]]+?)\s*(?:\[([^\[\]]*)\])?")


def locate_parts(name_or_path: str | Path, beside: Path | None) -> Path:
    """Find a catalog of parts that the user named.

    Parameters
    ----------
    name_or_path
        A shipped catalog's name, or a path: anything that has a folder or the suffix ``.csv``.
    beside
        Folder that a relative path starts from; the working directory if None.

    Raises
    ------
    CapmusterError
        If it is a name and nothing shipped has it; the message lists what is shipped.
    """
    path = Path(name_or_path)
    if path.suffix == ".csv" or len(path.parts) > 1:
        return beside / path if beside else path
    shipped = catalogs.find("parts", str(name_or_path))
    if shipped is None:
        known = catalogs.names("parts")
        near = difflib.get_close_matches(str(name_or_path), known, n=1)
        hint = f"; did you mean {near[0]!r}?" if near else ""
        raise CapmusterError(
            f"unknown catalog of parts {str(name_or_path)!r}{hint}",
            accepted=f"{', '.join(known)}, or the path of a .csv file",
        )
    return shipped


def read_capacitors(path: Path) -> tuple[CapacitorPart, ...]:
    """Read a catalog of capacitors.

    Raises
    ------
    CapmusterError
        If the file cannot be read or holds anything but valid capacitors: a line for each fault.
    """
    sheet = _Sheet(path, _CAPACITOR)
    parts = []
    for line, values in sheet.rows:
        part = CapacitorPart(**values)  # type: ignore[arg-type]  # each column gives what its field holds
        if part.bias[-1][0] < part.rating * (1 - 1e-12):
            sheet.refuse(
                line,
                f"bias curve: ends at {part.bias[-1][0]:g} V, below the rating of {part.rating:g} V",
                "points from 0 V up to the rating",
            )
        parts.append(part)
    sheet.close()
    return tuple(parts)


def read_switches(path: Path) -> tuple[SwitchPart, ...]:
    """Read a catalog of MOSFETs.

    Raises
    ------
    CapmusterError
        If the file cannot be read or holds anything but valid MOSFETs: a line for each fault.
    """
    sheet = _Sheet(path, _SWITCH)
    parts = tuple(SwitchPart(**values) for _, values in sheet.rows)  # type: ignore[arg-type]  # as above
    sheet.close()
    return parts


class _Sheet:
    """The rows of one file that could be read, and what is wrong with the others."""

    def __init__(self, path: Path, columns: Sequence[_Column]) -> None:
        self._path = path
        self._faults: list[CapmusterError] = []
        self.rows: list[tuple[int, dict[str, Value]]] = []
        lines = [(line, cells) for line, cells in _cells(path) if cells]
        if not lines:
            raise CapmusterError(f"{str(path)!r} holds no header", accepted=_header(columns))
        units = self._units(*lines[0], columns)
        if self._faults:
            self.close()
        for line, cells in lines[1:]:
            if len(cells) != len(units):
                self.refuse(line, f"{len(cells)} cells in a row of {len(units)} columns")
                continue
            read = [self._read(line, c, u, cell) for (c, u), cell in zip(units, cells, strict=True)]
            if None not in read:
                fields = [column.field for column, _ in units]
                self.rows.append((line, {f: v for f, v in zip(fields, read, strict=True) if v is not None}))
        self._check_names()
        if not lines[1:]:
            self.refuse(lines[0][0], "no part follows the header", "a line for each part")

    def refuse(self, line: int, problem: str, accepted: str | None = None) -> None:
        self._faults.append(CapmusterError(problem, accepted=accepted, place=f"{self._path}:{line}"))

    def close(self) -> None:
        """Raise what is wrong, if anything is."""
        if len(self._faults) == 1:
            raise self._faults[0]
        if self._faults:
            ordered = sorted(self._faults, key=lambda fault: int(str(fault.place).rpartition(":")[2]))
            raise CapmusterError("\n".join(map(str, ordered)))

    def _units(
        self, line: int, cells: Sequence[str], columns: Sequence[_Column]
    ) -> list[tuple[_Column, str]]:
        """Column and unit of each cell of a row."""
        by_heading = {column.heading: column for column in columns}
        found: dict[str, tuple[_Column, str]] = {}
        for cell in cells:
            match = _HEADING.fullmatch(cell)
            heading, unit = (match[1], match[2] or "") if match else (cell, "")
            column = by_heading.get(heading)
            if column is None:
                near = difflib.get_close_matches(heading, by_heading, n=1)
                hint = f"; did you mean {near[0]!r}?" if near else ""
                self.refuse(line, f"unknown column {show_value(heading)}{hint}", _header(columns))
            elif heading in found:
                self.refuse(line, f"column {heading!r} comes twice", "each column once")
            else:
                self._check_unit(line, column, unit)
                found[heading] = (column, unit)
        missing = [column.heading for column in columns if column.heading not in found]
        if missing and not self._faults:
            self.refuse(line, f"missing column {', '.join(map(repr, missing))}", _header(columns))
        return list(found.values())

    def _check_unit(self, line: int, column: _Column, unit: str) -> None:
        accepted = _unit_examples(column)
        if column.unit == "text":
            good = not unit
        elif column.unit == "curve":
            good = unit == _CURVE_UNIT
        elif column.unit == "1/K":
            good = unit in _PER_KELVIN
        else:
            try:
                good = bool(unit) and parse_quantity("1" if unit == "1" else f"1 {unit}", column.unit) > 0
            except CapmusterError:
                good = False
        if not good:
            self.refuse(line, f"{column.heading}: unit {show_value(unit)} is not allowed", accepted)

    def _read(self, line: int, column: _Column, unit: str, cell: str) -> Value | None:
        try:
            return _value(column, unit, cell)
        except CapmusterError as error:
            self.refuse(line, f"{column.heading}: {error.problem}", error.accepted)
            return None

    def _check_names(self) -> None:
        first: dict[Value, int] = {}
        for line, values in self.rows:
            name = values["name"]
            if name in first:
                self.refuse(
                    line, f"part: {show_value(name)} stands in line {first[name]} already", "each part once"
                )
            first.setdefault(name, line)


def _cells(path: Path) -> list[tuple[int, list[str]]]:
    """Line number and cells of every line that is not a comment."""
    try:
        text = path.read_text(encoding="utf-8-sig")
    except OSError as error:
        raise CapmusterError(
            f"catalog of parts {str(path)!r} cannot be read: {error.strerror}", accepted="a CSV file"
        ) from None
    except UnicodeDecodeError:
        raise CapmusterError(f"{str(path)!r} is not UTF-8 text", accepted="a CSV file") from None
    found = []
    for line, content in enumerate(text.splitlines(), start=1):
        if content.strip() and not content.lstrip().startswith("#"):
            try:
                cells = next(csv.reader([content], strict=True))
            except csv.Error as error:
                raise CapmusterError(
                    f"not valid CSV: {error}", accepted="cells between commas", place=f"{path}:{line}"
                ) from None
            found.append((line, [cell.strip() for cell in cells]))
    return found


def _value(column: _Column, unit: str, cell: str) -> Value:
    """Read one cell."""
    if column.unit == "text":
        if not cell or not cell.isprintable():
            raise CapmusterError(f"value {show_value(cell)} is not a name", accepted="one word or more")
        return cell
    if column.unit == "curve":
        return _curve(cell)
    if not re.fullmatch(r"[+-]?[0-9.]+(?:[eE][+-]?[0-9]+)?", cell):
        raise CapmusterError(
            f"value {show_value(cell)} is not a number",
            accepted=f"a plain number, in the header's unit {unit}",
        )
    kind: Unit = "1" if column.unit == "1/K" else column.unit
    scale = _PER_KELVIN[unit] if column.unit == "1/K" else unit
    text = cell if scale in {"", "1"} else f"{cell} {scale}"
    return float(parse_quantity(text, kind, sign=column.sign, most=column.most))


def _curve(cell: str) -> Curve:
    """Read a DC-bias curve: ``0:100 8:75 16:44``, volts and percent, volts rising and percent not."""
    accepted = "points such as 0:100 8:75 16:44, volts rising from 0, percent falling from 100"
    points = []
    for point in cell.split():
        volts, _, percent = point.partition(":")
        try:
            pair = (
                parse_quantity(volts, "V", sign="not negative"),
                parse_quantity(f"{percent} %", "1", most=1.0),
            )
        except CapmusterError:
            raise CapmusterError(
                f"point {show_value(point)} is not volts and percent", accepted=accepted
            ) from None
        points.append(pair)
    sound = (
        len(points) > 1
        and not points[0][0]
        and points[0][1] == 1
        and all(low[0] < high[0] and low[1] >= high[1] for low, high in pairwise(points))
    )
    if not sound:
        raise CapmusterError(f"value {show_value(cell)} is no bias curve", accepted=accepted)
    return tuple((float(volts), float(share)) for volts, share in points)


def _unit_examples(column: _Column) -> str:
    if column.unit == "text":
        return "no unit"
    if column.unit == "curve":
        return _CURVE_UNIT
    if column.unit == "1/K":
        return " or ".join(_PER_KELVIN)
    examples = {"F": "uF or nF", "ohm": "mohm or ohm", "C": "nC", "1": "% or 1"}
    return examples.get(column.unit, column.unit)


def _header(columns: Sequence[_Column]) -> str:
    return "a header of " + ", ".join(
        column.heading if column.unit == "text" else f"{column.heading} [{_unit_examples(column)}]"
        for column in columns
    )
