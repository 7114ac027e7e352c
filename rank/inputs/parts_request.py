"""What is asked of the discrete parts of a converter: budgets, targets, derating, temperature."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Final, Literal

from capmuster.enumerate.errors import CapmusterError
from capmuster.rank.inputs.faults import Fault, FaultsError, raise_faults
from capmuster.rank.inputs.parts import Stock, load_stock

if TYPE_CHECKING:
    from collections.abc import Iterator
    from pathlib import Path

    from capmuster.rank.inputs.parts_section import PartsSection
    from capmuster.rank.inputs.tomlplace import Places

Aim = Literal["loss", "footprint", "price"]
"""What is made least."""

MOST_PARALLEL: Final = 1000
MOST_SERIES: Final = 20
TEMPERATURES: Final = (-55.0, 200.0)
"""Junction temperatures that silicon parts are made for [degC], with room: common practice."""


@dataclass(frozen=True, slots=True)
class PartsRequest:
    """How parts are chosen.

    Attributes
    ----------
    stock
        What they are chosen from.
    least
        What is made least. Loss needs a budget; footprint and price need a target of loss or efficiency.
    footprint
        Most footprint of all parts, drivers included [mm2], or None.
    price
        Most price of all parts, drivers included [EUR], or None.
    loss
        Most loss at the operating input [W], or None.
    efficiency
        Least efficiency at the operating input [1], or None.
    capacitor_derating, switch_derating
        Share of its rating that a part may see [1]; None for that of the brief's technology.
    temperature
        Junction temperature of the MOSFETs [degC].
    drive
        Highest gate drive voltage that is there [V], or None for any.
    capacitance
        "least": the lower end of the tolerance; "nominal": the nominal value. Bias counts in both.
    parallel_capacitors, parallel_switches
        Most parts in parallel in one element [1].
    series
        Most parts in series in one element [1]: more than 1 needs parts around it that share the voltage.
    driver_footprint, driver_price
        What each switch takes beside its parts [mm2], [EUR]: one gate driver drives the parts in parallel.
    frequencies
        Switching frequencies to choose from [Hz]; empty for the brief's, or five over its range.

    Raises
    ------
    CapmusterError
        If a value is not allowed or what is asked for has no end: a line for each fault.
    """

    stock: Stock
    least: Aim = "loss"
    footprint: float | None = None
    price: float | None = None
    loss: float | None = None
    efficiency: float | None = None
    capacitor_derating: float | None = None
    switch_derating: float | None = None
    temperature: float = 85.0
    drive: float | None = None
    capacitance: Literal["least", "nominal"] = "least"
    parallel_capacitors: int = 16
    parallel_switches: int = 4
    series: int = 1
    driver_footprint: float = 0.0
    driver_price: float = 0.0
    frequencies: tuple[float, ...] = ()

    def __post_init__(self) -> None:
        """Check the values, and against each other."""
        raise_faults(_faults(self))

    def content(self) -> dict[str, object]:
        """Plain content for fingerprints: all values, and the fingerprint of the stock."""
        names = (name for name in self.__slots__ if name != "stock")
        return {"stock": self.stock.fingerprint, **{name: getattr(self, name) for name in names}}


def request_of(section: PartsSection, beside: Path, places: Places) -> PartsRequest:
    """Make the request that the ``[parts]`` table of a brief holds, with its catalogs loaded.

    Parameters
    ----------
    section
        The table.
    beside
        Folder that relative paths of catalogs start from.
    places
        Lines of the brief, for messages.

    Raises
    ------
    CapmusterError
        If a catalog is unknown or not valid, or a value is not allowed.
    """
    from capmuster.rank.inputs.parts_file import locate_parts  # noqa: PLC0415 -- for those who read files

    for field in ("capacitors", "switches"):
        try:
            locate_parts(getattr(section, field), beside)
        except CapmusterError as error:
            raise CapmusterError(
                f"parts.{field}: {error.problem}",
                accepted=error.accepted,
                place=places.place(("parts", field)),
            ) from None
    stock = load_stock(section.capacitors, section.switches, beside=beside)
    try:
        return PartsRequest(stock=stock, **section.model_dump(exclude={"capacitors", "switches"}))
    except FaultsError as error:
        raise FaultsError(error.faults, places) from None


_LIMITS: Final = (
    # fields, least, whether it is allowed itself, most, what is accepted
    (("footprint", "price", "loss", "drive"), 0, False, 1e30, "a finite value above 0"),
    (("efficiency",), 0, False, 1 - 1e-12, "above 0, below 1"),
    (("capacitor_derating", "switch_derating"), 0, False, 1, "above 0, 1 at most"),
    (("driver_footprint", "driver_price"), 0, True, 1e30, "a finite value, 0 or above"),
    (
        ("parallel_capacitors", "parallel_switches"),
        1,
        True,
        MOST_PARALLEL,
        f"a whole number from 1 to {MOST_PARALLEL}",
    ),
    (("series",), 1, True, MOST_SERIES, f"a whole number from 1 to {MOST_SERIES}"),
    (("temperature",), *TEMPERATURES[:1], True, *TEMPERATURES[1:], "-55 degC to 200 degC"),
)


def _faults(request: PartsRequest) -> list[Fault]:
    """Find what is wrong with the values; how they go together only where they are sound."""
    return list(_unsound(request)) or list(_contradictions(request))


def _unsound(request: PartsRequest) -> Iterator[Fault]:
    for names, least, closed, most, accepted in _LIMITS:
        for name in names:
            value = getattr(request, name)
            if value is not None and not (least < value <= most or (closed and value == least)):
                yield Fault(("parts", name), f"value {value:g} is not allowed", accepted)
    for position, frequency in enumerate(request.frequencies):
        if not 0 < frequency < math.inf:
            path = ("parts", "frequencies", position)
            yield Fault(path, f"value {frequency:g} is not allowed", "a finite value above 0")


def _contradictions(request: PartsRequest) -> Iterator[Fault]:
    given = [name for name in ("loss", "efficiency") if getattr(request, name) is not None]
    if len(given) > 1:
        yield Fault(("parts", "loss"), "loss and efficiency are both given", "one target, or none")
    elif given and request.least == "loss":
        accepted = "least = footprint or price, or no target"
        yield Fault(("parts", given[0]), "is a target, and loss is made least", accepted)
