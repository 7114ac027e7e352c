"""A sized candidate on the exact impedance: its true area, its stress in use and at start-up.

Sizing works with a blend of the limits and with bounds on voltages. Here the elements become a circuit, with
series resistances and plate parasitics. Re-sizing it exactly takes no search: with all areas times `t` every
time constant stays, so the exact impedance falls by exactly `t` and the no-load ratio does not move. The
exact peak voltages then choose the classes again, at equal capacitance and resistance, until nothing changes.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from capmuster.enumerate.errors import CapmusterError
from capmuster.rank.circuit import Circuit, Plate, circuit_of
from capmuster.rank.impedance import (
    OutputImpedance,
    blend,
    loop_blend,
    output_impedance,
    regulating_frequency,
)
from capmuster.rank.operating import OperatingPoint, operate
from capmuster.rank.steadystate import SteadyState
from capmuster.rank.technology import SwitchClass
from capmuster.rank.transient import StartUp, start_up

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence

    from capmuster.enumerate.wiring import Converter
    from capmuster.rank.brief import Brief
    from capmuster.rank.elements import Element
    from capmuster.rank.relaxation import Array
    from capmuster.rank.technology import CapacitorClass, Technology

OUTPUT_CAPACITANCE = 10.0
"""Output capacitor of the start-up over the sum of the flying ones; one that stays empty is tried too."""

LOADS = (1.0, 0.5, 0.2, 0.05)
"""Shares of the load current at which the swing in regulated use is taken; no load is the slow limit."""

AT_REST = 40.0
"""Span of the slowest mode, in time constants, that counts as the slow limit."""

_RESCALED = 1e-12
_ROUNDS = 20
_FREE_ROUNDS = 5


@dataclass(frozen=True, slots=True)
class Overstress:
    """An element that sees more than its class stands.

    Attributes
    ----------
    name
        The element.
    voltage
        Highest voltage [V].
    rating
        What it stands, derated [V].
    when
        "start-up" or "steady state".
    """

    name: str
    voltage: float
    rating: float
    when: str


@dataclass(frozen=True)
class Finalist:
    """A candidate after exact re-sizing.

    Attributes
    ----------
    converter, brief
        What it is and what it is for.
    elements
        Its elements with their final areas and values.
    circuit, frequency
        The circuit and its switching frequency [Hz].
    given_area
        Area before [mm2].
    holds
        Whether the shifted no-load ratio leaves any droop budget; without one the areas stay as given.
    impedance
        Exact impedance and limits of the final circuit, at `frequency`.
    points
        Exact steady states at the highest input, over the load.
    starts
        Exact start-ups at the highest input.
    """

    converter: Converter
    brief: Brief
    elements: tuple[Element, ...]
    circuit: Circuit
    frequency: float
    given_area: float
    holds: bool
    impedance: OutputImpedance
    points: tuple[OperatingPoint, ...]
    starts: tuple[StartUp, ...]

    @property
    def exact(self) -> float:
        """Exact output resistance [ohm]."""
        return float(self.impedance.resistance[0])

    @property
    def blended(self) -> float:
        """Output resistance by the common blend of the same limits, exponent 2 [ohm]."""
        return float(blend(self.impedance.slow[0], self.impedance.fast[0]))

    @property
    def loop_blended(self) -> float:
        """Output resistance by ``x coth(x/y)`` of the same limits [ohm]."""
        return float(loop_blend(self.impedance.slow[0], self.impedance.fast[0]))

    @property
    def ratio_shift(self) -> float:
        """No-load ratio over the ideal one, less 1: what plate parasitics do."""
        return float(self.impedance.ratio[0]) / float(self.converter.ratio) - 1.0

    @property
    def area(self) -> float:
        """Area of all elements [mm2]."""
        return sum(element.area for element in self.elements)

    @property
    def steady_peaks(self) -> Array:
        """Highest voltage of each element in use [V], in the order of `elements`."""
        return _highest(self.points)

    @property
    def start_up_peaks(self) -> Array:
        """Highest voltage of each element at start-up [V], in the order of `elements`."""
        return _highest(self.starts)

    @property
    def inrush(self) -> float:
        """Highest input current at start-up [A]."""
        return max(start.input_peak for start in self.starts)

    @property
    def overstressed(self) -> tuple[Overstress, ...]:
        """Elements that see more than their class stands, in use first."""
        found = []
        for when, peaks in (("steady state", self.steady_peaks), ("start-up", self.start_up_peaks)):
            for element, peak in zip(self.elements, peaks.tolist(), strict=True):
                if peak > element.rating * (1 + 1e-9):
                    found.append(Overstress(element.name, peak, element.rating, when))
        return tuple(found)


def finalist(converter: Converter, elements: Sequence[Element], brief: Brief) -> Finalist:
    """Re-size a sized candidate on its exact impedance and find its stress.

    Parameters
    ----------
    converter
        The candidate.
    elements
        Its capacitors, then its switches, sized by any model.
    brief
        What it is for.

    Returns
    -------
    Finalist
        Scaled so that it holds the required output at the lowest input and full load, exactly.
    """
    sized, highest = tuple(elements), np.zeros(len(elements))
    for turn in range(_ROUNDS):
        sized, circuit, impedance, holds = _resized(converter, sized, brief)
        points = tuple(_points(SteadyState.of(circuit), brief))
        peaks = _highest(points)
        highest = np.maximum(highest, peaks)
        # Classes may take turns: after a while only higher voltages count, and that comes to an end.
        again = _reclassed(sized, peaks if turn < _FREE_ROUNDS else highest, brief.technology)
        settled = all((a.device, a.series) == (b.device, b.series) for a, b in zip(again, sized, strict=True))
        sized = again
        if settled:
            break
    return Finalist(
        converter=converter,
        brief=brief,
        elements=sized,
        circuit=circuit,
        frequency=brief.frequency,
        given_area=sum(element.area for element in elements),
        holds=holds,
        impedance=impedance,
        points=points,
        starts=tuple(_starts(circuit, brief)),
    )


def element_circuit(
    converter: Converter, elements: Sequence[Element], technology: Technology, sides: Sequence[Plate]
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

    Returns
    -------
    Circuit
        At 50 % duty without dead time.
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
    )


def _plates(converter: Converter, elements: Sequence[Element], brief: Brief) -> list[Plate]:
    """Choose, where the class leaves the choice, the plate that leaves the higher no-load output."""
    classes = {one.name: one for one in brief.technology.capacitors}
    given = [classes[one.device].plate for one in elements if one.kind == "capacitor"]
    sides: list[Plate] = ["minus" if side == "either" else side for side in given]

    def height(chosen: list[Plate]) -> float:
        circuit = element_circuit(converter, elements, brief.technology, chosen)
        return float(abs(output_impedance(circuit, brief.frequency).ratio[0]))

    best = height(sides)
    for index, side in enumerate(given):
        if side == "either":
            other: list[Plate] = [*sides[:index], "plus", *sides[index + 1 :]]
            reached = height(other)
            if reached > best * (1 + 1e-12):
                sides, best = other, reached
    return sides


def _highest(states: Sequence[OperatingPoint | StartUp]) -> Array:
    """Highest voltage of each element over states [V]: capacitors, then switches."""
    peaks = [np.concatenate([state.capacitor_peak, state.switch_peak]) for state in states]
    return np.asarray(np.max(peaks, axis=0))


def _resized(
    converter: Converter, elements: tuple[Element, ...], brief: Brief
) -> tuple[tuple[Element, ...], Circuit, OutputImpedance, bool]:
    """Scale all areas until the required output is held exactly; idle switches do not scale, so repeat."""
    sides = _plates(converter, elements, brief)
    while True:
        circuit = element_circuit(converter, elements, brief.technology, sides)
        impedance = output_impedance(circuit, brief.frequency)
        budget = (abs(impedance.ratio[0]) * brief.input_minimum - abs(brief.required)) / brief.current
        step = float(impedance.resistance[0] / budget) if budget > 0 else 1.0
        if abs(step - 1.0) < _RESCALED:
            return elements, circuit, impedance, bool(budget > 0)
        elements = tuple(_scaled(element, step) for element in elements)


def _scaled(element: Element, step: float) -> Element:
    if element.multiplier == 0:
        return element  # an idle switch keeps the smallest device
    value = element.value * step if element.kind == "capacitor" else element.value / step
    return replace(element, area=element.area * step, value=value)


def _reclassed(elements: tuple[Element, ...], peaks: Array, technology: Technology) -> tuple[Element, ...]:
    """Choose the class of every element by its peak voltage, at equal capacitance or resistance."""
    found = []
    for element, peak in zip(elements, peaks.tolist(), strict=True):
        device: CapacitorClass | SwitchClass
        if element.kind == "capacitor":
            choice = technology.capacitor_choice(peak)
            device = technology.capacitors[int(choice.index)]
            derating, area = technology.capacitor_derating, element.value * float(choice.cost)
        else:
            idle = element.multiplier == 0
            choice = (technology.smallest_switch if idle else technology.switch_choice)(peak)
            device = technology.switches[int(choice.index)]
            area = float(choice.cost) if idle else float(choice.cost) / element.value
            derating = technology.switch_derating
        series = int(choice.series)
        value = element.value
        if isinstance(device, SwitchClass) and element.multiplier == 0:
            value = device.resistance * series**2 / area
        found.append(
            replace(
                element,
                device=device.name,
                series=series,
                area=area,
                value=value,
                voltage=peak,
                rating=series * device.rating * derating,
            )
        )
    return tuple(found)


def _points(steady: SteadyState, brief: Brief) -> Iterator[OperatingPoint]:
    """Steady states at the highest input over the load; in regulated use frequency holds the output."""
    volts, sign = brief.input_maximum, brief.sign
    if brief.use == "fixed-ratio":
        for share in (0.0, 1.0):
            yield operate(steady, brief.frequency, volts, output_current=sign * share * brief.current)
        return
    slowest = float(steady.rates.min()) / (2 * AT_REST)
    for share in LOADS:
        try:
            frequency = regulating_frequency(
                steady,
                volts,
                brief.required,
                share * brief.current,
                lowest=min(slowest, brief.frequency),
                highest=brief.frequency,
            )
        except CapmusterError:
            frequency = brief.frequency  # even the highest input does not hold the output: take what there is
        yield operate(steady, frequency, volts, output_voltage=brief.required)
    yield operate(steady, min(slowest, brief.frequency), volts, output_voltage=brief.required)


def _starts(circuit: Circuit, brief: Brief) -> Iterator[StartUp]:
    """Start-ups at the highest input, in either phase, into an output that rises and one that stays at 0."""
    total = sum(capacitor.capacitance for capacitor in circuit.capacitors)
    for output in (OUTPUT_CAPACITANCE * total, math.inf):
        for phase in (1, 2):
            yield start_up(
                circuit,
                brief.frequency,
                brief.input_maximum,
                output_capacitance=output,
                first_phase=phase,
            )
