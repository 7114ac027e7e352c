"""The choice of parts of one converter as a problem: what can be chosen, what it costs, what must hold."""

from __future__ import annotations

import math
from collections import defaultdict
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Final, TypeAlias, TypeVar

import numpy as np

from capmuster.enumerate.errors import CapmusterError
from capmuster.rank.discrete.options import exact

if TYPE_CHECKING:
    from collections.abc import Sequence
    from fractions import Fraction

    from numpy.typing import NDArray

    from capmuster.rank.discrete.blends import Blend
    from capmuster.rank.discrete.options import OptionBook, Options, Units
    from capmuster.rank.discrete.slots import Slot
    from capmuster.rank.inputs.brief import Brief
    from capmuster.rank.inputs.parts_request import Aim, PartsRequest

Selection: TypeAlias = tuple[tuple[int, ...], ...]
"""For each group, the option of each of its members: as many numbers as members, rising."""

SLACK: Final = 1e-9
"""Relative rounding that a limit on loss or impedance forgives."""

_HALF: Final = 0.5
_GRID: Final = 5  # frequencies to choose from where the brief gives a range


@dataclass(frozen=True, slots=True)
class Group:
    """Elements that are alike: same charge, same voltages, so the same options.

    Attributes
    ----------
    names
        Their names.
    options
        The ways to build one of them, impedances for its multiplier.
    """

    names: tuple[str, ...]
    options: Options


@dataclass(frozen=True, slots=True)
class Totals:
    """Sums over all elements of a choice.

    Attributes
    ----------
    slow, fast
        R_SSL and R_FSL [ohm].
    fixed
        Loss by gate drive and output charge [W].
    footprint, price
        In whole units.
    """

    slow: float
    fast: float
    fixed: float
    footprint: int
    price: int


@dataclass(frozen=True, slots=True)
class Problem:
    """What is chosen, made least and limited.

    Attributes
    ----------
    groups
        What is chosen.
    blend
        How R_SSL and R_FSL are joined.
    square_current
        I^2 [A2].
    conducts
        Whether conduction loss follows from the impedance; not where the output is held.
    offset
        Loss that no choice changes [W].
    least
        What is made least.
    limit
        Most of conduction loss plus `share` times fixed loss [W]; infinite without a target.
    share
        Weight of the fixed loss in the limit [1].
    impedance_limit
        Most of the blend [ohm].
    footprint, price
        Budgets in whole units, or None.
    """

    groups: tuple[Group, ...]
    blend: Blend
    square_current: float
    conducts: bool
    offset: float
    least: Aim
    limit: float
    share: float
    impedance_limit: float
    footprint: int | None
    price: int | None

    def totals(self, selection: Selection) -> Totals:
        """Add up a choice."""
        slow = fast = fixed = 0.0
        footprint = price = 0
        for group, chosen in zip(self.groups, selection, strict=True):
            o, rows = group.options, list(chosen)
            slow += math.fsum(o.slow[rows])
            fast += math.fsum(o.fast[rows])
            fixed += math.fsum(o.fixed[rows])
            footprint += int(o.footprint[rows].sum())
            price += int(o.price[rows].sum())
        return Totals(slow, fast, fixed, footprint, price)

    def conduction(self, totals: Totals) -> float:
        """I^2 times the blend [W], or 0 where the output is held."""
        if not self.conducts:
            return 0.0
        return self.square_current * float(self.blend.value(totals.slow, totals.fast))

    def cost(self, totals: Totals) -> float:
        """Conduction loss plus weighted fixed loss [W]: what is made least, or limited."""
        weight = 1.0 if self.least == "loss" else self.share
        return self.conduction(totals) + weight * totals.fixed

    def objective(self, totals: Totals) -> float:
        """Return what is made least: the loss that a choice changes [W], or whole units."""
        return self.cost(totals) if self.least == "loss" else getattr(totals, self.least)

    def fits(self, totals: Totals) -> bool:
        """Whether a choice keeps within every budget and limit."""
        return (
            (self.footprint is None or totals.footprint <= self.footprint)
            and (self.price is None or totals.price <= self.price)
            and float(self.blend.value(totals.slow, totals.fast)) <= self.impedance_limit * (1 + SLACK)
            and (self.limit == math.inf or self.cost(totals) <= self.limit * (1 + SLACK))
        )


def phase_factors(brief: Brief) -> tuple[float, tuple[float, float]]:
    """Return what resistance times squared multiplier counts for in R_FSL [1].

    Of a capacitor, and of a switch that is closed in phase 1 and in phase 2; a free duty is taken as 50 %.
    """
    duty = brief.duty or _HALF
    return 1 / duty + 1 / (1 - duty), (1 / duty, 1 / (1 - duty))


def fast_factor(slot: Slot, brief: Brief) -> float:
    """Return what the resistance of one element counts for; see `phase_factors`."""
    of_capacitor, of_phase = phase_factors(brief)
    return of_phase[slot.phase - 1] if slot.phase else of_capacitor


def operating_input(brief: Brief) -> float:
    """Input voltage at which losses count [V].

    Fixed-ratio use: the nominal one. The droop budget belongs to the lowest one, where bias is less and so is
    the impedance: a choice that meets it here meets it there. Regulated use: the lowest one, where the
    frequency is highest and the droop must still leave the output.
    """
    return brief.input_nominal if brief.use == "fixed-ratio" else brief.input_minimum


def resolved(request: PartsRequest, brief: Brief) -> PartsRequest:
    """Fill in what a request leaves to the brief: deratings, footprint budget, target, frequencies.

    Raises
    ------
    CapmusterError
        If what is asked for has no end: least loss without a budget, least footprint or price without target.
        If the brief asks for interleaved copies: parts are chosen for one.
    """
    if brief.copies > 1:
        raise CapmusterError(
            f"parts: the brief asks for {brief.copies} interleaved copies, and parts are chosen for one",
            accepted="the brief of one copy, with its share of load and budgets",
        )
    frequencies = request.frequencies
    if not frequencies:
        lowest, highest = brief.frequency_minimum or brief.frequency, brief.frequency
        between = np.geomspace(lowest, highest, _GRID)[1:-1].tolist() if lowest < highest else []
        rounded = (float(f"{one:.3g}") for one in between)
        frequencies = tuple(sorted({lowest, *rounded, highest}))
    technology = brief.technology
    footprint = request.footprint
    areas = [one for one in (brief.area, brief.silicon_area, brief.capacitor_area) if one is not None]
    if footprint is None and request.least == "loss" and request.price is None:
        if not areas:
            raise CapmusterError(
                "parts: least loss without a budget would take parts without end",
                accepted="a footprint or a price, or an area in the brief",
            )
        footprint = sum(areas)
    efficiency = request.efficiency
    if request.least != "loss" and request.loss is None and efficiency is None:
        efficiency = brief.efficiency_floor
        if efficiency is None:
            raise CapmusterError(
                f"parts: least {request.least} without a target would take the poorest parts",
                accepted="a loss or an efficiency, or an efficiency in the brief",
            )
    return replace(
        request,
        footprint=footprint,
        efficiency=efficiency,
        frequencies=frequencies,
        capacitor_derating=request.capacitor_derating or technology.capacitor_derating,
        switch_derating=request.switch_derating or technology.switch_derating,
    )


def pose(
    slots: Sequence[Slot],
    ratio: Fraction,
    brief: Brief,
    book: OptionBook,
    blend: Blend,
    *,
    pruned: bool = True,
) -> Problem:
    """Pose the problem of one converter.

    Parameters
    ----------
    slots
        What must be built.
    ratio
        M.
    brief
        Its use.
    book
        Ways to build elements, of a resolved request.
    blend
        How R_SSL and R_FSL are joined.
    pruned
        Whether options that another one beats are left out.

    Raises
    ------
    NoPartError
        If no part of the stock stands some voltage.
    """
    volts = operating_input(brief)
    alike: dict[tuple[str, Fraction, Fraction, float, float], list[str]] = defaultdict(list)
    for slot in slots:
        per_duty = fast_factor(slot, brief)
        alike[slot.kind, slot.multiplier, slot.ideal, slot.voltage, per_duty].append(slot.name)
    groups = []
    for (kind, multiplier, ideal, voltage, per_duty), names in alike.items():
        operating = float(ideal) * volts
        if kind == "capacitor":
            options = book.capacitor(voltage, operating, pruned=pruned)
        else:
            options = book.switch(voltage, operating, idle=not multiplier, pruned=pruned)
        squared = float(multiplier) ** 2
        groups.append(Group(tuple(names), options.scaled(squared, squared * per_duty)))
    return replace(frame_of(ratio, brief, book, blend), groups=tuple(groups))


def frame_of(ratio: Fraction, brief: Brief, book: OptionBook, blend: Blend) -> Problem:
    """Pose the problem of any converter of a ratio, without its elements.

    Parameters
    ----------
    ratio, brief, book, blend
        As in `pose`.
    """
    request, volts = book.request, operating_input(brief)
    held = brief.use == "regulated"
    ideal_power = abs(float(ratio)) * volts * brief.current
    overhead = brief.technology.controller_power
    lead = brief.technology.wiring_resistance
    square = brief.current**2
    offset = overhead + (ideal_power - abs(brief.required) * brief.current if held else square * lead)
    limit, share = math.inf, 1.0
    if request.loss is not None:
        limit = request.loss - offset
    elif request.efficiency is not None and held:
        limit = abs(brief.required) * brief.current / request.efficiency - ideal_power - overhead
    elif request.efficiency is not None:
        # efficiency = (M V I - I^2 R) / (M V I + Q) >= eta is I^2 R + eta Q <= (1 - eta) M V I
        share = request.efficiency
        limit = (1 - share) * ideal_power - square * lead - share * overhead
    budget_unit = ((request.footprint, book.units.per_mm2), (request.price, book.units.per_eur))
    footprint, price = (
        None if budget is None else math.floor(exact(budget) * per) for budget, per in budget_unit
    )
    return Problem(
        groups=(),
        blend=blend,
        square_current=square,
        conducts=not held,
        offset=offset,
        least=request.least,
        limit=limit,
        share=share,
        impedance_limit=float(brief.r_max(float(ratio))) - lead,
        footprint=footprint,
        price=price,
    )


_T = TypeVar("_T", float, "NDArray[np.float64]")


def reported(problem: Problem, units: Units, value: _T) -> _T:
    """Bring values of what is made least to what is reported: W of the whole loss, mm2 or EUR."""
    if problem.least == "loss":
        return value + problem.offset
    return value / (units.per_mm2 if problem.least == "footprint" else units.per_eur)


def stacked(problem: Problem, name: str) -> NDArray[np.float64]:
    """One figure of every option, group after group."""
    return np.concatenate([np.asarray(getattr(g.options, name), dtype=np.float64) for g in problem.groups])
