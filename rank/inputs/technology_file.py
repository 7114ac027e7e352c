"""What a technology file holds: its tables and fields, each with its unit and limits."""

from __future__ import annotations

from typing import Annotated, Literal, TypeVar

from pydantic import AfterValidator, Field

from capmuster.rank.inputs.faults import Fault, raise_faults
from capmuster.rank.inputs.quantity import show_value
from capmuster.rank.inputs.tomlfile import Line, Section, choice, quantity

Volts = Annotated[float, quantity("V")]
Area = Annotated[float, quantity("mm2")]
Share = Annotated[float, quantity("1", most=1.0)]
Charge = Annotated[float, quantity("C/mm2")]


class CapacitorTable(Section):
    """One ``[[capacitor]]``."""

    name: Line
    rating: Volts
    density: Annotated[float, quantity("F/mm2")]
    plate_fraction: Annotated[float, quantity("1", "not negative", most=1.0)]
    plate: Annotated[Literal["plus", "minus", "either"], choice("plus", "minus", "either")]
    series_resistance: Annotated[float, quantity("ohm mm2", "not negative")]
    leakage: Annotated[float, quantity("A/mm2", "not negative")]
    least_area: Area


class SwitchTable(Section):
    """One ``[[switch]]``."""

    name: Line
    polarity: Annotated[Literal["nmos", "pmos"], choice("nmos", "pmos")]
    rating: Volts
    resistance: Annotated[float, quantity("ohm mm2")]
    gate_charge: Charge
    drive: Volts
    output_charge: Charge
    output_charge_voltage: Volts
    output_charge_exponent: Share
    least_area: Area
    leakage: Annotated[float, quantity("A/mm2", "not negative")] = 0.0


class DeratingTable(Section):
    """``[derating]``: the share of its rating that an element may see."""

    capacitor: Share
    switch: Share


class OverheadTable(Section):
    """``[overhead]``: what every converter of the technology pays."""

    controller_power: Annotated[float, quantity("W", "not negative")] = 0.0
    wiring_resistance: Annotated[float, quantity("ohm", "not negative")] = 0.0
    sleep_power: Annotated[float | None, quantity("W", "not negative")] = None


Table = TypeVar("Table", CapacitorTable, SwitchTable)


def _distinct(tables: tuple[Table, ...]) -> tuple[Table, ...]:
    names = [table.name for table in tables]
    raise_faults(
        Fault((position, "name"), f"value {show_value(name)} is taken by a class above", "a name of its own")
        for position, name in enumerate(names)
        if name in names[:position]
    )
    return tables


class TechnologyFile(Section):
    """A technology file."""

    title: Line
    kind: Annotated[Literal["chip", "board"], choice("chip", "board")]
    derating: DeratingTable
    overhead: OverheadTable = Field(default_factory=OverheadTable)
    capacitor: Annotated[tuple[CapacitorTable, ...], Field(min_length=1), AfterValidator(_distinct)]
    switch: Annotated[tuple[SwitchTable, ...], Field(min_length=1), AfterValidator(_distinct)]
