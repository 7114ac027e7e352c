"""A converter filled with parts: what it is built of, and what it loses, term by term, at any input voltage.

The losses here are added up part by part from the catalog's values, apart from the sums that the search uses.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, fields
from typing import TYPE_CHECKING, Final

from capmuster.rank.discrete.problem import fast_factor
from capmuster.rank.inputs.parts import CapacitorPart

if TYPE_CHECKING:
    from collections.abc import Sequence

    from capmuster.enumerate.wiring import Converter
    from capmuster.rank.discrete.blends import Blend
    from capmuster.rank.discrete.options import OptionBook
    from capmuster.rank.discrete.problem import Problem, Selection
    from capmuster.rank.discrete.slots import Slot
    from capmuster.rank.inputs.brief import Brief
    from capmuster.rank.inputs.parts import SwitchPart
    from capmuster.rank.inputs.parts_request import PartsRequest

_HALF: Final = 0.5


@dataclass(frozen=True, slots=True)
class Filling:
    """A capacitor or switch of a converter with its parts.

    Attributes
    ----------
    slot
        What is built.
    part
        The part.
    series, parallel
        Parts in series, and such strings in parallel [1].
    rating
        What the string stands, derated [V].
    footprint, price
        Of all its parts and its driver [mm2], [EUR].
    """

    slot: Slot
    part: CapacitorPart | SwitchPart
    series: int
    parallel: int
    rating: float
    footprint: float
    price: float

    @property
    def number(self) -> int:
        """Parts in all [1]."""
        return self.series * self.parallel

    @property
    def stress(self) -> float:
        """Voltage over derated rating [1]."""
        return self.slot.voltage / self.rating

    def value(self, request: PartsRequest, input_voltage: float) -> float:
        """Capacitance under bias [F], or on-resistance [ohm] at the junction temperature."""
        if isinstance(self.part, CapacitorPart):
            each = float(self.slot.ideal) * input_voltage / self.series
            one = float(self.part.capacitance(each, least=request.capacitance == "least"))
            return one * self.parallel / self.series
        return self.part.resistance_at(request.temperature) * self.series / self.parallel


@dataclass(frozen=True, slots=True)
class LossTerms:
    """Loss by term [W]; none is counted in another.

    Attributes
    ----------
    redistribution, on_resistance, series_resistance
        Shares of conduction loss: charge that moves between capacitors, switches, capacitors' series
        resistance; as the slopes of the blend divide it. All 0 where the output is held.
    held
        Where the output is held below its ideal: the whole droop times the current.
    wiring
        Wiring in series with the output; within `held` where the output is held.
    gate, output_charge
        Gate drive and output charge of the switches.
    controller
        Controller.
    """

    redistribution: float
    on_resistance: float
    series_resistance: float
    held: float
    wiring: float
    gate: float
    output_charge: float
    controller: float

    @property
    def total(self) -> float:
        """Sum of all terms [W]."""
        return math.fsum(getattr(self, one.name) for one in fields(self))

    @property
    def load_free(self) -> float:
        """What is lost whatever the load [W]."""
        return self.gate + self.output_charge + self.controller


@dataclass(frozen=True, slots=True)
class Condition:
    """A filled converter at one input voltage and full load.

    Attributes
    ----------
    input_voltage
        Input voltage [V].
    frequency
        Switching frequency [Hz].
    slow, fast
        R_SSL and R_FSL [ohm].
    impedance
        Output impedance, wiring included [ohm].
    output_voltage
        Magnitude of the output voltage [V].
    efficiency
        Output power over input power [1].
    losses
        Loss by term.
    """

    input_voltage: float
    frequency: float
    slow: float
    fast: float
    impedance: float
    output_voltage: float
    efficiency: float
    losses: LossTerms


def fill(
    slots: Sequence[Slot], problem: Problem, selection: Selection, book: OptionBook
) -> tuple[Filling, ...]:
    """Put the parts of a choice into their places.

    Parameters
    ----------
    slots
        What is built, in the order of the result.
    problem
        Its problem.
    selection
        The choice; alike elements take its options in the order of their names.
    book
        The book that the problem was posed with.
    """
    request, units = book.request, book.units
    place = {slot.name: slot for slot in slots}
    found: dict[str, Filling] = {}
    for group, options in zip(problem.groups, selection, strict=True):
        for name, k in zip(group.names, options, strict=True):
            slot, o = place[name], group.options
            series, parallel = int(o.series[k]), int(o.parallel[k])
            capacitor = slot.kind == "capacitor"
            part = (request.stock.capacitors if capacitor else request.stock.switches)[int(o.part[k])]
            derating = request.capacitor_derating if capacitor else request.switch_derating
            found[name] = Filling(
                slot=slot,
                part=part,
                series=series,
                parallel=parallel,
                rating=series * part.rating * (derating or 1.0),
                footprint=int(o.footprint[k]) / units.per_mm2,
                price=int(o.price[k]) / units.per_eur,
            )
    return tuple(found[slot.name] for slot in slots)


def condition(
    fillings: Sequence[Filling],
    ratio: float,
    brief: Brief,
    *,
    request: PartsRequest,
    frequency: float,
    input_voltage: float,
    blend: Blend,
) -> Condition:
    """Find what a filled converter does at an input voltage.

    Parameters
    ----------
    fillings
        Its elements.
    ratio
        M.
    brief
        Its use.
    request
        Resolved request: temperature, tolerance.
    frequency
        Switching frequency [Hz]; see `holding_frequency` for regulated use.
    input_voltage
        Input voltage [V].
    blend
        How R_SSL and R_FSL are joined.
    """
    slow = on = series = gate = output_charge = 0.0
    for one in fillings:
        squared, value = float(one.slot.multiplier) ** 2, one.value(request, input_voltage)
        if isinstance(one.part, CapacitorPart):
            slow += squared / (frequency * value)
            resistance = one.part.series_resistance * one.series / one.parallel
            series += fast_factor(one.slot, brief) * squared * resistance
        else:
            on += fast_factor(one.slot, brief) * squared * value
            gate += frequency * one.number * one.part.gate_charge * one.part.drive
            each = float(one.slot.ideal) * input_voltage / one.series
            output_charge += frequency * one.number * float(one.part.output_charge_at(each)) * each
    joined, slopes = float(blend.value(slow, on + series)), blend.slopes(slow, on + series)
    lead, square = brief.technology.wiring_resistance, brief.current**2
    by_slow, by_fast = (square * float(slope) for slope in slopes)
    droop = (joined + lead) * brief.current
    ideal = abs(ratio) * input_voltage
    held = brief.use == "regulated"
    reached = abs(brief.required) if held else ideal - droop
    losses = LossTerms(
        redistribution=0.0 if held else by_slow * slow,
        on_resistance=0.0 if held else by_fast * on,
        series_resistance=0.0 if held else by_fast * series,
        held=(ideal - reached) * brief.current if held else 0.0,
        wiring=0.0 if held else square * lead,
        gate=gate,
        output_charge=output_charge,
        controller=brief.technology.controller_power,
    )
    return Condition(
        input_voltage=input_voltage,
        frequency=frequency,
        slow=slow,
        fast=on + series,
        impedance=joined + lead,
        output_voltage=reached,
        efficiency=reached * brief.current / (ideal * brief.current + losses.load_free),
        losses=losses,
    )


def holding_frequency(
    fillings: Sequence[Filling],
    ratio: float,
    brief: Brief,
    *,
    request: PartsRequest,
    frequency: float,
    input_voltage: float,
    blend: Blend,
) -> float:
    """Find the frequency at which a filled converter holds its output [Hz].

    It is the given one, but for regulation by frequency: there it is as low as the whole droop asks for.

    Parameters
    ----------
    fillings, ratio, brief, request, frequency, input_voltage, blend
        As in `condition`; the frequency is the highest one.
    """
    if brief.use != "regulated" or brief.regulation != "frequency":
        return frequency
    from scipy.optimize import brentq  # noqa: PLC0415 -- only for finalists

    full = condition(
        fillings,
        ratio,
        brief,
        request=request,
        frequency=frequency,
        input_voltage=input_voltage,
        blend=blend,
    )
    droop = abs(ratio) * input_voltage - abs(brief.required)
    wanted = droop / brief.current - brief.technology.wiring_resistance
    if float(blend.value(full.slow, full.fast)) >= wanted:
        return frequency
    # R_SSL goes with one over the frequency, and no blend is below it.
    slower = brentq(
        lambda times: float(blend.value(times * full.slow, full.fast)) - wanted, 1.0, wanted / full.slow
    )
    return frequency / float(slower)


def exact_impedance(
    converter: Converter,
    fillings: Sequence[Filling],
    brief: Brief,
    *,
    request: PartsRequest,
    frequency: float,
    input_voltage: float,
) -> float:
    """Find the output impedance of a filled converter, wiring included, without any blend [ohm].

    Parameters
    ----------
    converter
        The converter.
    fillings, brief, request, frequency, input_voltage
        As in `condition`.
    """
    from capmuster.rank.exact.circuit import circuit_of  # noqa: PLC0415 -- only for finalists
    from capmuster.rank.exact.impedance import output_impedance  # noqa: PLC0415

    values = [one.value(request, input_voltage) for one in fillings]
    series = [
        one.part.series_resistance * one.series / one.parallel
        for one in fillings
        if isinstance(one.part, CapacitorPart)
    ]
    n = converter.n
    circuit = circuit_of(
        converter, values[:n], values[n:], series_resistances=series, duty=brief.duty or _HALF
    )
    exact = output_impedance(circuit, frequency)
    return float(exact.resistance[0]) + brief.technology.wiring_resistance
