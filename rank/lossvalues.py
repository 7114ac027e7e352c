"""The figures behind the columns of a shortlist that counts losses."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from capmuster.rank.losses import TERM_FIELDS, TERMS

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from capmuster.rank.objectives import Sized


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
