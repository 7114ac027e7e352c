"""Losses over a load profile: what the sizing is told, and what a design comes to."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, TypedDict

import numpy as np

from capmuster.rank.design.operation import asleep, held_frequency, operation
from capmuster.rank.sizing import losses, mean_model

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from capmuster.rank.design.objectives import Sized
    from capmuster.rank.design.operation import Design, Modelled
    from capmuster.rank.inputs.brief import Brief
    from capmuster.rank.sizing import LossModel

    Floats = NDArray[np.float64]


class Changes(TypedDict, total=False):
    """What a profile changes in a sizing task; see `capmuster.rank.sizing.Task`."""

    current: float
    mean_square_current: float
    held_impedance: Floats
    held_share: Floats


def profile_case(candidates: Modelled, design: Design | None) -> tuple[LossModel, Changes]:
    """Coefficients whose losses are the means over the profile, and the currents and points of the task.

    Parameters
    ----------
    candidates
        The candidates.
    design
        Sizes that are near the wanted ones, or None. Where the frequency holds the output, the losses of each
        point weigh by its frequency, which the sizes decide; without a design the slow limit does.
    """
    brief = candidates.brief
    awake = [point for point in brief.profile if not point.asleep]
    volts = [_volts(brief, point.volts) for point in brief.profile]
    models = {v: candidates.model(v) for v in volts}
    share = np.array([point.share for point in awake])
    current = np.array([point.current for point in awake])
    every = [
        asleep(models[v], _sleep_power(brief), brief.technology.controller_power)
        if point.asleep
        else models[v]
        for point, v in zip(brief.profile, volts, strict=True)
    ]
    mean = mean_model(every, [point.share for point in brief.profile])
    changes = Changes(current=float(share @ current), mean_square_current=float(share @ current**2))
    if brief.use == "fixed-ratio" or brief.regulation == "conductance":
        return mean, changes
    wanted = np.stack(
        [
            (candidates.ideal(_volts(brief, point.volts)) - abs(brief.required)) / point.current
            for point in awake
        ]
    )
    changes["held_impedance"], changes["held_share"] = wanted, np.broadcast_to(share[:, None], wanted.shape)
    busy = share[:, None] * (
        1.0 / wanted
        if design is None
        else np.stack(
            [
                held_frequency(models[_volts(brief, point.volts)], design, resistance)
                for point, resistance in zip(awake, wanted, strict=True)
            ]
        )
    )
    # The kernel multiplies by the mean frequency.
    weights = busy / busy.sum(axis=0)
    at = [models[_volts(brief, point.volts)] for point in awake]
    return _weighted(mean, at, np.where(np.isfinite(weights), weights, 1.0 / len(awake))), changes


def _weighted(mean: LossModel, models: list[LossModel], weights: Floats) -> LossModel:
    parts = {
        name: sum(w[:, None] * getattr(m, name) for w, m in zip(weights, models, strict=True))
        for name in ("plate", "gate", "output_charge")
    }
    cycle = sum(w * m.cycle for w, m in zip(weights, models, strict=True))
    return replace(mean, cycle=cycle, **parts)


def mean_loss(candidates: Modelled, design: Design) -> tuple[Floats, Floats]:
    """Mean loss and mean output power [W] over the profile, or at the nominal input and full load."""
    brief = candidates.brief
    if not brief.profile:
        at = operation(candidates, design, brief.input_nominal, design.current)
        return at.losses.total, at.output_power
    wasted, useful = np.zeros(len(design.current)), np.zeros(len(design.current))
    for point in brief.profile:
        volts = _volts(brief, point.volts)
        if point.asleep:
            model = asleep(candidates.model(volts), _sleep_power(brief), brief.technology.controller_power)
            still = losses(model, design.capacitors, design.switches, np.zeros(len(model)) + 1.0, design.duty)
            wasted = wasted + point.share * still.fixed
        else:
            at = operation(candidates, design, volts, np.full(len(design.current), point.current))
            wasted = wasted + point.share * at.losses.total
            useful = useful + point.share * at.output_power
    return wasted, useful


@dataclass(frozen=True, slots=True)
class LossPoint:
    """An input at which the losses of N candidates count.

    Attributes
    ----------
    cycle
        Weight of the losses per cycle, shape (N,) [1].
    still
        Weight of leakage, shape (N,) [1].
    volts
        Input voltage [V].
    """

    cycle: Floats
    still: Floats
    volts: float


def loss_points(brief: Brief, sized: Sized) -> tuple[LossPoint, ...]:
    """Return the inputs at which losses count, as the sizing of N candidates took them."""
    one = np.ones(len(sized.merit))
    if brief.objective == "least-area":
        low, high = sized.mix, 1 - sized.mix
        return LossPoint(low, low, brief.input_minimum), LossPoint(high, high, brief.input_maximum)
    if not brief.profile:
        return (LossPoint(one, one, brief.input_nominal),)
    return tuple(
        LossPoint((0.0 if point.asleep else point.share) * one, point.share * one, _volts(brief, point.volts))
        for point in brief.profile
    )


def mean_droop_loss(candidates: Modelled) -> Floats:
    """Mean of what a held output loses by its droop, over the profile or at the nominal input; (N,) [W]."""
    brief = candidates.brief
    points = [(point.share, point.current, _volts(brief, point.volts)) for point in brief.profile]
    lost = [
        share * current * (candidates.ideal(volts) - abs(brief.required))
        for share, current, volts in points or [(1.0, brief.current, brief.input_nominal)]
    ]
    return np.asarray(np.sum(lost, axis=0))


def _volts(brief: Brief, volts: float | None) -> float:
    return brief.input_nominal if volts is None else volts


def _sleep_power(brief: Brief) -> float:
    own = brief.technology.sleep_power
    return brief.technology.controller_power if own is None else own
