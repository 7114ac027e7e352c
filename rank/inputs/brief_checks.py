"""What makes no sense in a brief: values out of range, and values that contradict each other."""

from __future__ import annotations

import math
from fractions import Fraction
from typing import TYPE_CHECKING

from capmuster.rank.inputs.conditions import profile_faults
from capmuster.rank.inputs.faults import Fault
from capmuster.rank.inputs.quantity import format_quantity

if TYPE_CHECKING:
    from collections.abc import Iterator

    from capmuster.rank.inputs.brief import Brief
    from capmuster.rank.inputs.tomlplace import Path

_HALF = 0.5


def exact_of(value: float) -> Fraction:
    """Fraction of the shortest decimal text of a float: what was typed, up to 15 digits."""
    return Fraction(repr(float(value)))


def brief_faults(brief: Brief) -> Iterator[Fault]:
    """Find what is wrong with a brief; relations only where the values they relate are sound."""
    unsound = list(_unsound_values(brief))
    yield from unsound
    yield from _area_faults(brief)
    yield from _objective_faults(brief)
    yield from _range_faults(brief)
    if not unsound:
        yield from profile_faults(brief.profile, brief.current, brief.input_minimum, brief.input_maximum)
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
        ("design", "frequency_minimum"): brief.frequency_minimum,
        ("design", "copies"): brief.copies,
        ("load", "least"): brief.current_least,
        ("output", "ripple"): brief.output_ripple,
        ("input", "ripple"): brief.input_ripple,
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


def _objective_faults(brief: Brief) -> Iterator[Fault]:
    """Find what an objective lacks, or what it has no use for."""
    path = ("design", "objective")
    if brief.objective == "least-loss" and brief.area is None and brief.silicon_area is None:
        problem = "least-loss has no area budget, and loss only falls with area"
        yield Fault(path, problem, "area, or silicon_area and capacitor_area")
    if brief.objective in ("least-area", "power-density") and brief.efficiency_floor is None:
        yield Fault(path, f"{brief.objective} needs an efficiency floor", "design.efficiency")
    if brief.objective == "power-density" and brief.current_least is None:
        yield Fault(path, "power-density needs the range of the load", "load.least, the lowest load current")
    if brief.profile and brief.objective != "least-loss":
        yield Fault(("load", "profile"), f"does not belong to {brief.objective}", 'objective = "least-loss"')
    if not brief.counts_losses:
        if brief.tolerance is not None:
            yield Fault(
                ("tolerance",), "does not belong to conduction-area", "an objective that counts losses"
            )
        accepted = "an objective that counts losses"
        if brief.frequency_minimum is not None:
            yield Fault(("design", "frequency_minimum"), "does not belong to conduction-area", accepted)
        if brief.duty != _HALF:
            yield Fault(("design", "duty"), "does not belong to conduction-area", accepted)


def _range_faults(brief: Brief) -> Iterator[Fault]:
    """Find bounds that are the wrong way round."""
    if brief.duty is not None and not 0 < brief.duty < 1:
        yield Fault(
            ("design", "duty"), f"value {brief.duty:g} is not allowed", '"free", or between 0 and 100 %'
        )
    for path, low, name, high in (
        (("design", "frequency_minimum"), brief.frequency_minimum, "the highest frequency", brief.frequency),
        (("load", "least"), brief.current_least, "load.current", brief.current),
    ):
        if low is not None and low > high:
            yield Fault(path, f"value {low:g} is above {name}, {high:g}", f"at most {name}")
    most = brief.output_most
    if most is not None and not (math.isfinite(most) and most * brief.sign >= abs(brief.required)):
        problem = f"value {format_quantity(most, 'V', 6)} is closer to 0 than the least output"
        yield Fault(("output", "most"), problem, "an output beyond output.least")


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
    bound = exact_of(brief.input_minimum) / exact_of(brief.input_maximum)
    floor = format_quantity(brief.efficiency_floor, "1")
    if exact_of(brief.efficiency_floor) >= bound:
        yield Fault(
            ("design", "efficiency"),
            f"no ratio can hold the output at the lowest input and reach {floor} at the highest",
            f"below input.minimum / input.maximum = {format_quantity(float(bound), '1')}",
        )
