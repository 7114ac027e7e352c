"""``[parts]`` of a brief file: what the discrete parts are chosen from, and how."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import BeforeValidator

from capmuster.enumerate.errors import CapmusterError
from capmuster.rank.inputs.faults import Fault, raise_faults
from capmuster.rank.inputs.parts_request import MOST_PARALLEL, MOST_SERIES, TEMPERATURES
from capmuster.rank.inputs.quantity import parse_quantity, show_value
from capmuster.rank.inputs.tomlfile import Line, Section, choice, quantity, whole

Area = Annotated[float | None, quantity("mm2")]
Share = Annotated[float | None, quantity("1", most=1.0)]


def _frequencies(value: object) -> tuple[float, ...]:
    if not isinstance(value, list) or not value:
        raise CapmusterError(
            f"value {show_value(value)} is not allowed", accepted='a list such as ["60 kHz", "120 kHz"]'
        )
    frequencies, faults = [], []
    for position, one in enumerate(value):
        try:
            frequencies.append(float(parse_quantity(one, "Hz")))
        except CapmusterError as error:
            faults.append(Fault((position,), error.problem, error.accepted))
    raise_faults(faults)
    return tuple(frequencies)


class PartsSection(Section):
    """``[parts]``; the fields are those of `capmuster.rank.inputs.parts_request.PartsRequest`."""

    capacitors: Line = "board-ceramics"
    switches: Line = "board-mosfets"
    least: Annotated[Literal["loss", "footprint", "price"], choice("loss", "footprint", "price")] = "loss"
    footprint: Area = None
    price: Annotated[float | None, quantity("EUR")] = None
    loss: Annotated[float | None, quantity("W")] = None
    efficiency: Share = None
    capacitor_derating: Share = None
    switch_derating: Share = None
    temperature: Annotated[float, quantity("degC", "any", least=TEMPERATURES[0], most=TEMPERATURES[1])] = 85.0
    drive: Annotated[float | None, quantity("V")] = None
    capacitance: Annotated[Literal["least", "nominal"], choice("least", "nominal")] = "least"
    parallel_capacitors: Annotated[int, whole(1, MOST_PARALLEL)] = 16
    parallel_switches: Annotated[int, whole(1, MOST_PARALLEL)] = 4
    series: Annotated[int, whole(1, MOST_SERIES)] = 1
    driver_footprint: Annotated[float, quantity("mm2", "not negative")] = 0.0
    driver_price: Annotated[float, quantity("EUR", "not negative")] = 0.0
    frequencies: Annotated[tuple[float, ...], BeforeValidator(_frequencies)] = ()
