"""Every converter of one ratio: the census as far as it is complete, family members beyond.

Best first: by the product of capacitor and switch utilisation, because at a given capacitor energy and switch
V-A product it goes with 1/sqrt(R_SSL R_FSL) and so needs no technology (the metrics of both limits, Seeman
and Sanders 2008); then fewer flying capacitors, fewer switches, higher capacitor utilisation, id.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from capmuster.enumerate.attainable import capacitors_needed, nearest_attainable
from capmuster.enumerate.census import CENSUS_REACH
from capmuster.enumerate.converters import table_of
from capmuster.enumerate.errors import CapmusterError
from capmuster.enumerate.families import family_names, members
from capmuster.rank.candidates import FamilyCandidates, census_candidates
from capmuster.rank.filters import Filters
from capmuster.rank.frontier import frontier
from capmuster.rank.quantity import parse_ratio
from capmuster.rank.scoredcensus import silent

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence
    from fractions import Fraction

    import pandas as pd
    from numpy.typing import NDArray

    from capmuster.enumerate.converters import ConverterTable
    from capmuster.rank.candidates import Candidates, Measures
    from capmuster.rank.scoredcensus import Note

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
    output_evenness
        Lesser phase share of the output charge over one half: 1 when both phases feed it alike, 0 for one
        only.
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
    output_evenness: float
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
    "output_evenness": "1",
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
    total
        Number of converters before ``limit``, family members above the census included.
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
    total: int
    converters: tuple[Listed, ...]
    nearest: tuple[Fraction, ...]
    capacitors_needed: int


def find_converters(
    ratio: Fraction,
    capacitors: int,
    *,
    filters: Filters = Filters(),  # noqa: B008 -- frozen
    include_unclean: bool = False,
    frontier_only: bool = False,
    limit: int | None = None,
    say: Callable[[Note], None] = silent,
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
    frontier_only
        Whether only converters are listed that no other listed one beats: as good in flying capacitors,
        switches, both utilisations and highest blocking voltage, and better in one of them.
    limit
        Most converters listed.
    say
        Is told when a census has to be built, and how far that is.

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
    found: list[Candidates] = [census_candidates(n, ratio, say=say) for n in range(1, reach + 1)]
    found += _members_beyond(ratio, reach, capacitors)
    in_families = _InFamilies(ratio, capacitors)
    groups = []
    count = count_all = 0
    for candidates in found:
        measures = candidates.measures
        passing = filters.passing(measures)
        if filters.families:
            passing &= in_families.mask(candidates, filters.families)
        if candidates.in_census:
            count_all += int(passing.sum())
            count += int((passing & measures.clean).sum())
        rows = np.flatnonzero(passing if include_unclean else passing & measures.clean)
        groups.append(_Chosen(candidates, measures, rows))
    if frontier_only:
        groups = _unbeaten(groups)
    return Listing(
        ratio=ratio,
        max_capacitors=capacitors,
        complete_up_to=reach,
        count=count,
        count_all=count_all,
        total=sum(len(group.rows) for group in groups),
        converters=tuple(_listed(_best(groups, limit), ratio, in_families)),
        nearest=() if any(len(c.measures) for c in found) else nearest_attainable(ratio, reach),
        capacitors_needed=capacitors_needed(ratio),
    )


def list_converters(
    ratio: Fraction | str | float,
    capacitors: int,
    *,
    filters: Filters = Filters(),  # noqa: B008 -- frozen
    include_unclean: bool = False,
    frontier_only: bool = False,
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
        parse_ratio(ratio),
        capacitors,
        filters=filters,
        include_unclean=include_unclean,
        frontier_only=frontier_only,
        limit=limit,
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


def _members_beyond(ratio: Fraction, reach: int, most: int) -> list[Candidates]:
    """Family members of a ratio above the census, by size, each converter once."""
    if most == reach:
        return []
    found = {
        m.converter.id: m.converter
        for m in members(most)
        if m.converter.ratio == ratio and m.converter.n > reach
    }
    sizes = sorted({converter.n for converter in found.values()})
    return [FamilyCandidates(table_of([c for c in found.values() if c.n == n])) for n in sizes]


class _InFamilies:
    """Which candidates of a ratio are family members."""

    def __init__(self, ratio: Fraction, most: int) -> None:
        self.names = family_names(most)
        self.members = [m for m in members(most) if m.converter.ratio == ratio]

    def mask(self, candidates: Candidates, families: tuple[str, ...]) -> NDArray[np.bool_]:
        """Where a candidate belongs to one of the families.

        Only candidates with the numbers of a member are worked out, and compared by their ids.
        """
        measures = candidates.measures
        wanted = {
            m.converter.id: m.converter
            for m in self.members
            if m.family in families and m.converter.n == measures.flying_capacitors
        }
        alike = np.zeros(len(measures), dtype=bool)
        if wanted:
            of_members = FamilyCandidates(table_of(list(wanted.values()))).measures
            for k in range(len(of_members)):
                alike |= (
                    (measures.switches == of_members.switches[k])
                    & (measures.capacitor_utilisation == of_members.capacitor_utilisation[k])
                    & (measures.switch_utilisation == of_members.switch_utilisation[k])
                )
        rows = np.flatnonzero(alike)
        same = np.array([one in wanted for one in candidates.table(rows).ids()], dtype=bool)
        alike[rows[~same]] = False
        return alike


@dataclass(frozen=True, slots=True)
class _Chosen:
    """Rows of candidates that are to be listed."""

    candidates: Candidates
    measures: Measures
    rows: NDArray[np.intp]

    def narrowed(self, kept: NDArray[np.bool_] | NDArray[np.intp]) -> _Chosen:
        return _Chosen(self.candidates, self.measures, self.rows[kept])

    @property
    def product(self) -> NDArray[np.float64]:
        """Both utilisations multiplied, rounded so that equal products tie."""
        measures = self.measures
        both = measures.capacitor_utilisation[self.rows] * measures.switch_utilisation[self.rows]
        return np.asarray(np.round(both, _DIGITS_THAT_TIE))


def _unbeaten(groups: Sequence[_Chosen]) -> list[_Chosen]:
    costs = [
        np.stack(
            [
                np.full(len(g.rows), float(g.measures.flying_capacitors)),
                g.measures.switches[g.rows].astype(np.float64),
                -g.measures.capacitor_utilisation[g.rows],
                -g.measures.switch_utilisation[g.rows],
                g.measures.highest_blocking_voltage[g.rows],
            ],
            axis=1,
        )
        for g in groups
    ]
    marked = frontier(np.concatenate(costs))
    ends = np.cumsum([len(g.rows) for g in groups])[:-1]
    return [g.narrowed(mask) for g, mask in zip(groups, np.split(marked, ends), strict=True)]


@dataclass(frozen=True, slots=True)
class _Ranked:
    """Chosen converters in order: group and row within it, canonical tables per group, ids."""

    groups: Sequence[_Chosen]
    tables: Sequence[ConverterTable]
    ids: Sequence[str]
    group: Sequence[int]
    row: Sequence[int]


def _best(groups: Sequence[_Chosen], limit: int | None) -> _Ranked:
    """Order candidates, and work out the wirings of the best."""
    if limit is not None and sum(len(g.rows) for g in groups) > limit:
        # Nothing below the last product that can be shown is worked out; ties are decided by the id.
        product = np.concatenate([g.product for g in groups])
        least = -np.partition(-product, limit - 1)[limit - 1] if limit else np.inf
        groups = [g.narrowed(g.product >= least) for g in groups]
    tables = [g.candidates.table(g.rows) for g in groups]
    ids = [one for table in tables for one in table.ids()]
    sizes = [len(g.rows) for g in groups]
    keys = [
        np.concatenate(parts)
        for parts in (
            [-g.measures.capacitor_utilisation[g.rows] for g in groups],
            [g.measures.switches[g.rows] for g in groups],
            [np.full(len(g.rows), g.measures.flying_capacitors) for g in groups],
            [-g.product for g in groups],
        )
    ]
    order = np.lexsort((np.array(ids, dtype=np.str_), *keys))[:limit]
    group = np.repeat(np.arange(len(groups)), sizes)
    row = np.concatenate([np.arange(size) for size in sizes])
    return _Ranked(
        groups, tables, [ids[k] for k in order.tolist()], group[order].tolist(), row[order].tolist()
    )


def _listed(ranked: _Ranked, ratio: Fraction, in_families: _InFamilies) -> list[Listed]:
    found = []
    codes = [table.codes() for table in ranked.tables]
    for group, row, one in zip(ranked.group, ranked.row, ranked.ids, strict=True):
        measures = ranked.groups[group].measures
        k = int(ranked.groups[group].rows[row])
        found.append(
            Listed(
                id=one,
                wiring=codes[group][row],
                flying_capacitors=measures.flying_capacitors,
                switches=int(measures.switches[k]),
                ratio=ratio,
                capacitor_utilisation=float(measures.capacitor_utilisation[k]),
                switch_utilisation=float(measures.switch_utilisation[k]),
                highest_capacitor_voltage=float(measures.highest_capacitor_voltage[k]),
                highest_blocking_voltage=float(measures.highest_blocking_voltage[k]),
                output_evenness=float(measures.output_evenness[k]),
                families=in_families.names.get(one, ()),
                clean=bool(measures.clean[k]),
            )
        )
    return found
