"""The figures of a sizing task for a batch of candidates, as the kernel takes them."""

from __future__ import annotations

import dataclasses
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from capmuster.enumerate.errors import CapmusterError
from capmuster.rank.sizing.task import Objective, Use

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

    from capmuster.rank.sizing.model import LossModel
    from capmuster.rank.sizing.task import Task

    Floats = NDArray[np.float64]

__all__ = ["ABSENT", "Case", "case_of"]

#: A limit that is not there.
ABSENT = 1e300


@dataclass(frozen=True, slots=True)
class Case:
    """What a task asks of B candidates, apart from their elements.

    Where the load is free, areas, losses and the reciprocals of impedances are per ampere of load. A limit
    that is not there is `ABSENT`.

    Attributes
    ----------
    objective : Objective
        What is made least or greatest.
    held : bool
        Whether the frequency follows from an output that is held.
    log_f_least, log_f_most : (B,) float array
        Logarithm of the frequency bounds.
    log_load_least, log_load_most : (B,) float array
        Logarithm of the bounds of the free load; 0 where the load is given.
    conduction : (B,) float array
        Loss per impedance [A2]; 0 where the output is held, since the droop is there anyway.
    budget : (B,) float array
        Most loss, conduction included as far as it counts [W].
    impedance : (B,) float array
        Highest output impedance [ohm].
    area, area_c, area_s : (B,) float array
        Area budgets: both kinds together, capacitors, silicon [mm2].
    ideal : (B,) float array
        Ideal output voltage that the output power starts from, where the load is free [V].
    loop, lead : (B,) float array
        Fixed resistance in the fast limit, and in series with the output [ohm].
    controller, cycle : (B,) float array
        Fixed loss [W] and fixed energy per cycle [J].
    wanted, share : (K, B) float array
        Impedance that the held output wants at each operating point [ohm], and its share of the time.
    square, droop : (B,) float array
        For the report: mean square current where conduction counts [A2], and loss by the droop of a held
        output [W]; at one ampere where the load is free.
    """

    objective: Objective
    held: bool
    log_f_least: Floats
    log_f_most: Floats
    log_load_least: Floats
    log_load_most: Floats
    conduction: Floats
    budget: Floats
    impedance: Floats
    area: Floats
    area_c: Floats
    area_s: Floats
    ideal: Floats
    loop: Floats
    lead: Floats
    controller: Floats
    cycle: Floats
    wanted: Floats
    share: Floats
    square: Floats
    droop: Floats

    def possible(self) -> NDArray[np.bool_]:
        """Return where fixed losses, fixed resistance and a held output leave anything, shape (B,)."""
        load = self.easiest_load(self.conduction * self.lead)
        loss_left = self.budget - self.controller / load - self.conduction * self.lead * load
        fixed = (self.loop + self.lead) * np.exp(self.log_load_least)
        return np.asarray((loss_left > 0.0) & (self.impedance > fixed) & (self.droop >= 0.0))

    def easiest_load(self, wiring: Floats) -> Floats:
        """Return the load at which fixed loss and wiring take least per ampere, shape (B,) [A].

        Parameters
        ----------
        wiring : (B,) float array
            What grows with the load [W/A2].
        """
        least, most = np.exp(self.log_load_least), np.exp(self.log_load_most)
        with np.errstate(divide="ignore", invalid="ignore"):
            mean = np.where(wiring > 0.0, np.sqrt(self.controller / wiring), most)
        return np.clip(mean, least, most)

    def take(self, places: NDArray[np.intp] | slice) -> Case:
        """Return the candidates at these places only."""
        arrays = {
            field.name: getattr(self, field.name)[..., places]
            for field in dataclasses.fields(self)
            if field.name not in ("objective", "held")
        }
        return dataclasses.replace(self, **arrays)


class _Figures:
    """Reads the figures of a task as arrays of one number per candidate."""

    def __init__(self, task: Task, count: int) -> None:
        self.task, self.count = task, count

    def read(self, name: str, value: ArrayLike | None, default: float | None = None) -> Floats:
        """Return a figure, or its default where there is none."""
        if value is None:
            if default is None:
                raise CapmusterError(f"sizing for {self.task.objective.value} needs {name}")
            return np.full(self.count, default)
        array = np.asarray(value, dtype=np.float64)
        if array.shape not in ((), (self.count,)):
            raise CapmusterError(
                f"{name} has shape {array.shape}", accepted=f"a number or shape ({self.count},)"
            )
        if np.any(np.isnan(array)) or np.any(array < 0.0):
            raise CapmusterError(f"{name} has a value that is negative or not a number")
        return np.minimum(np.broadcast_to(array, (self.count,)), ABSENT)

    def bounds(self, name: str, pair: tuple[ArrayLike, ArrayLike] | None) -> tuple[Floats, Floats]:
        """Return a least and a most figure."""
        if pair is None:
            raise CapmusterError(f"sizing for {self.task.objective.value} needs {name}")
        least, most = self.read(name, pair[0]), self.read(name, pair[1])
        if np.any(least <= 0.0) or np.any(most < least) or np.any(most >= ABSENT):
            raise CapmusterError(f"{name} has bounds that are out of order", accepted="0 < least <= most")
        return least, most

    def efficiency(self) -> Floats:
        """Return the least efficiency."""
        eta = self.read("efficiency", self.task.efficiency)
        if np.any((eta <= 0.0) | (eta >= 1.0)):
            raise CapmusterError("efficiency has a value outside of its range", accepted="0 < efficiency < 1")
        return eta


def case_of(model: LossModel, task: Task) -> Case:
    """Return the figures of a task for the candidates of a model.

    Parameters
    ----------
    model : LossModel
        Candidates.
    task : Task
        What is asked for.

    Returns
    -------
    Case

    Raises
    ------
    CapmusterError
        If a figure that the objective needs is missing, or one is out of its range.
    """
    figures = _Figures(task, len(model))
    ones = np.ones(len(model))
    free = task.objective is Objective.DENSITY
    holds, by_frequency = task.use is not Use.FIXED_RATIO, task.use is Use.FREQUENCY
    least_f, most_f = figures.bounds("frequency", task.frequency)
    least_load, most_load = figures.bounds("current_range", task.current_range) if free else (ones, ones)
    current = ones if free else figures.bounds("current", (task.current, task.current))[0]
    square = figures.read("mean_square_current", task.mean_square_current) if _given(task) else current**2
    name = "most_droop" if free else "most_impedance"
    limit = figures.read(name, getattr(task, name), None if holds else ABSENT)
    ideal, droop = ones, 0.0 * ones
    if task.objective is not Objective.LOSS or (by_frequency and task.held_impedance is None):
        ideal = figures.read("ideal_output", task.ideal_output)
    if holds and task.output is not None and task.ideal_output is not None:
        droop = figures.read("ideal_output", task.ideal_output) - figures.read("output", task.output)
    conduction, budget = (0.0 * ones if holds else square), ABSENT * ones
    if task.objective is not Objective.LOSS:
        eta = figures.efficiency()
        if holds:
            budget = current * (figures.read("output", task.output) / eta - ideal)
        else:
            conduction, budget = square / eta, (1.0 - eta) / eta * ideal * current
    wanted, share = limit[None], ones[None]
    if by_frequency:
        wanted, share = _held_points(figures, droop / current, limit)
    return Case(
        objective=task.objective,
        held=by_frequency,
        log_f_least=np.log(least_f),
        log_f_most=np.log(most_f),
        log_load_least=np.log(least_load),
        log_load_most=np.log(most_load),
        conduction=conduction,
        budget=budget,
        impedance=limit,
        area=figures.read("most_area", task.most_area, ABSENT),
        area_c=figures.read("most_capacitor_area", task.most_capacitor_area, ABSENT),
        area_s=figures.read("most_silicon_area", task.most_silicon_area, ABSENT),
        ideal=ideal,
        loop=model.loop,
        lead=model.lead,
        controller=model.controller,
        cycle=model.cycle,
        wanted=wanted,
        share=share,
        square=0.0 * ones if holds else square,
        droop=droop * current,
    )


def _given(task: Task) -> bool:
    """Return whether the mean square of the load is given: it has no meaning where the load is free."""
    return task.mean_square_current is not None and task.objective is not Objective.DENSITY


def _held_points(figures: _Figures, single: Floats, limit: Floats) -> tuple[Floats, Floats]:
    """Return the impedance that a held output asks for at each operating point, and its share of the time."""
    task, count = figures.task, figures.count
    if task.held_impedance is None:
        figures.read("output", task.output)
        wanted = single[None]
    else:
        wanted = np.atleast_2d(np.asarray(task.held_impedance, dtype=np.float64))
        wanted = np.broadcast_to(wanted, (len(wanted), count))
    points = len(wanted)
    share = np.full(points, 1.0 / points)
    if task.held_share is not None:
        share = np.asarray(task.held_share, dtype=np.float64)
    share = np.broadcast_to(share[:, None] if share.ndim == 1 else share, (points, count))
    if np.any(share < 0.0) or np.any(share.sum(axis=0) > 1.0 + 1e-12):
        raise CapmusterError("held_share is negative or adds up to more than 1")
    return np.maximum(wanted, limit), share  # no point can be harder than the hardest
