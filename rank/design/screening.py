"""Lower bounds on what candidates could reach with any classes, any switch trees and any sizes, in one batch.

The prices of one sized choice bound all others (see `capmuster.rank.design.exactchoice`). Here the
capacitors take their best classes, and the switches a bound that no tree gets below: at given prices a
switch costs its charge times a function of its blocking voltage; with the least slope of that function,
over the voltages that occur, its cost is at least slope x charge x voltage, and the chain has the least sum
of charge x voltage of all trees.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from capmuster.enumerate.converters import table_of
from capmuster.rank.design.classprices import at_prices
from capmuster.rank.design.gatedrive import rail_driven
from capmuster.rank.design.losses import (
    capacitor_coefficients,
    every_class,
    plate_steps,
    series_counts,
    switch_coefficients,
)
from capmuster.rank.design.mixtures import Blend
from capmuster.rank.design.objectives import better_mix, priced_model, relaxed_bound, size_at_mix, total_cost
from capmuster.rank.design.optioncosts import pair_table
from capmuster.rank.design.profile import loss_points
from capmuster.rank.design.trees import trees_of
from capmuster.rank.scores.switching import switch_network
from capmuster.rank.structs import placed, rows_of

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from capmuster.enumerate.wiring import Converter
    from capmuster.rank.design.objectives import Sized
    from capmuster.rank.design.operation import Candidates, Modelled
    from capmuster.rank.design.profile import LossPoint
    from capmuster.rank.design.trees import VertexTrees
    from capmuster.rank.inputs.brief import Brief
    from capmuster.rank.scores.switching import SwitchNetwork
    from capmuster.rank.sizing import Prices

    Floats = NDArray[np.float64]

_O = 2
_STEP = 0.05  # of log f
_ROUNDING = 1e-9
_ANGLES = 181
_BLENDS = 6
_LIGHTER = 3


def can_be_exact(brief: Brief) -> bool:
    """Whether the bound covers a brief: fixed duty, losses counted at inputs that do not depend on the sizes.

    Not an output held by the frequency, which makes the losses of a choice depend on its own impedance, and
    not power density, whose load is free.
    """
    held = brief.use == "regulated" and brief.regulation == "frequency"
    return brief.objective in ("least-loss", "least-area") and brief.duty is not None and not held


def merit_bound(candidates: Candidates, sized: Sized) -> Floats:
    """Bound the merit of candidates over all classes, switch trees and sizes, shape (N,).

    Parameters
    ----------
    candidates
        Candidates with chains, as they were sized.
    sized
        Their sizes and prices. Where there are none, every element is given the best of every class at once,
        and the bound is that of the sizes of these; infinity where even they cannot meet the brief.
    """
    bound = np.full(len(candidates.table), -np.inf)
    have = np.flatnonzero(np.isfinite(sized.merit) & np.isfinite(sized.least))
    if len(have):
        blends = _BLENDS if candidates.brief.objective == "least-area" else 0
        part = candidates.take(have)
        bound[have] = _by_better_prices(part, part, rows_of(sized, have), blends)
    rest = np.flatnonzero(~np.isfinite(sized.merit))
    if len(rest):
        part = candidates.take(rest)
        bound[rest] = _unsized_bound(part, replace(part, relaxed=True))
    return np.asarray(np.fmin(bound, np.where(np.isfinite(sized.merit), sized.merit, np.inf)))


def _unsized_bound(candidates: Candidates, relaxed: Candidates) -> Floats:
    """Bound the merit of candidates without sizes, from elements that have the best of every class."""
    bound = relaxed_bound(relaxed)
    sized = size_at_mix(relaxed, np.full(len(bound), 0.5))
    good = np.flatnonzero(np.isfinite(sized.merit) & np.isfinite(sized.least))
    if len(good):
        found = _by_better_prices(candidates.take(good), relaxed.take(good), rows_of(sized, good), _BLENDS)
        bound[good] = np.maximum(bound[good], found)
    return bound


def within_reach(converter: Converter, brief: Brief) -> bool:
    """Whether any classes and switch trees of a converter could be driven, and meet the droop in the budgets.

    For every angle ``R_out >= cos x + sin y``, and each of the two is least where areas are shared by the
    Cauchy-Schwarz inequality (see `capmuster.rank.areas`), at the highest frequency. In regulated use
    voltages are ideal here, which is below any that elements must be rated for.
    """
    technology, network, balance = brief.technology, switch_network(converter), converter.balance
    vertices = trees_of(network)
    if not all(vertex.whole for vertex in vertices):
        return True
    if brief.drive == "rails" and not all(_drivable(converter, network, one, brief) for one in vertices):
        return False
    if brief.area is None and brief.silicon_area is None:
        return True
    classes, volts = technology.capacitor_columns(), brief.input_maximum
    held = np.array([float(abs(v)) for v in balance.voltages]) * volts
    charge = np.array([abs(q) / abs(balance.port_charges[_O]) for q in balance.charges])
    stack = (charge[:, None] * series_counts(held, classes.limit)) ** 2
    angle = np.linspace(0.0, np.pi / 2, _ANGLES)[:, None, None]
    duty = 0.5 if brief.duty is None else brief.duty  # a free duty has no lower factor than 50 % gives
    slow = stack / classes.density / brief.frequency
    series = stack * classes.series_resistance / (duty * (1 - duty))
    capacitors = np.sqrt(np.cos(angle) * slow + np.sin(angle) * series).min(axis=-1).sum(axis=-1)
    switches = 0.0
    for vertex in vertices:
        share = 1.0 if brief.duty is None else (duty if vertex.phase == 1 else 1 - duty)
        cost = np.sqrt(technology.switch_choice(vertex.blocking * volts).cost / share)
        switches += float((np.nan_to_num(vertex.charges) @ cost).min())
    on = np.sqrt(np.sin(angle[:, 0, 0])) * switches
    if brief.area is not None:
        reached = (capacitors + on) ** 2 / brief.area
    else:
        reached = capacitors**2 / (brief.capacitor_area or np.inf) + on**2 / (brief.silicon_area or np.inf)
    limit = float(brief.r_max(float(converter.ratio))) - technology.wiring_resistance
    return bool(reached.max() < limit * (1 + _ROUNDING))


def _drivable(converter: Converter, network: SwitchNetwork, vertex: VertexTrees, brief: Brief) -> bool:
    """Whether the rails can drive all switches of some tree of a vertex."""
    able = rail_driven(table_of([converter]), pair_table(network, vertex), brief)[0].any(axis=-1)
    return bool((np.isnan(vertex.charges) | able).all(axis=1).any())


@dataclass(frozen=True, slots=True)
class _Coefficients:
    """Coefficients of elements with losses weighed over the inputs at which they count.

    `limit` and `second` are those of the slow and the fast limit (of switches `limit` alone), `cycle` [J/mm2]
    and `still` [W/mm2] those of losses; shapes (N, elements, classes).
    """

    limit: Floats
    second: Floats
    cycle: Floats
    still: Floats


def _by_better_prices(candidates: Candidates, source: Modelled, sized: Sized, blends: int) -> Floats:
    """Bound by the prices of sized sources, and of blends with the classes that these let through."""
    bound = _by_prices(candidates, source, sized)
    open_ = np.arange(len(bound))
    for turn in range(blends):
        relaxed = at_prices(candidates.take(open_), sized.prices)
        source, sized, good = _blended(source, relaxed, 1.0 / (turn + 2), better_mix(sized, turn))
        open_ = open_[good]
        if not len(open_):
            break
        bound[open_] = np.maximum(bound[open_], _by_prices(candidates.take(open_), source, sized))
    return bound


def _blended(
    source: Modelled, relaxed: Candidates, weight: float, mix: Floats
) -> tuple[Modelled, Sized, NDArray[np.intp]]:
    """Blend sources of prices with relaxed choices, of which there is less where the blend has no sizes.

    Returns the blends that have sizes, their sizes, and their rows.
    """
    weights = np.full(len(relaxed.table), weight)
    sized = size_at_mix(Blend(source, relaxed, weights), mix)
    for _ in range(_LIGHTER):
        bad = np.flatnonzero(~(np.isfinite(sized.merit) & np.isfinite(sized.least)))
        if not len(bad):
            break
        weights[bad] /= 3
        again = size_at_mix(Blend(source.take(bad), relaxed.take(bad), weights[bad]), mix[bad])
        sized = placed(sized, bad, again)
    good = np.flatnonzero(np.isfinite(sized.merit) & np.isfinite(sized.least))
    return Blend(source, relaxed, weights).take(good), rows_of(sized, good), good


def _by_prices(candidates: Candidates, source: Modelled, sized: Sized) -> Floats:
    """Bound by the prices of sized sources, which may be blends of the same converters."""
    brief, prices = candidates.brief, sized.prices
    points = loss_points(brief, sized)
    capacitors = _capacitors(candidates, points)
    rest = sized.least - 2 * total_cost(priced_model(source, sized), prices)
    low = brief.frequency if brief.frequency_minimum is None else brief.frequency_minimum
    span = np.log(brief.frequency / low)
    count = max(1, int(np.ceil(span / _STEP)))
    step = span / count
    least = np.full(len(rest), np.inf)
    trees = (_chain if brief.use == "regulated" else _per_volt)(candidates, points)
    for k in range(count):
        f = np.full(len(rest), np.exp(np.log(low) + step * (k + 0.5)))
        total = _capacitor_cost(capacitors, prices, f).min(axis=-1).sum(axis=1)
        total += _switch_cost(candidates, trees, prices, f)
        least = np.minimum(least, total)
    # Between the grid's frequencies every part changes by at most the square root of the frequency's change.
    return np.asarray(rest + 2 * np.exp(-step / 4) * least)


def _capacitors(candidates: Candidates, points: Sequence[LossPoint]) -> _Coefficients:
    """Coefficients of every capacitor with every class."""
    table, technology = candidates.table, candidates.brief.technology
    series = series_counts(candidates.elements.ratings.capacitors, technology.capacitor_columns().limit)
    multiplier = np.abs(table.charges / table.port_charges[:, _O, None])[..., None]
    held = (np.abs(table.voltages) / table.scale[:, None])[..., None]
    step = plate_steps(table)[..., None]
    cycle, still = np.zeros(series.shape), np.zeros(series.shape)
    for one in points:
        part = capacitor_coefficients(
            technology, every_class(series), multiplier, held * one.volts, step * one.volts
        )
        cycle += _wide(one.cycle) * part.plate
        still += _wide(one.still) * part.leakage
    return _Coefficients(part.slow, part.series, cycle, still)


def _switches(
    candidates: Candidates, points: Sequence[LossPoint], rated: Floats, multiplier: Floats, blocked: Floats
) -> _Coefficients:
    """Coefficients of switches with every class; rated voltage [V], blocking voltage per volt of input."""
    technology = candidates.brief.technology
    series = series_counts(rated, technology.switch_columns().limit)
    cycle, still = np.zeros(series.shape), np.zeros(series.shape)
    for one in points:
        part = switch_coefficients(
            technology, every_class(series), multiplier[..., None], (blocked * one.volts)[..., None]
        )
        cycle += _wide(one.cycle) * (part.gate + part.output_charge)
        still += _wide(one.still) * part.leakage
    return _Coefficients(part.fast, np.zeros(series.shape), cycle, still)


def _chain(candidates: Candidates, points: Sequence[LossPoint]) -> _Coefficients:
    table, switches = candidates.table, candidates.switches
    multiplier = switches.charges / np.abs(table.port_charges[:, _O, None]).astype(np.float64)
    blocked = switches.blocking / table.scale[:, None]
    return _switches(candidates, points, candidates.elements.ratings.switches, multiplier, blocked)


def _per_volt(candidates: Candidates, points: Sequence[LossPoint]) -> _Coefficients:
    """Coefficients per squared charge multiplier and relative volt, at every voltage that may occur."""
    table, brief = candidates.table, candidates.brief
    span = int((table.potentials.max(axis=(1, 2)) - table.potentials.min(axis=(1, 2))).max())
    volts = np.arange(1, span + 1) / table.scale[:, None]
    found = _switches(candidates, points, volts * brief.input_maximum, np.ones(volts.shape), volts)
    return replace(found, limit=found.limit / volts[..., None] ** 2)


def _capacitor_cost(capacitors: _Coefficients, prices: Prices, f: Floats) -> Floats:
    """``sqrt(n c)``, shape (N, n, classes)."""
    limit = _wide(prices.slow * prices.frequency / f) * capacitors.limit
    limit = limit + _wide(prices.series) * capacitors.second
    spent = _wide(f) * capacitors.cycle + capacitors.still
    return np.asarray(np.sqrt(limit * (_wide(prices.capacitor_area) + _wide(prices.loss) * spent)))


def _each_switch(coefficients: _Coefficients, prices: Prices, f: Floats) -> Floats:
    """``sqrt(n c)`` at a price of 1 for on-resistance, shape (N, m, classes)."""
    spent = _wide(f) * coefficients.cycle + coefficients.still
    return np.asarray(np.sqrt(coefficients.limit * (_wide(prices.switch_area) + _wide(prices.loss) * spent)))


def _switch_cost(candidates: Candidates, coefficients: _Coefficients, prices: Prices, f: Floats) -> Floats:
    """Least cost of all switches, shape (N,)."""
    switches, table = candidates.switches, candidates.table
    best = _each_switch(coefficients, prices, f).min(axis=-1)
    on = np.sqrt(np.where(switches.phase == 1, prices.phase_1[:, None], prices.phase_2[:, None]))
    if candidates.brief.use == "regulated":
        return np.asarray((on * best).sum(axis=1))
    output = np.abs(table.port_charges[:, _O, None]).astype(np.float64)
    moved = switches.charges / output * switches.blocking / table.scale[:, None]
    return np.asarray((on * moved).sum(axis=1) * best.min(axis=1))


def _wide(values: Floats) -> Floats:
    return values[:, None, None]
