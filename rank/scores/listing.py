"""Every converter of one ratio: the census as far as it is complete, family members beyond."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from capmuster.enumerate.attainable import capacitors_needed, nearest_attainable
from capmuster.enumerate.census import CENSUS_REACH
from capmuster.enumerate.converters import table_of
from capmuster.enumerate.errors import CapmusterError
from capmuster.enumerate.families import family_names, members
from capmuster.rank.inputs.quantity import parse_ratio
from capmuster.rank.scores.candidates import FamilyCandidates, census_candidates
from capmuster.rank.scores.filters import Filters
from capmuster.rank.scores.listed import COLUMN_UNITS, Chosen, ordered, unbeaten
from capmuster.rank.scores.scoredcensus import silent

if TYPE_CHECKING:
    from collections.abc import Callable
    from fractions import Fraction

    import pandas as pd
    from numpy.typing import NDArray

    from capmuster.rank.scores.candidates import Candidates
    from capmuster.rank.scores.listed import Listed
    from capmuster.rank.scores.scoredcensus import Note

MOST_CAPACITORS = 40
"""Most flying capacitors that a listing may ask for."""


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
        Least number of flying capacitors that is known to reach the ratio.
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
        groups.append(Chosen(candidates, measures, rows))
    if frontier_only:
        groups = unbeaten(groups)
    return Listing(
        ratio=ratio,
        max_capacitors=capacitors,
        complete_up_to=reach,
        count=count,
        count_all=count_all,
        total=sum(len(group.rows) for group in groups),
        converters=ordered(groups, ratio, in_families.names, limit),
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
