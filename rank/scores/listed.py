"""Converters of one ratio, put in order and written out.

Best first: by the product of capacitor and switch utilisation, because at a given capacitor energy and switch
V-A product it goes with 1/sqrt(R_SSL R_FSL) and so needs no technology (the metrics of both limits, Seeman
and Sanders 2008); then fewer flying capacitors, fewer switches, higher capacitor utilisation, id.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from capmuster.rank.frontier import frontier

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence
    from fractions import Fraction

    from numpy.typing import NDArray

    from capmuster.enumerate.converters import ConverterTable
    from capmuster.rank.scores.candidates import Candidates, Measures

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
class Chosen:
    """Rows of candidates that are to be listed."""

    candidates: Candidates
    measures: Measures
    rows: NDArray[np.intp]

    def narrowed(self, kept: NDArray[np.bool_] | NDArray[np.intp]) -> Chosen:
        """Keep some of the rows."""
        return Chosen(self.candidates, self.measures, self.rows[kept])

    @property
    def product(self) -> NDArray[np.float64]:
        """Both utilisations multiplied, rounded so that equal products tie."""
        measures = self.measures
        both = measures.capacitor_utilisation[self.rows] * measures.switch_utilisation[self.rows]
        return np.asarray(np.round(both, _DIGITS_THAT_TIE))


def unbeaten(groups: Sequence[Chosen]) -> list[Chosen]:
    """Keep only converters that no other one in the groups beats.

    One beats another if it is as good in flying capacitors, switches, both utilisations and highest blocking
    voltage, and better in one of them.
    """
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

    groups: Sequence[Chosen]
    tables: Sequence[ConverterTable]
    ids: Sequence[str]
    group: Sequence[int]
    row: Sequence[int]


def _best(groups: Sequence[Chosen], limit: int | None) -> _Ranked:
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


def ordered(
    groups: Sequence[Chosen], ratio: Fraction, names: Mapping[str, tuple[str, ...]], limit: int | None = None
) -> tuple[Listed, ...]:
    """Write out converters of one ratio, best first.

    Parameters
    ----------
    groups
        The converters.
    ratio
        Their ratio.
    names
        Names of the families of each member, by id.
    limit
        Most converters written out.
    """
    ranked = _best(groups, limit)
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
                families=names.get(one, ()),
                clean=bool(measures.clean[k]),
            )
        )
    return tuple(found)
