"""Dangers of the job that a brief gives away, in words for a design review."""

from __future__ import annotations

from typing import TYPE_CHECKING

from capmuster.rank.inputs.quantity import format_quantity

if TYPE_CHECKING:
    from capmuster.rank.inputs.brief import Brief

# Common practice, in round figures that many codes share; the texts say that the local ones decide.
_SAFE_DRY = 60.0  # [V] direct voltage, steady
_SAFE_WET = 30.0  # [V]
_ENERGY_HAZARD = 20.0  # [J] stored at 2 V or more: burns, and metal spray from a dropped tool
_POWER_HAZARD = 240.0  # [W] that a short circuit can draw from a supply

_DEFER = "Local codes decide, and work on it is for those licensed for it."


def cautions(brief: Brief) -> list[str]:
    """List what a reader of the shortlist must be warned of.

    Parameters
    ----------
    brief
        The job.

    Returns
    -------
    list of str
        A few sentences for each danger; empty where none is known from the brief alone. Voltages are taken
        between any two of input, output and ground, energies as if all capacitor area stood at its rating.
    """
    output = _highest_output(brief)
    span = max(0.0, output, brief.input_maximum) - min(0.0, output)
    found = []
    if span > _SAFE_DRY:
        found.append(
            f"{format_quantity(span, 'V')} between terminals is above {_SAFE_DRY:.0f} V d.c., where contact "
            f"is commonly held to be dangerous: guard live parts. {_DEFER}"
        )
    elif span > _SAFE_WET:
        found.append(
            f"{format_quantity(span, 'V')} between terminals is above {_SAFE_WET:.0f} V d.c., commonly the "
            f"limit for contact in wet places, and lower where people stand in water. {_DEFER}"
        )
    if span > _SAFE_WET:
        found.append(
            "A switched-capacitor converter does not isolate: one failed switch can put the input on the "
            "output. Fuse the input, and rate or clamp what is fed."
        )
    power = abs(brief.required) * brief.current
    if power >= _POWER_HAZARD:
        found.append(
            f"The source of a {format_quantity(power, 'W')} load can heat a short circuit until it burns: "
            f"fuse it near the source. {_DEFER}"
        )
    energy = _stored_energy(brief)
    if energy >= _ENERGY_HAZARD:
        found.append(
            f"The capacitors may store up to {format_quantity(energy, 'J')}: discharge them before anyone "
            f"touches the board. {_DEFER}"
        )
    return found


def _highest_output(brief: Brief) -> float:
    """Output furthest from 0 [V]; where the ratio is open, what it is at least at the highest input."""
    if brief.use == "regulated":
        return brief.required
    largest = max((abs(ratio) for ratio in brief.ratios or ()), default=brief.least_ratio)
    return brief.sign * float(largest) * brief.input_maximum


def _stored_energy(brief: Brief) -> float:
    """Bound on the energy of all flying capacitors [J], 0 where their area is free."""
    area = brief.capacitor_area if brief.capacitor_area is not None else brief.area
    if area is None:
        return 0.0
    return max(0.5 * one.density * one.rating**2 for one in brief.technology.capacitors) * area
