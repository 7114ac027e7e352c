"""What each of many converters costs for a brief: classes, area coefficients, areas, efficiencies."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from capmuster.rank.areas import fast_coefficient, least_area, slow_coefficient
from capmuster.rank.design.classprices import ClassCosts, cheapest
from capmuster.rank.design.devicechoice import choose_and_size
from capmuster.rank.design.gatedrive import floating_drives, rail_driven
from capmuster.rank.design.losses import series_counts
from capmuster.rank.design.operation import Candidates
from capmuster.rank.design.screening import can_be_exact, merit_bound
from capmuster.rank.scores.networktable import network_table
from capmuster.rank.scores.switching import switch_network
from capmuster.rank.scores.switchtable import score, switch_table
from capmuster.rank.worstcase import ratings

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from capmuster.enumerate.converters import ConverterTable
    from capmuster.rank.design.objectives import Sized
    from capmuster.rank.inputs.brief import Brief
    from capmuster.rank.inputs.technology import Choice
    from capmuster.rank.scores.switchtable import SwitchTable
    from capmuster.rank.worstcase import Ratings

_I, _O = 1, 2


@dataclass(frozen=True, slots=True)
class Elements:
    """Class, weight and voltage of every capacitor and switch of N converters.

    Attributes
    ----------
    ratings
        Voltages that the elements must stand.
    capacitor_choice, switch_choice
        Class and series count of each element; an idle switch has the smallest device.
    capacitor_weights
        Shape (N, n): a_c sqrt(s^2 / density) [mm / F^(1/2)].
    switch_weights
        Shape (N, s): a_r sqrt(s^2 rho) [ohm^(1/2) mm]; 0 for idle switches and beyond a row's switches.
    idle_area
        Shape (N,): area of the idle switches [mm2].
    """

    ratings: Ratings
    capacitor_choice: Choice
    switch_choice: Choice
    capacitor_weights: NDArray[np.float64]
    switch_weights: NDArray[np.float64]
    idle_area: NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Evaluation:
    """N candidates of a brief; every array has shape (N,).

    Where the brief counts losses, areas and impedance are those of its objective, and `sized` says more.

    Attributes
    ----------
    slow, fast
        Area coefficients of the two limits [ohm mm2].
    capacitor_area, switching_area
        Areas of the capacitors, and of the switches that carry charge, that meet the droop budget at the
        brief's frequency [mm2]; NaN where none within the budgets do.
    idle_area
        Area of the switches that carry no charge [mm2].
    impedance
        Output impedance at these areas [ohm]: the droop budget over the load current.
    ratio
        M [1].
    switches
        Number of switches.
    capacitor_utilisation, switch_utilisation
        See `capmuster.rank.scores.utilisation` [1].
    highest_capacitor_voltage, highest_blocking_voltage
        Highest voltage that a capacitor, and that a switch, must stand [V].
    output_evenness
        Least phase share of the output charge over one half [1].
    clean
        Whether no switch is idle or equipotential.
    floating_drives
        Number of switches whose gates no rail can drive.
    merit
        What candidates are ranked by, the less the better: the area [mm2], or as `Sized.merit`.
    worst_efficiency
        Least efficiency over the input range [1]; conduction only, with the whole droop budget used, where
        the brief counts no losses.
    sized
        Sizes and losses where the brief counts losses, or None.
    bound
        Lower bound on the merit over all classes, switch trees and sizes, where the brief counts losses;
        minus infinity where there is none.
    """

    slow: NDArray[np.float64]
    fast: NDArray[np.float64]
    capacitor_area: NDArray[np.float64]
    switching_area: NDArray[np.float64]
    idle_area: NDArray[np.float64]
    impedance: NDArray[np.float64]
    ratio: NDArray[np.float64]
    switches: NDArray[np.int64]
    capacitor_utilisation: NDArray[np.float64]
    switch_utilisation: NDArray[np.float64]
    highest_capacitor_voltage: NDArray[np.float64]
    highest_blocking_voltage: NDArray[np.float64]
    output_evenness: NDArray[np.float64]
    clean: NDArray[np.bool_]
    floating_drives: NDArray[np.int64]
    merit: NDArray[np.float64]
    worst_efficiency: NDArray[np.float64]
    sized: Sized | None = None
    bound: NDArray[np.float64] | None = None

    @property
    def silicon_area(self) -> NDArray[np.float64]:
        """All switches together [mm2]."""
        return self.switching_area + self.idle_area

    @property
    def area(self) -> NDArray[np.float64]:
        """Capacitors and silicon together [mm2]."""
        return self.capacitor_area + self.silicon_area


def choose_elements(table: ConverterTable, switches: SwitchTable, brief: Brief) -> Elements:
    """Choose the class of every element by its worst-case voltage."""
    technology = brief.technology
    stands = ratings(table, switches, brief)
    output = np.abs(table.port_charges[:, _O, None]).astype(np.float64)
    capacitor_choice = technology.capacitor_choice(stands.capacitors)
    switch_choice = technology.switch_choice(stands.switches)
    if brief.drive == "rails":
        switch_choice = _driven(table, switches, brief, stands.switches)
    weights = switches.charges / output * np.sqrt(switch_choice.cost)
    idle = (switches.phase > 0) & (switches.charges == 0)
    idle_area = np.zeros(len(table))
    if idle.any():
        smallest = technology.smallest_switch(stands.switches)
        idle_area = np.where(idle, smallest.cost, 0.0).sum(axis=1)
        switch_choice = _merged(idle, smallest, switch_choice)
    return Elements(
        ratings=stands,
        capacitor_choice=capacitor_choice,
        switch_choice=switch_choice,
        capacitor_weights=np.abs(table.charges) / output * np.sqrt(capacitor_choice.cost),
        switch_weights=weights,
        idle_area=idle_area,
    )


def _driven(
    table: ConverterTable, switches: SwitchTable, brief: Brief, voltage: NDArray[np.float64]
) -> Choice:
    """Choose by least cost among the classes that the rails can drive, where there is one."""
    able, technology = rail_driven(table, switches, brief), brief.technology
    able |= ~able.any(axis=-1, keepdims=True)
    columns = technology.switch_columns()
    series = series_counts(voltage, columns.limit)
    return cheapest(ClassCosts(np.where(able, series**2 * columns.resistance, np.inf), series))


def _merged(where: NDArray[np.bool_], chosen: Choice, other: Choice) -> Choice:
    return type(other)(
        index=np.where(where, chosen.index, other.index),
        series=np.where(where, chosen.series, other.series),
        cost=np.where(where, chosen.cost, other.cost),
    )


def evaluate(table: ConverterTable, brief: Brief) -> Evaluation:
    """Size every converter of a table for a brief, in one batch."""
    switches = _switches(table)
    candidates = Candidates(table, switches, choose_elements(table, switches, brief), brief)
    if brief.counts_losses:
        chosen, sized = choose_and_size(candidates)
        bound = merit_bound(chosen, sized) if can_be_exact(brief) else np.full(len(table), -np.inf)
        return evaluation_of(chosen, sized, bound)
    elements = candidates.elements
    slow = slow_coefficient(elements.capacitor_weights, brief.frequency)
    fast = fast_coefficient(elements.switch_weights)
    silicon = None if brief.silicon_area is None else brief.silicon_area - elements.idle_area
    areas = least_area(slow, fast, brief.r_max(table.ratios), brief.capacitor_area, silicon)
    return _evaluation(
        candidates,
        slow=slow,
        fast=fast,
        capacitor_area=areas.capacitor_area,
        switching_area=areas.silicon_area,
        impedance=areas.impedance,
        merit=areas.area + elements.idle_area,
        worst_efficiency=worst_efficiency(brief, table.ratios),
    )


def _switches(table: ConverterTable) -> SwitchTable:
    """Switches of every converter; equipotential ones, which only a single one has, by the exact rule."""
    if len(table) == 1 and not score(table).clean[0]:
        return network_table(table, switch_network(table.converter(0)))
    return switch_table(table)


def evaluation_of(candidates: Candidates, sized: Sized, bound: NDArray[np.float64]) -> Evaluation:
    """Gather the figures of sized candidates, with the bounds on their merits over all classes and trees."""
    return _evaluation(
        candidates,
        slow=sized.minimum.slow * sized.capacitor_area,
        fast=sized.minimum.fast * sized.switching_area,
        capacitor_area=sized.capacitor_area,
        switching_area=sized.switching_area,
        impedance=sized.nominal.impedance,
        merit=sized.merit,
        worst_efficiency=sized.worst_efficiency,
        sized=sized,
        bound=bound,
    )


def _evaluation(candidates: Candidates, **figures: Any) -> Evaluation:  # noqa: ANN401 -- fields of Evaluation
    table, switches, elements = candidates.table, candidates.switches, candidates.elements
    scores = score(table)
    able = rail_driven(table, switches, candidates.brief)
    return Evaluation(
        idle_area=elements.idle_area,
        ratio=table.ratios,
        switches=scores.switches,
        capacitor_utilisation=scores.capacitor_utilisation,
        switch_utilisation=scores.switch_utilisation,
        highest_capacitor_voltage=elements.ratings.capacitors.max(axis=1),
        highest_blocking_voltage=elements.ratings.switches.max(axis=1),
        output_evenness=output_evenness(table),
        clean=scores.clean,
        floating_drives=floating_drives(able, elements.switch_choice, switches),
        **figures,
    )


def output_evenness(table: ConverterTable) -> NDArray[np.float64]:
    """Least phase share of the output charge over one half, shape (N,): 1 when both phases feed it alike."""
    flow = np.zeros((len(table), 2))
    for phase, sign in ((0, 1), (1, -1)):
        plus, minus = table.words[:, :, 2 * phase] == _O, table.words[:, :, 2 * phase + 1] == _O
        flow[:, phase] = sign * (table.charges * (plus.astype(np.int64) - minus)).sum(axis=1)
    share = flow / table.port_charges[:, _O, None]
    return np.asarray(np.clip(2 * share.min(axis=1), 0.0, 1.0))


def efficiency(
    brief: Brief, ratio: NDArray[np.float64], impedance: NDArray[np.float64], volts: float
) -> NDArray[np.float64]:
    """Conduction-only efficiency V_out / (M V_in) at an input voltage [V], shape (N,).

    In fixed-ratio use the output is M V_in less the droop; in regulated use it is held.
    """
    ideal = np.abs(ratio) * volts
    output = ideal - brief.current * impedance if brief.use == "fixed-ratio" else abs(brief.required)
    return np.asarray(output / ideal)


def worst_efficiency(brief: Brief, ratio: NDArray[np.float64]) -> NDArray[np.float64]:
    """Conduction-only efficiency at the worst input with the whole droop budget used, shape (N,)."""
    limit = brief.r_max(ratio)
    ends = [efficiency(brief, ratio, limit, volts) for volts in (brief.input_minimum, brief.input_maximum)]
    return np.asarray(np.minimum(*ends))


def ceiling(brief: Brief, ratio: NDArray[np.float64], volts: float) -> NDArray[np.float64]:
    """Efficiency ceiling |V_required| / (|M| V_in) at an input voltage [V], shape (N,).

    It is the most that any converter of the ratio can reach while its output is used at the required voltage.
    """
    return np.asarray(np.minimum(abs(brief.required) / (np.abs(ratio) * volts), 1.0))
