"""What a survey found, as rows: the best converters of a ratio, and a line per ratio."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

import numpy as np

from capmuster.enumerate.families import family_names
from capmuster.rank.scores.listed import Chosen, Listed, ordered

if TYPE_CHECKING:
    from fractions import Fraction

    import pandas as pd

    from capmuster.rank.scores.survey import Survey

COLUMNS = {
    "ratio": "V/V",
    "flying_capacitors": "",
    "converters": "",
    "converters_all": "",
    "best_capacitor_utilisation": "1",
    "best_switch_utilisation": "1",
    "capacitor_utilisation": "1",
    "switch_utilisation": "1",
    "switches": "",
    "id": "",
    "wiring": "",
}
"""Columns of the table of ratios, with their units."""


@dataclass(frozen=True, slots=True)
class RatioRow:
    """What exactly so many flying capacitors can do for one ratio.

    Attributes
    ----------
    ratio
        M = V_out / V_in.
    flying_capacitors
        How many, exactly.
    converters, converters_all
        Converters without an idle or an equipotential switch, and all non-degenerate ones.
    best_capacitor_utilisation, best_switch_utilisation
        The best of either alone.
    best
        The converter with the best product of both.
    """

    ratio: Fraction
    flying_capacitors: int
    converters: int
    converters_all: int
    best_capacitor_utilisation: float
    best_switch_utilisation: float
    best: Listed

    def exact(self) -> list[str]:
        """Cells under `COLUMNS`, every figure in full."""
        one = self.best
        figures = (
            self.best_capacitor_utilisation,
            self.best_switch_utilisation,
            one.capacitor_utilisation,
            one.switch_utilisation,
        )
        counts = (self.flying_capacitors, self.converters, self.converters_all)
        return [
            str(self.ratio),
            *map(str, counts),
            *map(repr, figures),
            str(one.switches),
            one.id,
            one.wiring,
        ]

    def shown(self) -> list[str]:
        """Cells for a terminal; without the number of capacitors."""
        one = self.best
        figures = (
            self.best_capacitor_utilisation,
            self.best_switch_utilisation,
            one.capacitor_utilisation,
            one.switch_utilisation,
        )
        cells = [str(self.ratio), str(self.converters), str(self.converters_all)]
        return [*cells, *(f"{figure:.4f}" for figure in figures), str(one.switches), one.id, one.wiring]


def kept_converters(
    survey: Survey, ratio: Fraction, which: Literal["best", "frontier"], limit: int | None = None
) -> tuple[Listed, ...]:
    """Write out what a survey kept for a ratio, best first: the best, or what no other beats."""
    candidates = survey.best(ratio) if which == "best" else survey.frontier(ratio)
    rows = np.arange(len(candidates.measures))
    return ordered([Chosen(candidates, candidates.measures, rows)], ratio, family_names(survey.n), limit)


def best_per_ratio(survey: Survey) -> list[RatioRow]:
    """Say for every ratio what the best converters reach; ratios without a clean converter are left out."""
    found = []
    for ratio in survey.ratios:
        clean, every = survey.counts(ratio)
        if clean:
            measures = survey.frontier(ratio).measures
            found.append(
                RatioRow(
                    ratio=ratio,
                    flying_capacitors=survey.n,
                    converters=clean,
                    converters_all=every,
                    best_capacitor_utilisation=float(measures.capacitor_utilisation.max()),
                    best_switch_utilisation=float(measures.switch_utilisation.max()),
                    best=kept_converters(survey, ratio, "frontier", 1)[0],
                )
            )
    return found


def survey_table(survey: Survey) -> pd.DataFrame:
    """Return a line per ratio.

    Returns
    -------
    pandas.DataFrame
        Columns as in `COLUMNS`, which says their units; the ratio is a fraction in text.
    """
    import pandas as pd  # noqa: PLC0415 -- slow to import

    rows = best_per_ratio(survey)
    frame = pd.DataFrame(
        {
            "ratio": [str(row.ratio) for row in rows],
            "flying_capacitors": [row.flying_capacitors for row in rows],
            "converters": [row.converters for row in rows],
            "converters_all": [row.converters_all for row in rows],
            "best_capacitor_utilisation": [row.best_capacitor_utilisation for row in rows],
            "best_switch_utilisation": [row.best_switch_utilisation for row in rows],
            "capacitor_utilisation": [row.best.capacitor_utilisation for row in rows],
            "switch_utilisation": [row.best.switch_utilisation for row in rows],
            "switches": [row.best.switches for row in rows],
            "id": [row.best.id for row in rows],
            "wiring": [row.best.wiring for row in rows],
        }
    )
    frame.attrs = {"units": dict(COLUMNS)}
    return frame
