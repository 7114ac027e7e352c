"""What the designer asks for: the rail, where to search, and what the converter may cost."""

from __future__ import annotations

import math
from dataclasses import dataclass, fields
from fractions import Fraction
from typing import TYPE_CHECKING, Literal

import numpy as np

from capmuster.enumerate.errors import CapmusterError
from capmuster.rank.faults import Fault, FaultsError, raise_faults
from capmuster.rank.quantity import format_quantity
from capmuster.rank.technology import Technology, fingerprint, load_technology

if TYPE_CHECKING:
    from collections.abc import Iterator
    from pathlib import Path as FilePath

    from numpy.typing import ArrayLike, NDArray

    from capmuster.rank.tomlplace import Path

Use = Literal["fixed-ratio", "regulated"]

_ROUNDING = 1e-12  # relative: a droop budget this small is no more than the rounding of its two terms


@dataclass(frozen=True, slots=True)
class Brief:
    """One converter to be chosen.

    A brief is checked when it is made, by hand as from a file.

    Attributes
    ----------
    title
        One line for people.
    technology
        What it is built from.
    input_minimum, input_nominal, input_maximum
        Input voltage [V].
    use
        "fixed-ratio": the output follows the input and droops with the load; "regulated": it is held.
    required
        The least acceptable output in fixed-ratio use, the held one in regulated use [V]; negative for an
        inverting converter.
    current
        Load current [A].
    frequency
        Switching frequency [Hz].
    ratios
        Ratios V_out/V_in to search, or None for all that hold the output.
    most_capacitors
        Most flying capacitors [1].
    most_switches
        Most switches [1], or None for any number.
    area
        Most area for silicon and capacitors together [mm2], or None if it is free.
    silicon_area, capacitor_area
        Most area for switches and for capacitors apart [mm2]: both, or None if `area` holds or it is free.
    efficiency_floor
        Least efficiency at the worst input of the range [1], or None.
    name
        The name it was loaded by: the file's name without suffix.

    Raises
    ------
    CapmusterError
        If the values contradict each other or ask for what no converter can do: a line for each fault.
    """

    title: str
    technology: Technology
    input_minimum: float
    input_nominal: float
    input_maximum: float
    use: Use
    required: float
    current: float
    frequency: float
    ratios: tuple[Fraction, ...] | None = None
    most_capacitors: int = 4
    most_switches: int | None = None
    area: float | None = None
    silicon_area: float | None = None
    capacitor_area: float | None = None
    efficiency_floor: float | None = None
    name: str = ""

    def __post_init__(self) -> None:
        """Check the values against each other."""
        raise_faults(_faults(self))

    @property
    def sign(self) -> int:
        """1, or -1 for an inverting converter."""
        return 1 if self.required > 0 else -1

    @property
    def least_ratio(self) -> Fraction:
        """``|V_required| / V_in,min``, exact; a ratio must be above it in magnitude."""
        return _exact(abs(self.required)) / _exact(self.input_minimum)

    @property
    def fingerprint(self) -> str:
        """Twelve hexadecimal digits that change with any value, but not with the file's name or layout."""
        content = {one.name: getattr(self, one.name) for one in fields(self) if one.name != "name"}
        content["technology"] = self.technology.fingerprint
        content["ratios"] = None if self.ratios is None else [str(ratio) for ratio in self.ratios]
        return fingerprint(content)

    def holds(self, ratio: Fraction) -> bool:
        """Whether a converter of this ratio has any droop budget, decided exactly."""
        return ratio * self.sign > self.least_ratio

    def r_max(self, ratio: ArrayLike) -> NDArray[np.float64]:
        """Return the highest output impedance that meets the output at the least input.

        Parameters
        ----------
        ratio
            Ratios M = V_out/V_in [1]; any shape.

        Returns
        -------
        numpy.ndarray
            ``(|M| V_in,min - |V_required|) / I`` [ohm], in the shape of `ratio`. Where a ratio cannot hold
            the output it is 0 or negative; a ratio of the wrong sign counts as -|M|.
        """
        signed = np.asarray(ratio, dtype=np.float64) * self.sign
        budget = signed * self.input_minimum - abs(self.required)
        budget = np.where(np.abs(budget) <= _ROUNDING * abs(self.required), 0.0, budget)
        return np.asarray(budget / self.current)


def load_brief(name_or_path: str | FilePath) -> Brief:
    """Load a brief.

    Parameters
    ----------
    name_or_path
        Name of a shipped brief, or path of a TOML file (with its suffix).

    Returns
    -------
    Brief
        The brief, in SI units with areas in mm2.

    Raises
    ------
    CapmusterError
        If there is no such brief, or the file holds anything but a valid one: a line for each fault.
    """
    # pydantic is for those who read files.
    from capmuster.rank.brief_file import BriefFile  # noqa: PLC0415
    from capmuster.rank.tomlfile import load_model, locate  # noqa: PLC0415

    path = locate(name_or_path, "briefs", "brief", None)
    content, places = load_model(path, BriefFile, "brief")
    try:
        technology = load_technology(content.technology, beside=path.parent)
    except FaultsError:
        raise  # it names the technology's own file and lines
    except CapmusterError as error:
        place = error.place or places.place(("technology",))
        raise CapmusterError(f"technology: {error.problem}", accepted=error.accepted, place=place) from None
    try:
        return Brief(
            title=content.title,
            technology=technology,
            input_minimum=content.input.minimum,
            input_nominal=content.input.nominal,
            input_maximum=content.input.maximum,
            use=content.output.use,
            required=content.output.required,
            current=content.load.current,
            frequency=content.design.frequency,
            ratios=content.search.ratios,
            most_capacitors=content.search.capacitors,
            most_switches=content.search.switches,
            area=content.design.area,
            silicon_area=content.design.silicon_area,
            capacitor_area=content.design.capacitor_area,
            efficiency_floor=content.design.efficiency,
            name=path.stem,
        )
    except FaultsError as error:
        raise FaultsError(error.faults, places) from None


def _exact(value: float) -> Fraction:
    """Fraction of the shortest decimal text of a float: what was typed, up to 15 digits."""
    return Fraction(repr(float(value)))


def _faults(brief: Brief) -> Iterator[Fault]:
    """Find what is wrong with a brief; relations only where the values they relate are sound."""
    unsound = list(_unsound_values(brief))
    yield from unsound
    yield from _area_faults(brief)
    if not unsound:
        yield from _input_faults(brief)
        yield from _ratio_faults(brief)
        yield from _floor_faults(brief)


def _unsound_values(brief: Brief) -> Iterator[Fault]:
    above_zero = {
        ("input", "minimum"): brief.input_minimum,
        ("input", "nominal"): brief.input_nominal,
        ("input", "maximum"): brief.input_maximum,
        ("load", "current"): brief.current,
        ("search", "capacitors"): brief.most_capacitors,
        ("search", "switches"): brief.most_switches,
        ("design", "frequency"): brief.frequency,
        ("design", "area"): brief.area,
        ("design", "silicon_area"): brief.silicon_area,
        ("design", "capacitor_area"): brief.capacitor_area,
        ("design", "efficiency"): brief.efficiency_floor,
    }
    for path, value in above_zero.items():
        if value is not None and not (value > 0 and math.isfinite(value)):
            yield Fault(path, f"value {value} is not allowed", "a finite value above 0")
    if not (brief.required and math.isfinite(brief.required)):
        problem = f"value {format_quantity(brief.required, 'V')} is not allowed"
        yield Fault(_required(brief), problem, "a voltage other than 0")
    if brief.efficiency_floor is not None and brief.efficiency_floor >= 1:
        problem = f"value {format_quantity(brief.efficiency_floor, '1')} is not allowed"
        yield Fault(("design", "efficiency"), problem, "below 100 %")


def _required(brief: Brief) -> Path:
    return ("output", "held" if brief.use == "regulated" else "least")


def _area_faults(brief: Brief) -> Iterator[Fault]:
    apart = {"silicon_area": brief.silicon_area, "capacitor_area": brief.capacitor_area}
    given = [name for name, value in apart.items() if value is not None]
    accepted = "area alone, or silicon_area and capacitor_area, or none of them"
    if brief.area is not None and given:
        yield Fault(("design", "area"), f"area and {given[0]} are both given", accepted)
    elif len(given) == 1:
        yield Fault(("design", given[0]), f"{given[0]} is given without its counterpart", accepted)


def _input_faults(brief: Brief) -> Iterator[Fault]:
    low, middle, high = brief.input_minimum, brief.input_nominal, brief.input_maximum
    if low > high:
        problem = (
            f"value {format_quantity(low, 'V', 6)} is above the maximum, {format_quantity(high, 'V', 6)}"
        )
        yield Fault(("input", "minimum"), problem, "minimum <= nominal <= maximum")
    elif not low <= middle <= high:
        span = f"{format_quantity(low, 'V', 6)} to {format_quantity(high, 'V', 6)}"
        yield Fault(("input", "nominal"), f"value {format_quantity(middle, 'V', 6)} is outside {span}", span)


def _ratio_faults(brief: Brief) -> Iterator[Fault]:
    """Find ratios that cannot hold the output, or an output that no ratio holds."""
    least = brief.least_ratio * brief.sign
    beyond = f"{'above' if least > 0 else 'below'} {least} ({float(least):.4g})"
    needed = f"{format_quantity(brief.required, 'V', 6)} from {format_quantity(brief.input_minimum, 'V', 6)}"
    if brief.ratios is None:
        largest = _largest_ratio(brief.most_capacitors, brief.sign)
        if brief.least_ratio >= abs(largest):
            yield Fault(
                _required(brief),
                f"no ratio can hold {needed}: it takes one {beyond}, and {brief.most_capacitors} capacitors "
                f"reach {largest} at most",
                "an output closer to 0, a higher input.minimum, or more search.capacitors",
            )
        return
    if not brief.ratios:
        yield Fault(("search", "ratios"), "no ratio is given", '"any", or a list such as ["1/2", "2/5"]')
    for position, ratio in enumerate(brief.ratios):
        path = ("search", "ratios", position)
        if ratio in brief.ratios[:position]:
            yield Fault(path, f"ratio {ratio} is listed twice", "each ratio once")
        elif not brief.holds(ratio):
            yield Fault(path, f"ratio {ratio} cannot hold {needed}", f"ratios {beyond}")


def _largest_ratio(capacitors: int, sign: int) -> int:
    """Ratio of the largest magnitude that so many flying capacitors reach, or a bound on it.

    Makowski and Maksimovic, "Performance limits of switched-capacitor DC-DC converters", IEEE PESC 1995: the
    (n + 1)-th Fibonacci number of 1, 2, 3, 5, 8, ... An inverting converter reaches one less for n <= 5,
    where every converter has been listed.
    """
    listed = 5
    previous, number = 1, 1
    for _ in range(capacitors):
        previous, number = number, previous + number
    return number if sign > 0 else -(number - 1 if capacitors <= listed else number)


def _floor_faults(brief: Brief) -> Iterator[Fault]:
    """Find a floor above ``V_in,min / V_in,max``, the bound for one ratio over the whole input range."""
    if brief.use != "regulated" or brief.efficiency_floor is None:
        return
    bound = _exact(brief.input_minimum) / _exact(brief.input_maximum)
    floor = format_quantity(brief.efficiency_floor, "1")
    if _exact(brief.efficiency_floor) >= bound:
        yield Fault(
            ("design", "efficiency"),
            f"no ratio can hold the output at the lowest input and reach {floor} at the highest",
            f"below input.minimum / input.maximum = {format_quantity(float(bound), '1')}",
        )
