"""The figures behind the columns of a shortlist: losses, spreads, the capacitors around a converter."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from capmuster.rank.design.losses import TERM_FIELDS, TERMS
from capmuster.rank.design.ripple import capacitor_for, excursion, phase_shares

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from capmuster.rank.design.objectives import Sized
    from capmuster.rank.design.tolerance import Spread
    from capmuster.rank.inputs.brief import Brief
    from capmuster.rank.pool import Pool

_I, _O = 1, 2


def loss_values(
    sized: Sized, area: NDArray[np.float64], ideal: NDArray[np.float64]
) -> dict[str, NDArray[np.float64]]:
    """Work out the columns, by name.

    Parameters
    ----------
    sized
        N candidates.
    area
        Their areas, idle switches included, shape (N,) [mm2].
    ideal
        Their ideal outputs at the nominal input, shape (N,) [V].
    """
    at, design = sized.nominal, sized.design
    with np.errstate(invalid="ignore", divide="ignore"):
        gap = (sized.greatest - sized.least) / np.abs(sized.merit)
    values = {
        "slow_limit_ohm": sized.minimum.slow,
        "fast_limit_ohm": sized.minimum.fast,
        "droop_V": ideal - at.output,
        "efficiency_minimum": sized.minimum.efficiency,
        "efficiency_nominal": at.efficiency,
        "efficiency_maximum": sized.maximum.efficiency,
        "frequency_Hz": at.frequency,
        "frequency_highest_Hz": sized.minimum.frequency,
        "duty_phase_1": design.duty,
        "load_A": design.current,
        "output_minimum_V": sized.minimum.output,
        "output_power_W": at.output_power,
        "power_density_W_per_mm2": at.output_power / area,
        "loss_W": at.losses.total,
        "bound_gap": np.maximum(gap, 0.0),
        "profile_loss_W": sized.mean_loss,
        "profile_efficiency": sized.mean_efficiency,
    }
    for term, name in zip(TERMS, TERM_FIELDS, strict=True):
        values[term.name] = getattr(at.losses, name)
    return values


def spread_values(spreads: Sequence[Spread]) -> dict[str, NDArray[np.float64]]:
    """Work out the columns of tolerances, by name; none without spreads."""
    if not spreads:
        return {}
    names = {
        "efficiency_5pct": "efficiency",
        "droop_5pct_V": "droop",
        "efficiency_corner": "corner_efficiency",
        "droop_corner_V": "corner_droop",
        "output_holds": "holds",
        "comes_first": "first",
    }
    return {column: np.array([getattr(one, name) for one in spreads]) for column, name in names.items()}


def capacitor_values(brief: Brief, pool: Pool, rows: int) -> dict[str, NDArray[np.float64]]:
    """Work out the capacitors around the first candidates, by column; none without a ripple in the brief.

    The lowest frequency of the input range counts. The input draws |M| times the load current.
    """
    figures = pool.evaluation
    ratio = np.abs(figures.ratio[:rows])
    if figures.sized is None:
        frequency, duty = np.full(rows, brief.frequency), np.full(rows, 0.5)
        current = np.full(rows, brief.current)
    else:
        sized = figures.sized
        ends = [at.frequency[:rows] for at in (sized.minimum, sized.nominal, sized.maximum)]
        frequency, duty = np.fmin.reduce(ends), sized.design.duty[:rows]
        current = sized.design.current[:rows]
    values = {}
    for column, port, ripple, mean in (
        ("output_capacitor_F", _O, brief.output_ripple, current),
        ("input_capacitor_F", _I, brief.input_ripple, current * ratio),
    ):
        if ripple is not None:
            shares = [
                phase_shares(pool.tables[group].take(slice(row, row + 1)), port)[0]
                for group, row in zip(pool.group[:rows].tolist(), pool.row[:rows].tolist(), strict=True)
            ]
            movement = excursion(np.reshape(shares, (rows, 2)), duty, brief.copies)
            values[column] = capacitor_for(movement, mean, frequency, ripple)
    return values
