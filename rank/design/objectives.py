"""Areas and frequency of many candidates for an objective that counts all losses, with proven bounds."""

from __future__ import annotations

from dataclasses import dataclass, fields, replace
from typing import TYPE_CHECKING

import numpy as np

from capmuster.rank.design.operation import Design, Operation, operation
from capmuster.rank.design.profile import mean_droop_loss, mean_loss, profile_case
from capmuster.rank.sizing import Losses, LossModel, Objective, Prices, Sizing, Status, Task, Use, size
from capmuster.rank.structs import placed

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from capmuster.rank.design.operation import Modelled
    from capmuster.rank.inputs.brief import Brief

    Floats = NDArray[np.float64]

_KEPT = 1e-9  # relative: a limit broken by no more than this is kept
_MIXES = 40
_MIX_STEP = 3
_PASSES = 3  # rounds in which frequencies of a profile and sizes settle
_USES = {"frequency": Use.FREQUENCY, "conductance": Use.CONDUCTANCE}


@dataclass(frozen=True, slots=True)
class Sized:
    """N candidates sized for an objective; every array has N rows, NaN where no sizes meet the brief.

    Attributes
    ----------
    merit
        What is ranked by, the less the better: loss [W], area [mm2], or minus the power density [W/mm2].
    least, greatest
        Proven bounds on the best merit that any sizes could have.
    proven
        Whether these bounds meet to a relative 1e-9. Never where a held output switches at several inputs of
        a profile, each at its own frequency: then `least` is NaN.
    design
        Areas of all elements, frequency, duty, full load.
    minimum, nominal, maximum
        What they do at full load at the least, nominal and highest input.
    mean_loss, mean_efficiency
        Mean loss [W] and efficiency [1] over the load profile; at the nominal input and full load without
        one.
    prices
        What the limits are worth.
    mix
        In "least-area" the weight of the least input in the limit on loss, the rest being that of the highest
        one [1]; NaN for other objectives.
    """

    merit: Floats
    least: Floats
    greatest: Floats
    proven: NDArray[np.bool_]
    design: Design
    minimum: Operation
    nominal: Operation
    maximum: Operation
    mean_loss: Floats
    mean_efficiency: Floats
    prices: Prices
    mix: Floats

    @property
    def capacitor_area(self) -> Floats:
        """Area of all capacitors, shape (N,) [mm2]."""
        return np.asarray(self.design.capacitors.sum(axis=1))

    @property
    def switching_area(self) -> Floats:
        """Area of all switches that carry charge, shape (N,) [mm2]."""
        return np.asarray(self.design.switches.sum(axis=1))

    @property
    def worst_efficiency(self) -> Floats:
        """Least efficiency at full load, shape (N,) [1].

        It is at an end of the input range: loss over output power is a sum of powers of the input voltage
        with positive factors, which is convex in its logarithm.
        """
        return np.asarray(np.fmin(self.minimum.efficiency, self.maximum.efficiency))


def size_candidates(candidates: Modelled) -> Sized:
    """Size candidates for the objective of their brief.

    Notes
    -----
    "least-loss" and "power-density" count losses at the nominal input (or over the profile). "least-area"
    keeps the efficiency floor at both ends of the input range: where both bind in fixed-ratio use, the two
    limits are mixed with the weights that make them bind alike. Every mix is a relaxation, so its lower bound
    holds.
    """
    brief = candidates.brief
    if not len(candidates.table):
        return _nothing(candidates)
    mix = np.full(len(candidates.table), np.nan)
    if brief.objective == "least-area":
        found, mix = _least_area(candidates)
    elif brief.objective == "power-density":
        found = _power_density(candidates)
    else:
        found = _least_loss(candidates)
    return _sized(candidates, found, mix)


def priced_model(candidates: Modelled, sized: Sized) -> LossModel:
    """Coefficients that the prices of sized candidates hold for; not for an output held by the frequency."""
    brief = candidates.brief
    if brief.objective == "least-area":
        ends = (candidates.model(brief.input_minimum), candidates.model(brief.input_maximum))
        return _mean(ends, sized.mix)
    if brief.profile:
        return profile_case(candidates, None)[0]
    return candidates.model(brief.input_nominal)


def total_cost(model: LossModel, prices: Prices) -> Floats:
    """Sum of ``sqrt(n c)`` over all elements at prices, shape (N,)."""
    slow, series, loss, f = (
        one[:, None] for one in (prices.slow, prices.series, prices.loss, prices.frequency)
    )
    spent = f * model.plate + model.leakage_c
    capacitors = (slow * model.alpha + series * model.series) * (
        prices.capacitor_area[:, None] + loss * spent
    )
    on = np.where(model.phase == 1, prices.phase_1[:, None], prices.phase_2[:, None]) * model.beta
    spent = f * (model.gate + model.output_charge) + model.leakage_s
    switches = on * (prices.switch_area[:, None] + loss * spent)
    return np.asarray(np.sqrt(capacitors).sum(axis=1) + np.sqrt(switches).sum(axis=1))


def relaxed_bound(candidates: Modelled) -> Floats:
    """Bound the merit of relaxed candidates from below, shape (N,); infinity where nothing meets the brief.

    Only for objectives that have a bound; for "least-area" it holds the floor at one end at a time.
    """
    brief = candidates.brief
    if brief.objective == "least-area":
        ends = [
            size(candidates.model(volts), _task(candidates, Objective.AREA, volts))
            for volts in (brief.input_minimum, brief.input_maximum)
        ]
        return np.asarray(np.maximum(*(_proven_least(found) for found in ends)))
    found = _least_loss(candidates)
    held = np.zeros(len(found.value))
    if brief.use == "regulated":
        held = mean_droop_loss(candidates)
    return _proven_least(found) + held


def _proven_least(found: Sizing) -> Floats:
    least = np.where(np.isnan(found.least), -np.inf, found.least)
    return np.where(found.status == Status.INFEASIBLE, np.inf, least)


def _nothing(candidates: Modelled) -> Sized:
    """No rows, in the right shapes: the kernel takes one candidate at least."""
    none, wide = np.zeros(0), np.zeros((0, candidates.table.n))
    design = Design(wide, np.zeros((0, 3 * candidates.table.n + 1)), none, none, none)
    nowhere = Operation(none, none, none, none, none, none, Losses(*(none for _ in fields(Losses))), none)
    return Sized(
        none,
        none,
        none,
        none.astype(bool),
        design,
        nowhere,
        nowhere,
        nowhere,
        none,
        none,
        Prices(*(none for _ in fields(Prices))),
        none,
    )


def size_at_mix(candidates: Modelled, mix: Floats) -> Sized:
    """Size candidates for "least-area" with the limit on loss at given weights of the least input.

    The sizes need not keep the floor at either end; their prices and lower bounds hold all the same. For
    other objectives the weights mean nothing.
    """
    brief = candidates.brief
    if brief.objective != "least-area":
        return size_candidates(candidates)
    ends = (candidates.model(brief.input_minimum), candidates.model(brief.input_maximum))
    volts = mix * brief.input_minimum + (1.0 - mix) * brief.input_maximum
    return _sized(candidates, size(_mean(ends, mix), _task(candidates, Objective.AREA, volts)), mix)


def better_mix(sized: Sized, turn: int) -> Floats:
    """Shift the weight of the least input towards the end that loses more than the floor allows."""
    step = 1.0 / (turn + _MIX_STEP)
    shifted = sized.mix + np.where(sized.minimum.efficiency < sized.maximum.efficiency, step, -step)
    return np.clip(np.where(np.isfinite(shifted), shifted, sized.mix), 0.0, 1.0)


def _sized(candidates: Modelled, found: Sizing, mix: Floats) -> Sized:
    brief, idle = candidates.brief, candidates.elements.idle_area
    design = _design(found, brief)
    at = [
        operation(candidates, design, volts, design.current)
        for volts in (brief.input_minimum, brief.input_nominal, brief.input_maximum)
    ]
    wasted, useful = mean_loss(candidates, design)
    least, greatest, merit = found.least, found.greatest, found.value
    area = found.area + idle
    if brief.objective == "least-area":
        least, greatest, merit = least + idle, greatest + idle, merit + idle
    elif brief.objective == "power-density":
        smaller = found.area / area  # idle switches take part of the area
        least, greatest, merit = -found.greatest, -found.least * smaller, -found.value * smaller
    else:
        # The droop of a held output is lost whatever the sizes: the sizing leaves it out.
        shift = wasted - found.value
        least, greatest, merit = least + shift, greatest + shift, wasted
    proven = found.status == Status.OPTIMAL
    if _weighted_by_frequency(brief):
        # The weights of the points follow from the sizes: no bound over all sizes.
        least, proven = np.full_like(least, np.nan), np.zeros_like(proven)
    out_of_budget = _budget(brief.area, idle) <= 0
    out_of_budget |= _budget(brief.silicon_area, idle) <= 0
    return Sized(
        merit=np.where(out_of_budget, np.nan, merit),
        least=least,
        greatest=greatest,
        proven=proven,
        design=design,
        minimum=at[0],
        nominal=at[1],
        maximum=at[2],
        mean_loss=wasted,
        mean_efficiency=useful / (useful + wasted),
        prices=found.prices,
        mix=mix,
    )


def _weighted_by_frequency(brief: Brief) -> bool:
    """Whether points of a profile differ in their losses per cycle and in their frequencies."""
    if brief.use == "fixed-ratio" or brief.regulation == "conductance":
        return False
    inputs = {point.volts or brief.input_nominal for point in brief.profile if not point.asleep}
    return len(inputs) > 1


def _design(found: Sizing, brief: Brief) -> Design:
    full = found.current if brief.objective == "power-density" else np.full(len(found.value), brief.current)
    return Design(found.capacitors, found.switches, found.frequency, found.duty, full)


def _task(candidates: Modelled, objective: Objective, volts: float | Floats) -> Task:
    """Limits that all objectives share, with losses counted at an input voltage [V]."""
    brief = candidates.brief
    idle = candidates.elements.idle_area
    most_impedance = brief.r_max(candidates.table.ratios)
    lowest = brief.frequency if brief.frequency_minimum is None else brief.frequency_minimum
    return Task(
        objective=objective,
        frequency=(lowest, brief.frequency),
        use=Use.FIXED_RATIO if brief.use == "fixed-ratio" else _USES[brief.regulation],
        duty=brief.duty,
        current=brief.current,
        ideal_output=np.abs(candidates.table.ratios) * volts,
        output=abs(brief.required),
        efficiency=brief.efficiency_floor,
        most_impedance=most_impedance,
        most_area=None if brief.area is None else _budget(brief.area, idle),
        most_capacitor_area=brief.capacitor_area,
        most_silicon_area=None if brief.silicon_area is None else _budget(brief.silicon_area, idle),
    )


def _budget(budget: float | None, idle: Floats) -> Floats:
    """Return what idle switches leave of an area budget, shape (N,), never below 0 [mm2]."""
    return np.maximum((np.inf if budget is None else budget) - idle, 0.0)


def _least_loss(candidates: Modelled) -> Sizing:
    brief = candidates.brief
    task = _task(candidates, Objective.LOSS, brief.input_nominal)
    if not brief.profile:
        return size(candidates.model(brief.input_nominal), task)
    found: Sizing | None = None
    # Where the frequency holds the output, the losses weigh by how often and how fast each point switches.
    for _ in range(_PASSES if brief.use == "regulated" and brief.regulation == "frequency" else 1):
        model, changes = profile_case(candidates, None if found is None else _design(found, brief))
        found = size(model, replace(task, **changes))
    assert found is not None  # noqa: S101 -- for the type checker: the loop runs
    return found


def _power_density(candidates: Modelled) -> Sizing:
    brief = candidates.brief
    droop = np.abs(candidates.table.ratios) * brief.input_minimum - abs(brief.required)
    least = brief.current if brief.current_least is None else brief.current_least
    task = replace(
        _task(candidates, Objective.DENSITY, brief.input_nominal),
        current=0.0,
        current_range=(least, brief.current),
        most_impedance=None,
        most_droop=droop,
    )
    return size(candidates.model(brief.input_nominal), task)


def _least_area(candidates: Modelled) -> tuple[Sizing, Floats]:
    """Sizes, and the weight of the least input in the limit that they are the best for."""
    brief = candidates.brief
    low, high = brief.input_minimum, brief.input_maximum
    models = (candidates.model(low), candidates.model(high))
    found = size(models[1], _task(candidates, Objective.AREA, high))
    mix = np.zeros(len(found.value))
    if low == high:
        return found, mix
    excess_low, excess_high = _excess(candidates, found, models)
    # The sizes for one end that suffice at the other one are the best for both.
    open_ = np.flatnonzero(np.isfinite(found.value) & ~(excess_low <= _KEPT))
    if not len(open_):
        return found, mix
    part = candidates.take(open_)
    there = (models[0].take(open_), models[1].take(open_))
    second = size(there[0], _task(part, Objective.AREA, low))
    at_low, at_high = _excess(part, second, there)
    found = placed(found, open_, second)
    mix[open_] = 1.0
    both = np.flatnonzero(np.isfinite(second.value) & ~(at_high <= _KEPT))
    if not len(both):
        return found, mix
    rows = open_[both]
    mixed, weight = _mixed(
        candidates.take(rows),
        (there[0].take(both), there[1].take(both)),
        excess_low[rows] - excess_high[rows],
        at_low[both] - at_high[both],
    )
    mix[rows] = weight
    return placed(found, rows, mixed), mix


def _excess(
    candidates: Modelled, found: Sizing, models: tuple[LossModel, LossModel]
) -> tuple[Floats, Floats]:
    """Loss beyond what the floor allows at the least and at the highest input, per ideal output power."""
    brief = candidates.brief
    design = _design(found, brief)
    floor = brief.efficiency_floor or 0.0
    beyond = []
    for volts, model in zip((brief.input_minimum, brief.input_maximum), models, strict=True):
        at = operation(candidates, design, volts, design.current, model)
        ideal = candidates.ideal(volts) * design.current
        wasted = at.losses
        beyond.append((wasted.conduction + floor * wasted.fixed) / ideal - (1.0 - floor))
    return beyond[0], beyond[1]


def _mixed(
    candidates: Modelled, models: tuple[LossModel, LossModel], first: Floats, last: Floats
) -> tuple[Sizing, Floats]:
    """Size where both ends bind, and return the weight of the least input, found by the Illinois rule.

    ``first`` and ``last`` are how much more the least input is in excess than the highest one, at weights 0
    and 1.
    """
    brief = candidates.brief
    count = len(candidates.table)
    low, high = np.zeros(count), np.ones(count)
    at_low, at_high = first.copy(), last.copy()
    best: Sizing | None = None
    for _ in range(_MIXES):
        with np.errstate(divide="ignore", invalid="ignore"):
            weight = np.clip((low * at_high - high * at_low) / (at_high - at_low), low, high)
        weight = np.where(np.isfinite(weight), weight, 0.5 * (low + high))
        volts = weight * brief.input_minimum + (1.0 - weight) * brief.input_maximum
        found = size(_mean(models, weight), _task(candidates, Objective.AREA, volts))
        more, less = _excess(candidates, found, models)
        best = found
        if np.all(~(np.maximum(more, less) > _KEPT)):
            break
        difference = more - less
        up = difference > 0
        at_high = np.where(up, 0.5 * at_high, difference)
        at_low = np.where(up, difference, 0.5 * at_low)
        low, high = np.where(up, weight, low), np.where(up, high, weight)
    assert best is not None  # noqa: S101 -- for the type checker: the loop runs
    kept = np.isfinite(best.value) & (np.maximum(more, less) <= _KEPT)
    status = np.where(kept, best.status, Status.UNRESOLVED).astype(np.int8)
    return replace(best, status=status), weight


def _mean(models: tuple[LossModel, LossModel], weight: Floats) -> LossModel:
    """Coefficients of a mix of both ends, the first one's weight given per candidate."""
    w = weight[:, None]
    parts = {
        name: w * getattr(models[0], name) + (1.0 - w) * getattr(models[1], name)
        for name in ("plate", "leakage_c", "gate", "output_charge", "leakage_s")
    }
    return replace(models[0], **parts)
