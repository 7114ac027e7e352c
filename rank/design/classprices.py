"""Which class serves an element best, at the prices that a sizing has found.

At the prices of limits, area and loss an element costs ``sqrt(n c)`` (see `capmuster.rank.sizing.Prices`).
That differs from the least area per capacitance or conductance wherever losses count: a dense capacitor with
a large plate parasitic may lose against a thin one.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from capmuster.rank.design.losses import (
    capacitor_coefficients,
    every_class,
    plate_steps,
    series_counts,
    switch_coefficients,
)
from capmuster.rank.inputs.technology import Choice

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import NDArray

    from capmuster.rank.design.operation import Candidates
    from capmuster.rank.inputs.technology import Technology
    from capmuster.rank.sizing import Prices

    Floats = NDArray[np.float64]

_O = 2
_TIE = 1e-12


@dataclass(frozen=True, slots=True)
class ClassCosts:
    """What an element costs with each class, and how many devices of it stand in series.

    Attributes
    ----------
    cost
        Shape (..., classes): ``n c``, the square of the element's part of the Lagrangian.
    series
        Shape (..., classes).
    """

    cost: Floats
    series: NDArray[np.int64]


def capacitor_costs(candidates: Candidates, prices: Prices, volts: float) -> ClassCosts:
    """Price every capacitor with every class; shape (N, n, classes)."""
    table, technology = candidates.table, candidates.brief.technology
    series = series_counts(candidates.elements.ratings.capacitors, technology.capacitor_columns().limit)
    multiplier = np.abs(table.charges / table.port_charges[:, _O, None])[..., None]
    held = (np.abs(table.voltages) / table.scale[:, None] * volts)[..., None]
    step = (plate_steps(table) * volts)[..., None]
    parts = capacitor_coefficients(technology, every_class(series), multiplier, held, step)
    limits = _wide(prices.slow) * parts.slow + _wide(prices.series) * parts.series
    spent = _wide(prices.frequency) * parts.plate + parts.leakage
    return ClassCosts(limits * (_wide(prices.capacitor_area) + _wide(prices.loss) * spent), series)


def switch_costs(candidates: Candidates, prices: Prices, volts: float) -> ClassCosts:
    """Price every switch with every class; shape (N, m, classes)."""
    table, switches = candidates.table, candidates.switches
    multiplier = switches.charges / np.abs(table.port_charges[:, _O, None]).astype(np.float64)
    blocked = switches.blocking / table.scale[:, None] * volts
    on = np.where(switches.phase == 1, prices.phase_1[:, None], prices.phase_2[:, None])
    return priced_switches(
        candidates.brief.technology, candidates.elements.ratings.switches, multiplier, blocked, on, prices
    )


def priced_switches(  # noqa: PLR0917 -- one figure each
    technology: Technology, rated: Floats, multiplier: Floats, blocked: Floats, on: Floats, prices: Prices
) -> ClassCosts:
    """Price switches with every class.

    Parameters
    ----------
    technology
        Its classes.
    rated, multiplier, blocked, on
        Voltage that each must stand [V], a_r [1], ideal blocking voltage [V] and price of on-resistance; (N,
        m).
    prices
        The other prices.
    """
    series = series_counts(rated, technology.switch_columns().limit)
    parts = switch_coefficients(technology, every_class(series), multiplier[..., None], blocked[..., None])
    spent = _wide(prices.frequency) * (parts.gate + parts.output_charge) + parts.leakage
    return ClassCosts(
        on[..., None] * parts.fast * (_wide(prices.switch_area) + _wide(prices.loss) * spent), series
    )


def cheapest(costs: ClassCosts) -> Choice:
    """Choose the class of least cost, the earlier one of equal ones."""
    index = np.argmin(costs.cost * (1 + _TIE * np.arange(costs.cost.shape[-1])), axis=-1)
    at = index[..., None]
    return Choice(
        index=index,
        series=np.take_along_axis(costs.series, at, axis=-1)[..., 0],
        cost=np.take_along_axis(costs.cost, at, axis=-1)[..., 0],
    )


def at_prices(candidates: Candidates, prices: Prices, allowed: NDArray[np.bool_] | None = None) -> Candidates:
    """Choose all classes anew; idle switches keep theirs.

    Parameters
    ----------
    candidates
        Candidates with any classes.
    prices
        Prices, one row each.
    allowed
        Shape (N, m, classes): switch classes that may be used, or None for all.
    """
    volts = candidates.brief.input_nominal
    elements, switches = candidates.elements, candidates.switches
    costs = switch_costs(candidates, prices, volts)
    if allowed is not None:
        costs = replace(costs, cost=np.where(allowed, costs.cost, np.inf))
    chosen = cheapest(costs)
    working = switches.charges > 0
    return replace(
        candidates,
        elements=replace(
            elements,
            capacitor_choice=cheapest(capacitor_costs(candidates, prices, volts)),
            switch_choice=merged(working, chosen, elements.switch_choice),
        ),
    )


def differs(one: Candidates, other: Candidates) -> NDArray[np.bool_]:
    """Where any class differs, shape (N,)."""
    pairs: tuple[Callable[[Candidates], NDArray[np.int64]], ...] = (
        lambda c: c.elements.capacitor_choice.index,
        lambda c: c.elements.switch_choice.index,
    )
    return np.asarray(np.logical_or.reduce([(get(one) != get(other)).any(axis=1) for get in pairs]))


def merged(where: NDArray[np.bool_], chosen: Choice, other: Choice) -> Choice:
    """Take one choice where a condition holds, the other one elsewhere."""
    return Choice(
        index=np.where(where, chosen.index, other.index),
        series=np.where(where, chosen.series, other.series),
        cost=np.where(where, chosen.cost, other.cost),
    )


def _wide(values: Floats) -> Floats:
    return values[:, None, None]
