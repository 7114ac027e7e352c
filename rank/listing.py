"""Every converter of one ratio: the census as far as it is complete, family members beyond.

Best first: by the product of capacitor and switch utilisation, because at a given capacitor energy and switch
V-A product it goes with 1/sqrt(R_SSL R_FSL) and so needs no technology (the metrics of both limits, Seeman
and Sanders 2008); then fewer flying capacitors, fewer switches, higher capacitor utilisation, id.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING, TypeAlias

import numpy as np

from capmuster.enumerate.attainable import capacitors_needed, nearest_attainable
from capmuster.enumerate.census import CENSUS_REACH
from capmuster.enumerate.converters import converters, table_of
from capmuster.enumerate.errors import CapmusterError
from capmuster.enumerate.families import family_names, members
from capmuster.rank.filters import Filters
from capmuster.rank.quantity import parse_ratio
from capmuster.rank.switchtable import score, switch_table

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence
    from fractions import Fraction

    import pandas as pd
    from numpy.typing import NDArray

    from capmuster.enumerate.converters import ConverterTable

    _Floats: TypeAlias = NDArray[np.float64]

MOST_CAPACITORS = 40
"""Most flying capacitors that a listing may ask for."""
_DIGITS_THAT_TIE = 12


@dataclass(frozen=True, slots=True)
class Listed:
    """One converter of a listing.

    Attributes
    ----------
    id, wiring
        Short id and canonical wiring code.
    flying_capacitors, switches
        How many of each.
    ratio
        M = V_out / V_in.
    capacitor_utilisation, switch_utilisation
        E / sum |q v| over capacitors and 4 E / sum |q v| over switches; 0 in a unity converter.
    highest_capacitor_voltage, highest_blocking_voltage
        Highest voltage across a capacitor and across an open switch [V per V of input].
    families
        Names of the families that it belongs to.
    clean
        Whether no switch is idle or equipotential.
    """

    id: str
    wiring: str
    flying_capacitors: int
    switches: int
    ratio: Fraction
    capacitor_utilisation: float
    switch_utilisation: float
    highest_capacitor_voltage: float
    highest_blocking_voltage: float
    families: tuple[str, ...]
    clean: bool


COLUMN_UNITS = {
    "id": "",
    "wiring": "",
    "flying_capacitors": "",
    "switches": "",
    "ratio": "V/V",
    "capacitor_utilisation": "1",
    "switch_utilisation": "1",
    "highest_capacitor_voltage": "V per V of input",
    "highest_blocking_voltage": "V per V of input",
    "families": "",
    "clean": "",
}
"""Columns of `list_converters` with their units."""


@dataclass(frozen=True, slots=True)
class Listing:
    """Converters of one ratio, best first.

    Attributes
    ----------
    ratio
        The ratio asked for.
    max_capacitors
        Most flying capacitors asked for.
    complete_up_to
        Number of flying capacitors up to which every converter is listed; above it only family members are.
    count, count_all
        Clean, and all non-degenerate, census converters that pass the filters, listed or not.
    converters
        What is listed.
    nearest
        Where nothing reaches the ratio: the attainable ratios next to it.
    capacitors_needed
        Least number of flying capacitors that reaches the ratio.
    """

    ratio: Fraction
    max_capacitors: int
    complete_up_to: int
    count: int
    count_all: int
    converters: tuple[Listed, ...]
    nearest: tuple[Fraction, ...]
    capacitors_needed: int


def find_converters(
    ratio: Fraction,
    capacitors: int,
    *,
    filters: Filters = Filters(),  # noqa: B008 -- frozen
    include_unclean: bool = False,
    limit: int | None = None,
) -> Listing:
    """List the converters of one ratio with at most ``capacitors`` flying capacitors.

    Parameters
    ----------
    ratio
        M = V_out / V_in, not 0.
    capacitors
        Most flying capacitors, 1 to `MOST_CAPACITORS`.
    filters
        Bounds that every listed and counted converter keeps.
    include_unclean
        Whether converters with an idle or an equipotential switch are listed too.
    limit
        Most converters listed.

    Raises
    ------
    CapmusterError
        When a bound is out of its range.
    """
    if not 1 <= capacitors <= MOST_CAPACITORS:
        raise CapmusterError(f"capacitors: {capacitors} is out of range", accepted=f"1 to {MOST_CAPACITORS}")
    if limit is not None and limit < 0:
        raise CapmusterError(f"limit: {limit} is negative", accepted="0 or more")
    reach = min(capacitors, CENSUS_REACH)
    candidates = [
        _Candidates(table, census=True)
        for table in (converters(n, ratio) for n in range(1, reach + 1))
        if len(table)
    ]
    candidates += [_Candidates(table, census=False) for table in _members_beyond(ratio, reach, capacitors)]
    passing = [c.passing(filters) for c in candidates]
    in_census = [(c.clean, p) for c, p in zip(candidates, passing, strict=True) if c.census]
    chosen = [p if include_unclean else p & c.clean for c, p in zip(candidates, passing, strict=True)]
    listed = _best(candidates, chosen, limit)
    count_all = sum(int(p.sum()) for _, p in in_census)
    needed = capacitors_needed(ratio)
    return Listing(
        ratio=ratio,
        max_capacitors=capacitors,
        complete_up_to=reach,
        count=sum(int((clean & p).sum()) for clean, p in in_census),
        count_all=count_all,
        converters=tuple(listed),
        nearest=nearest_attainable(ratio, reach) if not any(map(len, candidates)) else (),
        capacitors_needed=needed,
    )


def list_converters(
    ratio: Fraction | str | float,
    capacitors: int,
    *,
    filters: Filters = Filters(),  # noqa: B008 -- frozen
    include_unclean: bool = False,
    limit: int | None = None,
) -> pd.DataFrame:
    """List the converters of one ratio as a table; arguments as in `find_converters`.

    Returns
    -------
    pandas.DataFrame
        One row per converter, best first; the columns are the attributes of `Listed`, the ratio as a fraction
        in text. ``attrs`` holds ``units`` (of each column), ``complete_up_to``, ``count`` and ``count_all``.

    Raises
    ------
    CapmusterError
        When the ratio is no ratio, or a bound is out of its range.
    """
    import pandas as pd  # noqa: PLC0415 -- slow to import

    listing = find_converters(
        parse_ratio(ratio), capacitors, filters=filters, include_unclean=include_unclean, limit=limit
    )
    frame = pd.DataFrame(
        {name: [getattr(row, name) for row in listing.converters] for name in COLUMN_UNITS},
    )
    frame["ratio"] = frame["ratio"].map(str)
    frame.attrs = {
        "units": dict(COLUMN_UNITS),
        "complete_up_to": listing.complete_up_to,
        "count": listing.count,
        "count_all": listing.count_all,
    }
    return frame


def _members_beyond(ratio: Fraction, reach: int, most: int) -> Iterator[ConverterTable]:
    """Family members of a ratio above the census, one table per size, each converter once."""
    if most == reach:
        return
    found = {m.converter.id: m.converter for m in members(most) if m.converter.ratio == ratio}
    for n in range(reach + 1, most + 1):
        of_size = [converter for converter in found.values() if converter.n == n]
        if of_size:
            yield table_of(of_size)


@dataclass(slots=True)
class _Candidates:
    """Converters of one size with everything that they are filtered and sorted by."""

    table: ConverterTable
    census: bool
    switches: NDArray[np.int64] = field(init=False)
    clean: NDArray[np.bool_] = field(init=False)
    capacitor_utilisation: _Floats = field(init=False)
    switch_utilisation: _Floats = field(init=False)
    highest_capacitor_voltage: _Floats = field(init=False)
    highest_blocking_voltage: _Floats = field(init=False)

    def __post_init__(self) -> None:
        scores = score(self.table)
        self.switches = scores.switches
        self.clean = scores.clean
        self.capacitor_utilisation = scores.capacitor_utilisation
        self.switch_utilisation = scores.switch_utilisation
        self.highest_capacitor_voltage = np.abs(self.table.voltages).max(axis=1) / self.table.scale
        self.highest_blocking_voltage = switch_table(self.table).blocking.max(axis=1) / self.table.scale

    def __len__(self) -> int:
        return len(self.table)

    def passing(self, filters: Filters) -> NDArray[np.bool_]:
        passed = np.ones(len(self), dtype=bool)
        if filters.switches is not None:
            passed &= self.switches <= filters.switches
        return passed


def _best(
    candidates: Sequence[_Candidates], chosen: Sequence[NDArray[np.bool_]], limit: int | None
) -> list[Listed]:
    rows = [np.flatnonzero(mask) for mask in chosen]
    keys = [
        np.stack(
            [
                -np.round(c.capacitor_utilisation[r] * c.switch_utilisation[r], _DIGITS_THAT_TIE),
                np.full(len(r), float(c.table.n)),
                c.switches[r].astype(np.float64),
                -c.capacitor_utilisation[r],
            ]
        )
        for c, r in zip(candidates, rows, strict=True)
    ]
    if not keys:
        return []
    key = np.concatenate(keys, axis=1)
    owner = np.repeat(np.arange(len(candidates)), [len(r) for r in rows])
    ids = np.concatenate(
        [np.array(c.table.take(r).ids(), dtype=object) for c, r in zip(candidates, rows, strict=True)]
    )
    order = np.lexsort((ids.astype(str), *key[::-1]))[:limit]
    row = np.concatenate(rows)
    names = family_names(max(c.table.n for c in candidates))
    return [
        _listed(candidates[owner[k]], int(row[k]), str(ids[k]), names.get(str(ids[k]), ()))
        for k in order.tolist()
    ]


def _listed(candidates: _Candidates, row: int, converter_id: str, families: tuple[str, ...]) -> Listed:
    return Listed(
        id=converter_id,
        wiring=candidates.table.code(row),
        flying_capacitors=candidates.table.n,
        switches=int(candidates.switches[row]),
        ratio=candidates.table.ratio(row),
        capacitor_utilisation=float(candidates.capacitor_utilisation[row]),
        switch_utilisation=float(candidates.switch_utilisation[row]),
        highest_capacitor_voltage=float(candidates.highest_capacitor_voltage[row]),
        highest_blocking_voltage=float(candidates.highest_blocking_voltage[row]),
        families=families,
        clean=bool(candidates.clean[row]),
    )
