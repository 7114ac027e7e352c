"""The shortlist of a brief: the ranked table, each candidate's elements, and what the search was."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np

from capmuster.enumerate.errors import CapmusterError
from capmuster.enumerate.families import family_names
from capmuster.rank._version import __version__
from capmuster.rank.design.certify import certify
from capmuster.rank.design.choices import start_of
from capmuster.rank.design.devicechoice import choose_and_size
from capmuster.rank.design.lossvalues import capacitor_values, loss_values, spread_values
from capmuster.rank.design.tolerance import spreads
from capmuster.rank.elements import Element, elements_of
from capmuster.rank.evaluation import ceiling, efficiency
from capmuster.rank.exact.finalist import finalists
from capmuster.rank.exact.finaltable import EXACT_COLUMNS, finalist_frame
from capmuster.rank.files.columns import COLUMNS, Column, columns_of
from capmuster.rank.inputs.cautions import cautions
from capmuster.rank.pool import Pool, gather
from capmuster.rank.scores.switching import switch_network
from capmuster.rank.structs import rows_of

if TYPE_CHECKING:
    from collections.abc import Sequence

    import pandas as pd

    from capmuster.enumerate.wiring import Converter
    from capmuster.rank.design.certify import Certificate
    from capmuster.rank.design.exactchoice import ExactChoice
    from capmuster.rank.design.objectives import Sized
    from capmuster.rank.design.operation import Candidates
    from capmuster.rank.design.tolerance import Spread
    from capmuster.rank.exact.finalist import Finalist
    from capmuster.rank.inputs.brief import Brief
    from capmuster.rank.scores.switching import SwitchNetwork

__all__ = ["COLUMNS", "Column", "Included", "Shortlist", "shortlist"]


@dataclass(frozen=True, slots=True)
class Included:
    """What became of a wiring that the user put in.

    Attributes
    ----------
    id, wiring
        The converter.
    place
        Its place among all candidates, or None.
    reason
        Why it has none.
    """

    id: str
    wiring: str
    place: int | None
    reason: str


@dataclass(frozen=True)
class Shortlist:
    """A brief's candidates, ranked.

    Attributes
    ----------
    brief
        What was asked for.
    pool
        All candidates that meet it, best first.
    top
        How many of them the table shows.
    included
        What became of the wirings that the user put in.
    finalists
        Exact classes, switch trees and sizes of the rows of the table, None where there are none.
    certificate
        What is proven about the order, or None.
    """

    brief: Brief
    pool: Pool
    top: int
    included: tuple[Included, ...]
    finalists: tuple[ExactChoice | None, ...] = ()
    certificate: Certificate | None = None

    def __len__(self) -> int:
        """Rows of the table."""
        return min(self.top, len(self.pool))

    @property
    def cautions(self) -> list[str]:
        """Dangers that the brief gives away, in words."""
        return cautions(self.brief)

    @property
    def columns(self) -> tuple[Column, ...]:
        """Columns of the table, in their order."""
        *own, wiring = columns_of(self.brief)
        return (*own, *EXACT_COLUMNS, wiring)

    @cached_property
    def exact(self) -> tuple[Finalist, ...]:
        """The rows of the table on their exact impedance, with their stress in use and at start-up."""
        return finalists(self)

    @cached_property
    def best_family_place(self) -> int | None:
        """Place, counted from 1, of the best candidate that belongs to a family; None if none does."""
        names = self._names
        return next((k + 1 for k, one in enumerate(self.pool.ids.tolist()) if one in names), None)

    @property
    def gain_over_family(self) -> float | None:
        """What is ranked by, of the best family member over the best candidate; None without a family member.

        Area or loss, at least 1; or the best candidate's power density over the best family member's.
        """
        place = self.best_family_place
        if place is None:
            return None
        merit = self.pool.evaluation.merit
        quotient = float(merit[place - 1] / merit[0])
        return quotient if merit[0] > 0 else 1 / quotient

    @property
    def provenance(self) -> dict[str, str]:
        """Version, and fingerprints of the technology and of the brief."""
        return {
            "capmuster_version": __version__,
            "technology_fingerprint": self.brief.technology.fingerprint,
            "brief_fingerprint": self.brief.fingerprint,
        }

    @cached_property
    def frame(self) -> pd.DataFrame:
        """The table: one row per candidate, best first, with the columns of `columns`."""
        import pandas as pd  # noqa: PLC0415 -- slow to import

        places = np.arange(len(self))
        e = self.pool.evaluation
        area, impedance, ratio = e.area[places], e.impedance[places], e.ratio[places]
        levels = {
            "minimum": self.brief.input_minimum,
            "nominal": self.brief.input_nominal,
            "maximum": self.brief.input_maximum,
        }
        values: dict[str, object] = {
            "place": places + 1,
            "id": self.pool.ids[places].tolist(),
            "ratio": [str(self.pool.ratio(k)) for k in places.tolist()],
            "families": [", ".join(self.families(k)) for k in places.tolist()],
            "flying_capacitors": self.pool.capacitors[places],
            "switches": e.switches[places],
            "area_mm2": area,
            "capacitor_area_mm2": e.capacitor_area[places],
            "silicon_area_mm2": e.silicon_area[places],
            "conductance_per_area_S_per_mm2": 1 / (impedance * area),
            "impedance_ohm": impedance,
            "slow_limit_ohm": e.slow[places] / e.capacitor_area[places],
            "fast_limit_ohm": e.fast[places] / e.switching_area[places],
            "droop_V": self.brief.current * impedance,
            "capacitor_utilisation": e.capacitor_utilisation[places],
            "switch_utilisation": e.switch_utilisation[places],
            "output_evenness": e.output_evenness[places],
            "highest_capacitor_voltage_V": e.highest_capacitor_voltage[places],
            "highest_blocking_voltage_V": e.highest_blocking_voltage[places],
            "floating_drives": e.floating_drives[places],
            "pareto": self.pool.pareto[places],
            "wiring": [self.pool.code(k) for k in places.tolist()],
        }
        for level, volts in levels.items():
            values[f"efficiency_{level}"] = efficiency(self.brief, ratio, impedance, volts)
            values[f"ceiling_{level}"] = ceiling(self.brief, ratio, volts)
        if e.sized is not None:
            ideal = np.abs(ratio) * self.brief.input_nominal
            values.update(loss_values(rows_of(e.sized, places), area, ideal))
        values.update(spread_values(self.spreads))
        values.update(capacitor_values(self.brief, self.pool, len(self)))
        exact = finalist_frame(self.exact)
        values.update({column.name: exact[column.name] for column in EXACT_COLUMNS})
        frame = pd.DataFrame({column.name: values[column.name] for column in self.columns})
        frame.attrs["units"] = {column.name: column.unit for column in self.columns}
        frame.attrs.update(self.provenance)
        return frame

    @cached_property
    def spreads(self) -> tuple[Spread, ...]:
        """What the brief's tolerances do to the rows of the table; empty without any."""
        tolerance = self.brief.tolerance
        if tolerance is None:
            return ()
        rows = [(str(self.pool.ids[k]), *self._sized_candidate(k)) for k in range(len(self))]
        return spreads(rows, tolerance)

    def _sized_candidate(self, row: int) -> tuple[Candidates, Sized]:
        exact = self._exact(row)
        if exact is not None:
            return exact.candidate, exact.sized
        return choose_and_size(start_of(self.pool.converter(row), self.brief)[1])

    def families(self, row: int) -> tuple[str, ...]:
        """Families of the candidate in a row, counted from 0."""
        return self._names.get(str(self.pool.ids[row]), ())

    def elements(self, row: int) -> tuple[Element, ...]:
        """Every capacitor and switch of the candidate in a row, counted from 0, sized."""
        e = self.pool.evaluation
        return elements_of(
            self.pool.converter(row),
            self.brief,
            float(e.capacitor_area[row]),
            float(e.switching_area[row]),
            self._exact(row),
        )

    def network(self, row: int) -> SwitchNetwork:
        """Return clusters and switches of the candidate in a row, as `elements` lists them."""
        exact = self._exact(row)
        return switch_network(self.pool.converter(row)) if exact is None else exact.network

    def _exact(self, row: int) -> ExactChoice | None:
        return self.finalists[row] if row < len(self.finalists) else None

    @cached_property
    def _names(self) -> dict[str, tuple[str, ...]]:
        return family_names(int(max(self.pool.capacitors, default=1)))


def shortlist(brief: Brief, *, top: int = 10, include: Sequence[Converter] = ()) -> Shortlist:
    """Rank every converter that can do the job of a brief.

    Parameters
    ----------
    brief
        What is asked for.
    top
        Rows of the table.
    include
        Converters of the user's own, ranked with the rest.

    Raises
    ------
    CapmusterError
        When ``top`` is below 1.
    """
    if top < 1:
        raise CapmusterError(f"top: {top} is too small", accepted="1 or more")
    pool = gather(brief, include)
    names = family_names(int(max(pool.capacitors, default=1))) if brief.counts_losses else {}
    certified = certify(pool, brief, top, names.keys(), [one.id for one in include])
    pool = certified.pool
    place_of = {one: k + 1 for k, one in enumerate(pool.ids.tolist())} if include else {}
    included = tuple(
        Included(
            one.id, one.code, place_of.get(one.id), "" if one.id in place_of else pool.refused.get(one.id, "")
        )
        for one in dict.fromkeys(include)
    )
    return Shortlist(brief, pool, top, included, certified.finalists, certified.certificate)
