"""Converters of one ratio with everything they are filtered and sorted by, before any of them is written out.

Census candidates are cells in their roles, read from the scored census; their wirings are only worked out
for the rows that somebody asks for. Family members above the census offer the same columns.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Protocol

import numpy as np

from capmuster.enumerate.attachments import EXCHANGES
from capmuster.enumerate.census import Addresses, cells_at
from capmuster.enumerate.converters import ROLES, in_roles, ratios_of_triple, roles_of, triple_of_ratio
from capmuster.enumerate.laws import laws
from capmuster.rank.scores.cellscores import three_ports, utilisations
from capmuster.rank.scores.scoredcensus import scored_census, silent
from capmuster.rank.scores.switchtable import score, switch_table

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator
    from fractions import Fraction

    from numpy.typing import NDArray

    from capmuster.enumerate.converters import ConverterTable
    from capmuster.enumerate.skeletons import SkeletonTable
    from capmuster.rank.scores.cellscores import CellScores
    from capmuster.rank.scores.scoredcensus import Note

_G, _I, _O = range(3)


@dataclass(frozen=True, slots=True)
class Measures:
    """What candidates are filtered and sorted by; every array has shape (N,).

    Attributes
    ----------
    flying_capacitors
        Number of flying capacitors, the same for all.
    switches
        Number of switches.
    clean
        Whether no switch is idle or equipotential.
    capacitor_utilisation, switch_utilisation
        E / sum |q v| over capacitors and 4 E / sum |q v| over switches; 0 in unity converters.
    highest_capacitor_voltage, highest_blocking_voltage
        Highest voltage of a capacitor and of an open switch [V per V of input].
    output_evenness
        Lesser phase share of the output charge over one half: 1 when both phases feed it alike, 0 for one
        only.
    plate_on_ports
        Whether every capacitor has a plate that meets a port in both phases, so that a parasitic capacitance
        there loads no internal node. (A plate that meets nothing in a phase would be idle.)
    """

    flying_capacitors: int
    switches: NDArray[np.int64]
    clean: NDArray[np.bool_]
    capacitor_utilisation: NDArray[np.float64]
    switch_utilisation: NDArray[np.float64]
    highest_capacitor_voltage: NDArray[np.float64]
    highest_blocking_voltage: NDArray[np.float64]
    output_evenness: NDArray[np.float64]
    plate_on_ports: NDArray[np.bool_]

    def __len__(self) -> int:
        """Count the candidates."""
        return len(self.switches)


class Candidates(Protocol):
    """Converters of one ratio and one number of flying capacitors."""

    @property
    def measures(self) -> Measures:
        """What they are filtered and sorted by."""

    @property
    def in_census(self) -> bool:
        """Whether they are all there are."""

    def table(self, rows: NDArray[np.intp] | NDArray[np.bool_]) -> ConverterTable:
        """Work out the wirings of chosen rows, in canonical form and in the order of the rows."""


@dataclass(frozen=True, slots=True)
class CensusCandidates:
    """All census converters of one ratio with exactly ``n`` flying capacitors.

    Attributes
    ----------
    n, ratio
        Number of flying capacitors, and M.
    measures
        What they are filtered and sorted by.
    """

    n: int
    ratio: Fraction
    measures: Measures
    _skeletons: SkeletonTable
    _where: Addresses
    _roles: NDArray[np.int8]

    @property
    def in_census(self) -> bool:
        """True: these are all there are."""
        return True

    def table(self, rows: NDArray[np.intp] | NDArray[np.bool_]) -> ConverterTable:
        """Work out the wirings of chosen rows, in canonical form and in the order of the rows."""
        return in_roles(cells_at(self._where.take(rows), self._skeletons), self._roles[rows])


def census_candidates(
    n: int, ratio: Fraction, *, clean_only: bool = False, say: Callable[[Note], None] = silent
) -> CensusCandidates:
    """Read the census converters of one ratio with exactly ``n`` flying capacitors.

    Parameters
    ----------
    n
        Number of flying capacitors, within the census.
    ratio
        M, not 0.
    clean_only
        Whether converters with an idle or an equipotential switch are left out.
    say
        As in `capmuster.rank.scores.scoredcensus.scored_census`.

    Raises
    ------
    CapmusterError
        When ``n`` is beyond the census.
    """
    census = scored_census(n, say)
    cells = census.cells(triple_of_ratio(ratio), clean_only=clean_only)
    return candidates_of(cells, census.skeletons, ratio)


def candidates_of(cells: CellScores, skeletons: SkeletonTable, ratio: Fraction) -> CensusCandidates:
    """Give scored cells their roles of one ratio.

    Parameters
    ----------
    cells
        The cells.
    skeletons
        The skeletons that they refer to.
    ratio
        M, not 0.
    """
    g = three_ports(cells.charge_b, cells.charge_c)
    rows, roles = roles_of(g, EXCHANGES[cells.mirror], ratio)
    kept, g = cells.take(rows), g[rows].astype(np.int64)
    output = np.argmax(ROLES[roles] == _O, axis=1) if len(rows) else rows
    g_out = g[np.arange(len(rows)), output]
    unit = laws(skeletons).determinant[kept.skeleton].astype(np.int64)
    volt = (unit * np.abs(g_out)).astype(np.float64)  # the input voltage in the unit of the cell's potentials
    first = three_ports(kept.first_b, kept.first_c)[np.arange(len(rows)), output]
    capacitor_utilisation, switch_utilisation = utilisations(kept, unit)
    outer = skeletons.words == 0
    stiff = np.all(np.any(outer[:, :, :2] & outer[:, :, 2:], axis=2), axis=1)
    measures = Measures(
        flying_capacitors=skeletons.n,
        switches=kept.switches.astype(np.int64),
        clean=kept.clean,
        capacitor_utilisation=capacitor_utilisation,
        switch_utilisation=switch_utilisation,
        highest_capacitor_voltage=kept.highest_capacitor / volt,
        highest_blocking_voltage=kept.highest_blocking / volt,
        output_evenness=_evenness(first, g_out),
        plate_on_ports=stiff[kept.skeleton],
    )
    where = Addresses(skeletons.n, kept.skeleton, kept.attachment, np.ones(len(rows), np.int8), kept.mirror)
    return CensusCandidates(skeletons.n, ratio, measures, skeletons, where, roles)


def census_ratios(n: int, say: Callable[[Note], None] = silent) -> tuple[Fraction, ...]:
    """Return every ratio that exactly ``n`` flying capacitors reach, ascending.

    Raises
    ------
    CapmusterError
        When ``n`` is beyond the census.
    """
    return tuple(
        sorted(ratio for triple in scored_census(n, say).triples for ratio in ratios_of_triple(triple))
    )


def candidates_between(
    n: int,
    low: Fraction | float,
    high: Fraction | float,
    *,
    clean_only: bool = True,
    say: Callable[[Note], None] = silent,
) -> Iterator[CensusCandidates]:
    """Read the census converters of every ratio from ``low`` to ``high``, one ratio at a time, ascending.

    Raises
    ------
    CapmusterError
        When ``n`` is beyond the census.
    """
    for ratio in census_ratios(n, say):
        if low <= ratio <= high:
            yield census_candidates(n, ratio, clean_only=clean_only, say=say)


@dataclass(frozen=True, slots=True)
class FamilyCandidates:
    """Family members of one ratio and one size above the census."""

    members: ConverterTable

    @property
    def in_census(self) -> bool:
        """False: there are others of their size."""
        return False

    @property
    def measures(self) -> Measures:
        """What they are filtered and sorted by."""
        table = self.members
        scores = score(table)
        first = np.zeros(len(table), dtype=np.int64)
        for plate, sign in ((0, 1), (1, -1)):
            first += sign * ((table.words[:, :, plate] == _O) * table.charges).sum(axis=1)
        on_port = table.words < len(EXCHANGES[0])
        return Measures(
            flying_capacitors=table.n,
            switches=scores.switches,
            clean=scores.clean,
            capacitor_utilisation=scores.capacitor_utilisation,
            switch_utilisation=scores.switch_utilisation,
            highest_capacitor_voltage=np.abs(table.voltages).max(axis=1) / table.scale,
            highest_blocking_voltage=switch_table(table).blocking.max(axis=1) / table.scale,
            output_evenness=_evenness(first, table.port_charges[:, _O]),
            plate_on_ports=np.all(np.any(on_port[:, :, :2] & on_port[:, :, 2:], axis=2), axis=1),
        )

    def table(self, rows: NDArray[np.intp] | NDArray[np.bool_]) -> ConverterTable:
        """Return the chosen rows."""
        return self.members.take(rows)


def _evenness(first: NDArray[np.integer], total: NDArray[np.int64]) -> NDArray[np.float64]:
    """Lesser phase share of a port's charge over one half, from its charge in phase 1 and per cycle."""
    lesser = np.minimum(first * np.sign(total), (total - first) * np.sign(total))
    return np.asarray(np.maximum(2 * lesser / np.abs(total), 0.0))
