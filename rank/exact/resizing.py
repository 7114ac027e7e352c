"""Sized elements as an exact circuit, scaled and classed anew.

Re-sizing on the exact impedance takes no search: with all areas times `t` every time constant stays, so the
exact impedance falls by exactly `t` and the no-load ratio does not move.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

from capmuster.rank.exact.circuit import Circuit, Plate, circuit_of
from capmuster.rank.exact.impedance import OutputImpedance, blend, output_impedance
from capmuster.rank.exact.steadystate import SteadyState
from capmuster.rank.inputs.technology import SwitchClass

if TYPE_CHECKING:
    from collections.abc import Sequence

    from capmuster.enumerate.wiring import Converter
    from capmuster.rank.elements import Element
    from capmuster.rank.inputs.brief import Brief
    from capmuster.rank.inputs.technology import CapacitorClass, Technology

_RESCALED = 1e-12
_ROUNDS = 50
_ROUNDING = 1e-9


@dataclass(frozen=True, slots=True)
class Job:
    """What stays while a finalist is re-sized.

    Attributes
    ----------
    converter, brief
        What it is and what it is for.
    frequency
        Switching frequency at the lowest input and full load [Hz].
    duty
        Share of phase 1 [1].
    current
        Full load [A].
    """

    converter: Converter
    brief: Brief
    frequency: float
    duty: float
    current: float


def element_circuit(
    converter: Converter,
    elements: Sequence[Element],
    technology: Technology,
    sides: Sequence[Plate],
    duty: float = 0.5,
) -> Circuit:
    """Build the circuit of sized elements, with series resistances and plates of their classes.

    Parameters
    ----------
    converter
        The converter.
    elements
        Its capacitors, then its switches.
    technology
        Where the classes come from.
    sides
        The plate of each capacitor that carries the parasitic.
    duty
        Share of phase 1 [1].

    Returns
    -------
    Circuit
        Without dead time.
    """
    classes = {one.name: one for one in technology.capacitors}
    capacitors = [element for element in elements if element.kind == "capacitor"]
    series = [classes[one.device].series_resistance * one.series**2 / one.area for one in capacitors]
    # Devices in series step together, so their plates add up: s times one, s^2 times per capacitance.
    plates = [classes[one.device].plate_fraction * one.series**2 for one in capacitors]
    return circuit_of(
        converter,
        [one.value for one in capacitors],
        [one.value for one in elements if one.kind == "switch"],
        series_resistances=series,
        plate_fraction=plates,
        plate=sides,
        duty=duty,
        between=[(*one.nodes, one.phase) for one in elements if one.phase is not None],
    )


def _circuit(job: Job, elements: tuple[Element, ...], sides: list[Plate]) -> Circuit:
    return element_circuit(job.converter, elements, job.brief.technology, sides, job.duty)


def _plates(job: Job, elements: tuple[Element, ...]) -> list[Plate]:
    """Choose, where the class leaves the choice, the plate that leaves the higher no-load output."""
    classes = {one.name: one for one in job.brief.technology.capacitors}
    given = [classes[one.device].plate for one in elements if one.kind == "capacitor"]
    sides: list[Plate] = ["minus" if side == "either" else side for side in given]

    def height(chosen: list[Plate]) -> float:
        _, charge = SteadyState.of(_circuit(job, elements, chosen)).charges(job.frequency)[0]
        return float(abs(charge[0] / charge[1]))

    best = height(sides)
    for index, side in enumerate(given):
        if side == "either":
            other: list[Plate] = [*sides[:index], "plus", *sides[index + 1 :]]
            reached = height(other)
            if reached > best * (1 + 1e-12):
                sides, best = other, reached
    return sides


def promised_impedance(job: Job, elements: tuple[Element, ...]) -> float:
    """Output impedance that sizing has counted with: the blend with exponent 2 [ohm]."""
    impedance = output_impedance(_circuit(job, elements, _plates(job, elements)), job.frequency)
    return float(blend(impedance.slow[0], impedance.fast[0]))


def resized(
    job: Job, elements: tuple[Element, ...], promised: float
) -> tuple[tuple[Element, ...], Circuit, OutputImpedance, bool]:
    """Scale all areas until the required output is held exactly; idle switches do not scale, so repeat."""
    brief, sides = job.brief, _plates(job, elements)
    wiring = brief.technology.wiring_resistance if brief.counts_losses else 0.0
    for _ in range(_ROUNDS):
        circuit = _circuit(job, elements, sides)
        impedance = output_impedance(circuit, job.frequency)
        droop = abs(impedance.ratio[0]) * brief.input_minimum - abs(brief.required)
        budget = min(float(droop / job.current - wiring), promised)
        step = float(impedance.resistance[0] / budget) if budget > 0 else 1.0
        if abs(step - 1.0) < _RESCALED:
            break
        elements = tuple(_scaled(element, step) for element in elements)
    return elements, circuit, impedance, budget > 0


def _scaled(element: Element, step: float) -> Element:
    if element.multiplier == 0:
        return element  # an idle switch keeps the smallest device
    value = element.value * step if element.kind == "capacitor" else element.value / step
    return replace(element, area=element.area * step, value=value)


def reclassed(element: Element, peak: float, brief: Brief) -> Element:
    """Choose the class of an element by its peak voltage, at equal capacitance or resistance.

    Where losses or gate drives have had a say, the class stays and only the number in series follows.
    """
    technology, idle = brief.technology, element.multiplier == 0
    classes: Sequence[CapacitorClass | SwitchClass]
    if element.kind == "capacitor":
        classes, derating, choose = (
            technology.capacitors,
            technology.capacitor_derating,
            technology.capacitor_choice,
        )
    else:
        classes, derating = technology.switches, technology.switch_derating
        choose = technology.smallest_switch if idle else technology.switch_choice
    if brief.counts_losses or brief.drive != "any":
        device = next(one for one in classes if one.name == element.device)
        series = max(1, math.ceil(peak * (1 - _ROUNDING) / (device.rating * derating)))
    else:
        choice = choose(peak)
        device, series = classes[int(choice.index)], int(choice.series)
    value = element.value
    if isinstance(device, SwitchClass):
        area = series * device.least_area if idle else series**2 * device.resistance / value
        value = series**2 * device.resistance / area
    else:
        area = series**2 * value / device.density
    rating = series * device.rating * derating
    return replace(
        element, device=device.name, series=series, area=area, value=value, voltage=peak, rating=rating
    )
