"""Size a batch of candidates for a task, with proof."""

from __future__ import annotations

import dataclasses
import enum
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from capmuster.enumerate.errors import CapmusterError
from capmuster.rank.sizing.case import case_of
from capmuster.rank.sizing.elements import areas
from capmuster.rank.sizing.model import Impedance, Losses, impedance, losses
from capmuster.rank.sizing.newton import Found, search
from capmuster.rank.sizing.packing import Packed, pack
from capmuster.rank.sizing.problem import Problem
from capmuster.rank.sizing.start import first_guess, unknown_names
from capmuster.rank.sizing.task import Objective, Task

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from capmuster.rank.sizing.case import Case
    from capmuster.rank.sizing.model import LossModel

    Floats = NDArray[np.float64]

__all__ = ["Prices", "Sizing", "Status", "size"]

_BLOCK = 8192  # candidates at a time: the arrays of a block stay in the cache
# Longest step, rounds, whether to start afresh: a few rounds for all, more for the rest, then for what
# resists.
_ATTEMPTS = ((4.0, 9, True), (4.0, 30, False), (4.0, 60, True), (1.0, 120, True))


class Status(enum.IntEnum):
    """What is known of a candidate."""

    OPTIMAL = 0  # the bounds meet
    INFEASIBLE = 1  # proven: the limits cannot be met
    UNRESOLVED = 2  # neither, at the edge of what can be met or beyond the reach of the arithmetic


@dataclass(frozen=True, slots=True)
class Prices:
    """Prices at which every element's best area is the one of the design; all (N,) float arrays.

    An element answers with ``sqrt(n c)``, where n is the price of its limits times its coefficients and c the
    price of its area and of its loss: what tells at once whether another device would serve better.

    Attributes
    ----------
    slow, series
        Of `LossModel.alpha` and of `LossModel.series`.
    phase_1, phase_2
        Of `LossModel.beta` of switches that are on in phase 1 and in phase 2.
    capacitor_area, switch_area, loss
        Of areas and of loss.
    frequency
        Frequency that losses per cycle count at [Hz].
    """

    slow: Floats
    series: Floats
    phase_1: Floats
    phase_2: Floats
    capacitor_area: Floats
    switch_area: Floats
    loss: Floats
    frequency: Floats


@dataclass(frozen=True, slots=True)
class Sizing:
    """Sizes of N candidates, with proof. All is NaN where no design was found.

    Attributes
    ----------
    status : (N,) int8 array
        See `Status`.
    capacitors, switches : (N, n), (N, m) float array
        Areas [mm2]; 0 for elements of no weight.
    frequency : (N,) float array
        Switching frequency; where the output is held by frequency, its mean over the operating points [Hz].
    duty : (N,) float array
        Share of phase 1 [1].
    current : (N,) float array
        Load current that the sizing has chosen [A]; 1 where the task gives the load.
    impedance : Impedance
        Output impedance and its parts; where the output is held by frequency, at the mean frequency.
    losses : Losses
        Loss by term.
    value : (N,) float array
        Objective: loss [W] (where the output is held without its droop), area [mm2], or power density
        [W/mm2].
    least, greatest : (N,) float array
        Bounds on the best value that any sizing could have, proven; `value` is one of the two.
    prices : Prices
        What the limits are worth.
    """

    status: NDArray[np.int8]
    capacitors: Floats
    switches: Floats
    frequency: Floats
    duty: Floats
    current: Floats
    impedance: Impedance
    losses: Losses
    value: Floats
    least: Floats
    greatest: Floats
    rounds: NDArray[np.int64]
    prices: Prices

    @property
    def area(self) -> Floats:
        """Area of all elements, shape (N,) [mm2]."""
        return np.asarray(self.capacitors.sum(axis=1) + self.switches.sum(axis=1))

    @property
    def gap(self) -> Floats:
        """Relative gap between the bounds, shape (N,) [1]; inf where there is no design."""
        with np.errstate(invalid="ignore"):
            gap = (self.greatest - self.least) / self.value
        return np.where(np.isfinite(gap), gap, np.inf)


def size(model: LossModel, task: Task, *, gap: float = 1e-9) -> Sizing:
    """Size every candidate for a task.

    Parameters
    ----------
    model : LossModel
        N candidates.
    task : Task
        What is asked for.
    gap : float, optional
        Relative gap between the bounds that counts as optimal [1].

    Returns
    -------
    Sizing

    Raises
    ------
    CapmusterError
        If the task lacks a figure that its objective needs, or one is out of its range.

    Notes
    -----
    Loss, area and power density are generalised posynomial programmes (Boyd, Kim, Vandenberghe and Hassibi,
    "A tutorial on geometric programming", Optimization and Engineering 2007), so the dual bound is tight.
    Limits are kept to a relative 1e-10.
    """
    case = case_of(model, task)
    duty = None
    if task.duty is not None:
        duty = np.broadcast_to(np.asarray(task.duty, dtype=np.float64), (len(model),))
        if np.any(~((duty > 0.0) & (duty < 1.0))):
            raise CapmusterError("duty is not between 0 and 1")
    found = _search(model, case, duty, 0.9 * gap)
    blocks = [slice(k, k + _BLOCK) for k in range(0, len(model), _BLOCK)]
    return _joined(
        [
            _designs(
                model.take(block),
                case.take(block),
                None if duty is None else duty[block],
                found.take(block),
                gap,
            )
            for block in blocks
        ]
    )


def _search(model: LossModel, case: Case, duty: Floats | None, gap: float) -> Found:
    """Search all candidates, block by block."""
    names = unknown_names(case, duty_free=duty is None)
    few = names
    if case.objective is not Objective.LOSS:
        # Where the area itself has a price, budgets of one kind seldom matter, and are hard to tell from it.
        few = tuple(name for name in names if name not in ("area_c", "area_s"))
    found = Found.nothing(len(model), 2 if duty is None else 1, len(names))
    found.lower[~case.possible()] = np.inf
    for attempt, (longest, rounds, afresh) in enumerate(_ATTEMPTS):
        places = np.flatnonzero(~found.settled(gap))
        for start in range(0, len(places), _BLOCK):
            block = places[start : start + _BLOCK]
            part = case.take(block)
            packed = pack(model.take(block), None if duty is None else duty[block])
            problem, values = _posed(packed, part, names if attempt else few)
            if not afresh and few == names:
                values = found.values[:, block]
            found.put(block, search(problem, values, gap, longest, rounds))
            if attempt and case.objective is not Objective.LOSS:
                open_ = np.flatnonzero(~found.settled(gap, block))
                beyond = _loss_beyond_budget(packed.take(open_), part.take(open_), rounds)
                found.lower[block[open_[beyond]]] = np.inf
    return found


def _posed(packed: Packed, case: Case, names: tuple[str, ...]) -> tuple[Problem, Floats]:
    """Return the equations of a task and unknowns to start from."""
    with np.errstate(all="ignore"):
        values, reference = first_guess(case, packed.capacitors, packed.switches, names)
    return Problem(case, packed.capacitors, packed.switches, names, reference), values


def _loss_beyond_budget(packed: Packed, case: Case, rounds: int) -> NDArray[np.bool_]:
    """Return where even the least loss inside of all other limits is proven to exceed the budget."""
    if not len(case.budget):
        return np.zeros(0, dtype=bool)
    least = dataclasses.replace(case, objective=Objective.LOSS)
    problem, values = _posed(packed, least, unknown_names(least, duty_free=len(packed.switches) > 1))
    found = search(problem, values, 1e-6, _ATTEMPTS[0][0], rounds)
    return found.lower > case.budget * (1.0 + 1e-9)


def _designs(model: LossModel, case: Case, duty: Floats | None, found: Found, gap: float) -> Sizing:
    """Return the designs of a block in full."""
    packed = pack(model, duty)
    slow, fast_c, theta_c, theta_s, nu, f, current, duty_1, *fast_s = found.prices
    with np.errstate(all="ignore"):
        A = areas(packed.capacitors, (slow, fast_c), theta_c, nu, f) * (current * found.scale_c)
        S = [
            areas(group, (slow, fast), theta_s, nu, f) * (current * found.scale_s)
            for group, fast in zip(packed.switches, fast_s, strict=True)
        ]
        capacitors, switches = A.T, packed.unpack_switches(S, model.beta.shape[1])
        share = duty_1 if duty is None else duty
        load = current if case.objective is Objective.DENSITY else np.ones_like(current)
        z = impedance(model, capacitors, switches, found.frequency, share)
        terms = losses(
            model,
            capacitors,
            switches,
            found.frequency,
            share,
            mean_square_current=case.square * load**2,
            held=case.droop * load,
        )
        area = capacitors.sum(axis=1) + switches.sum(axis=1)
        if case.objective is Objective.LOSS:
            value = terms.total - terms.held
        elif case.objective is Objective.AREA:
            value = area
        else:
            held = case.conduction == 0.0
            output = np.where(held, case.ideal - case.droop, case.ideal - current * z.output)
            value = output * current / area
        least = np.where(found.lower > -np.inf, np.minimum(found.lower, value), 0.0)
        greatest = value
        if case.objective is Objective.DENSITY:
            # The search makes the area per watt of output least, or per ampere where the output is held.
            most = np.where(held, case.ideal - case.droop, 1.0) / found.lower
            least, greatest = value, np.where(found.lower > 0.0, np.maximum(most, value), np.inf)
        closed = np.isfinite(value) & (greatest - least <= gap * value)
        fixed = duty is not None
        prices = Prices(
            slow=slow,
            series=fast_c / (share * (1.0 - share)) if fixed else fast_c,
            phase_1=fast_s[0] / share if fixed else fast_s[0],
            phase_2=fast_s[0] / (1.0 - share) if fixed else fast_s[1],
            capacitor_area=theta_c,
            switch_area=theta_s,
            loss=nu,
            frequency=f,
        )
    status = np.where(
        closed, Status.OPTIMAL, np.where(np.isposinf(found.lower), Status.INFEASIBLE, Status.UNRESOLVED)
    )
    return Sizing(
        status=status.astype(np.int8),
        capacitors=capacitors,
        switches=switches,
        frequency=found.frequency,
        duty=share,
        current=current,
        impedance=z,
        losses=terms,
        value=value,
        least=least,
        greatest=greatest,
        rounds=found.rounds,
        prices=prices,
    )


def _joined(parts: list[Sizing]) -> Sizing:
    """Return all blocks as one."""
    first = parts[0]
    arrays: dict[str, Any] = {}
    for field in dataclasses.fields(Sizing):
        pieces = [getattr(part, field.name) for part in parts]
        if isinstance(pieces[0], np.ndarray):
            arrays[field.name] = np.concatenate(pieces)
        else:
            kind = type(getattr(first, field.name))
            arrays[field.name] = kind(
                *(
                    np.concatenate([getattr(piece, inner.name) for piece in pieces])
                    for inner in dataclasses.fields(kind)
                )
            )
    return Sizing(**arrays)
