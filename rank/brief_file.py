"""What a brief file holds: its tables and fields, each with its unit and limits."""

from __future__ import annotations

from fractions import Fraction  # noqa: TC003 - pydantic reads the annotations
from typing import Annotated, Literal

from pydantic import BeforeValidator, model_validator

from capmuster.enumerate.errors import CapmusterError
from capmuster.rank.faults import Fault, raise_faults
from capmuster.rank.quantity import parse_ratio, show_value
from capmuster.rank.tomlfile import Line, Section, choice, quantity, whole

MOST_CAPACITORS = 40
MOST_SWITCHES = 3 * MOST_CAPACITORS + 1
_LEAST_FREQUENCY, _MOST_FREQUENCY = 1.0, 1e11  # 2 mHz where 2 MHz was meant is a slip worth catching
_MOST_VOLTS = 1e6

Volts = Annotated[float, quantity("V", most=_MOST_VOLTS)]
Output = Annotated[float, quantity("V", "any", least=-_MOST_VOLTS, most=_MOST_VOLTS)]
Area = Annotated[float, quantity("mm2")]


class InputTable(Section):
    """``[input]``: the range of the input voltage."""

    minimum: Volts
    nominal: Volts
    maximum: Volts


class OutputTable(Section):
    """``[output]``: the rail; `least` belongs to fixed-ratio use and `held` to regulated use."""

    use: Annotated[Literal["fixed-ratio", "regulated"], choice("fixed-ratio", "regulated")]
    least: Output | None = None
    held: Output | None = None

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
        raise_faults(faults)
        return self

    @property
    def required(self) -> float:
        """The output that must be reached [V]."""
        required = self.held if self.use == "regulated" else self.least
        return required if required is not None else 0.0


class LoadTable(Section):
    """``[load]``."""

    current: Annotated[float, quantity("A")]


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


class DesignTable(Section):
    """``[design]``: what is fixed or limited."""

    frequency: Annotated[float, quantity("Hz", least=_LEAST_FREQUENCY, most=_MOST_FREQUENCY)]
    area: Area | None = None
    silicon_area: Area | None = None
    capacitor_area: Area | None = None
    efficiency: Annotated[float | None, quantity("1", most=1.0)] = None


class BriefFile(Section):
    """A brief file."""

    title: Line
    technology: Line
    input: InputTable
    output: OutputTable
    load: LoadTable
    search: SearchTable
    design: DesignTable
