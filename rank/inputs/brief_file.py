"""What a brief file holds: its tables and fields, each with its unit and limits."""

from __future__ import annotations

from fractions import Fraction  # noqa: TC003 - pydantic reads the annotations
from typing import Annotated, Literal

from pydantic import BeforeValidator, model_validator

from capmuster.enumerate.errors import CapmusterError
from capmuster.rank.inputs.faults import Fault, raise_faults
from capmuster.rank.inputs.parts_section import PartsSection  # noqa: TC001 - pydantic reads the annotations
from capmuster.rank.inputs.quantity import parse_quantity, parse_ratio, show_value
from capmuster.rank.inputs.tomlfile import Line, Section, choice, quantity, whole

MOST_CAPACITORS = 40
MOST_SWITCHES = 3 * MOST_CAPACITORS + 1
_LEAST_FREQUENCY, _MOST_FREQUENCY = 1.0, 1e11  # 2 mHz where 2 MHz was meant is a slip worth catching
_MOST_VOLTS = 1e6
_MOST_COPIES = 64

Volts = Annotated[float, quantity("V", most=_MOST_VOLTS)]
Output = Annotated[float, quantity("V", "any", least=-_MOST_VOLTS, most=_MOST_VOLTS)]
Area = Annotated[float, quantity("mm2")]


class InputTable(Section):
    """``[input]``: the range of the input voltage."""

    minimum: Volts
    nominal: Volts
    maximum: Volts
    ripple: Volts | None = None


class OutputTable(Section):
    """``[output]``: the rail; `least` belongs to fixed-ratio use and `held` to regulated use."""

    use: Annotated[Literal["fixed-ratio", "regulated"], choice("fixed-ratio", "regulated")]
    least: Output | None = None
    held: Output | None = None
    most: Output | None = None
    regulation: Annotated[Literal["frequency", "conductance"], choice("frequency", "conductance")] | None = (
        None
    )
    ripple: Volts | None = None

    @model_validator(mode="after")
    def _one_output(self) -> OutputTable:
        wanted, other = ("held", "least") if self.use == "regulated" else ("least", "held")
        faults = []
        if getattr(self, wanted) is None:
            faults.append(
                Fault((wanted,), f"missing field {wanted!r}, which {self.use} use needs", named=True)
            )
        if getattr(self, other) is not None:
            faults.append(Fault((other,), f"does not belong to {self.use} use", f"{wanted} in its stead"))
        if self.most is not None and self.use == "regulated":
            faults.append(Fault(("most",), "does not belong to regulated use", 'use = "fixed-ratio"'))
        if self.regulation is not None and self.use != "regulated":
            faults.append(Fault(("regulation",), f"does not belong to {self.use} use", 'use = "regulated"'))
        raise_faults(faults)
        return self

    @property
    def required(self) -> float:
        """The output that must be reached [V]."""
        required = self.held if self.use == "regulated" else self.least
        return required if required is not None else 0.0


class LoadPointTable(Section):
    """One ``[[load.profile]]``: a share of the time; no current is sleep."""

    share: Annotated[float, quantity("1", most=1.0)]
    current: Annotated[float, quantity("A", "not negative")]
    input: Volts | None = None


class LoadTable(Section):
    """``[load]``: the full load, and what it is over time."""

    current: Annotated[float, quantity("A")]
    least: Annotated[float, quantity("A")] | None = None
    profile: tuple[LoadPointTable, ...] = ()


def _ratios(value: object) -> tuple[Fraction, ...] | None:
    if value == "any":
        return None
    if not isinstance(value, list) or not value:
        raise CapmusterError(
            f"value {show_value(value)} is not allowed", accepted='"any", or a list such as ["1/2", "2/5"]'
        )
    ratios, faults = [], []
    for position, one in enumerate(value):
        try:
            ratios.append(parse_ratio(one))
        except CapmusterError as error:
            faults.append(Fault((position,), error.problem, error.accepted))
    raise_faults(faults)
    return tuple(ratios)


class SearchTable(Section):
    """``[search]``: which converters are looked at."""

    ratios: Annotated[tuple[Fraction, ...] | None, BeforeValidator(_ratios)]
    capacitors: Annotated[int, whole(1, MOST_CAPACITORS)]
    switches: Annotated[int | None, whole(1, MOST_SWITCHES)] = None
    drive: Annotated[Literal["any", "rails"], choice("any", "rails")] = "any"


def _duty(value: object) -> float | str:
    return "free" if value == "free" else float(parse_quantity(value, "1", most=1.0))


_Hertz = Annotated[float, quantity("Hz", least=_LEAST_FREQUENCY, most=_MOST_FREQUENCY)]
_OBJECTIVES = ("conduction-area", "least-loss", "least-area", "power-density")


class DesignTable(Section):
    """``[design]``: what is fixed, limited, or to be made best."""

    objective: Annotated[
        Literal["conduction-area", "least-loss", "least-area", "power-density"], choice(*_OBJECTIVES)
    ] = "conduction-area"
    frequency: _Hertz | None = None
    frequency_minimum: _Hertz | None = None
    frequency_maximum: _Hertz | None = None
    duty: Annotated[float | Literal["free"], BeforeValidator(_duty)] = 0.5
    area: Area | None = None
    silicon_area: Area | None = None
    capacitor_area: Area | None = None
    efficiency: Annotated[float | None, quantity("1", most=1.0)] = None
    copies: Annotated[int, whole(1, _MOST_COPIES)] = 1

    @model_validator(mode="after")
    def _one_frequency(self) -> DesignTable:
        bounds = (self.frequency_minimum, self.frequency_maximum)
        accepted = "frequency alone, or frequency_minimum and frequency_maximum"
        if self.frequency is None and bounds == (None, None):
            raise_faults([Fault(("frequency",), "missing field 'frequency'", accepted, named=True)])
        if self.frequency is not None and bounds != (None, None):
            raise_faults([Fault(("frequency",), "frequency and its bounds are both given", accepted)])
        if self.frequency is None and None in bounds:
            given = "frequency_minimum" if bounds[1] is None else "frequency_maximum"
            raise_faults([Fault((given,), f"{given} is given without its counterpart", accepted)])
        return self

    @property
    def highest_frequency(self) -> float:
        """The fixed frequency, or the highest one [Hz]."""
        highest = self.frequency if self.frequency is not None else self.frequency_maximum
        return highest if highest is not None else 0.0


class DeratingTable(Section):
    """``[derating]``: the share of its rating that an element may see, in the technology's stead."""

    capacitor: Annotated[float, quantity("1", most=1.0)] | None = None
    switch: Annotated[float, quantity("1", most=1.0)] | None = None


Spread = Annotated[float, quantity("1", "not negative")]
Celsius = Annotated[float, quantity("degC", "any")]


class ToleranceTable(Section):
    """``[tolerance]``: see `capmuster.rank.inputs.conditions.Tolerance`."""

    resistance: Spread = 0.0
    density: Spread = 0.0
    charge: Spread = 0.0
    capacitance: Spread = 0.0
    mismatch: Spread = 0.0
    load: Spread = 0.0
    temperature_low: Celsius = 27.0
    temperature_high: Celsius = 27.0
    resistance_drift: Annotated[float, quantity("1", "any")] = 0.004
    trials: Annotated[int, whole(20, 100_000)] = 1000
    seed: Annotated[int, whole(0, 2**31)] = 1


class BriefFile(Section):
    """A brief file."""

    title: Line
    technology: Line
    input: InputTable
    output: OutputTable
    load: LoadTable
    search: SearchTable
    design: DesignTable
    derating: DeratingTable | None = None
    tolerance: ToleranceTable | None = None
    parts: PartsSection | None = None
