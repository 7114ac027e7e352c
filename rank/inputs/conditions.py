"""What a converter lives through: a load profile, and how far its parts may be off."""

from __future__ import annotations

import math
from dataclasses import dataclass, fields
from typing import TYPE_CHECKING

from capmuster.rank.inputs.faults import Fault, raise_faults

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence

ROOM = 27.0
"""Temperature that a technology's figures hold at [degC]."""
_ROUNDING = 1e-9


@dataclass(frozen=True, slots=True)
class LoadPoint:
    """A share of the time.

    Attributes
    ----------
    share
        Share of the time [1].
    current
        Load current [A]; 0 is sleep: the clock stands still, leakage and the controller's sleep power go on.
    volts
        Input voltage [V], or None for the nominal one.
    """

    share: float
    current: float
    volts: float | None = None

    @property
    def asleep(self) -> bool:
        """Whether nothing switches."""
        return self.current == 0


def profile_faults(points: Sequence[LoadPoint], most: float, low: float, high: float) -> Iterator[Fault]:
    """Find what is wrong with a load profile.

    Parameters
    ----------
    points
        The profile.
    most
        Highest load current of the brief [A].
    low, high
        Range of the input voltage [V].
    """
    for position, point in enumerate(points):
        path = ("load", "profile", position)
        if not 0 < point.share <= 1:
            yield Fault(
                (*path, "share"), f"value {point.share:g} is not allowed", "a share above 0, at most 100 %"
            )
        if not 0 <= point.current <= most * (1 + _ROUNDING):
            yield Fault(
                (*path, "current"), f"{point.current:g} A is outside 0 to {most:g} A", "at most load.current"
            )
        if point.volts is not None and not low <= point.volts <= high:
            yield Fault(
                (*path, "input"), f"{point.volts:g} V is outside {low:g} to {high:g} V", "the input range"
            )
    if points and not any(point.current > 0 for point in points):
        yield Fault(("load", "profile"), "the load sleeps all the time", "a point with a current")
    total = sum(point.share for point in points)
    if points and not math.isclose(total, 1.0, rel_tol=1e-6):
        yield Fault(("load", "profile"), f"the shares add up to {100 * total:.6g} %", "100 %")


@dataclass(frozen=True, slots=True)
class Tolerance:
    """How far things may be off what they are designed for.

    Spreads are half-widths, relative: a value lies within ``(1 - spread)`` to ``(1 + spread)`` of its nominal
    one. In a random trial a spread is three standard deviations of a normal distribution, cut off there.

    Attributes
    ----------
    resistance
        On-resistance of all switches together [1].
    density
        Capacitance per area of all capacitors together, their plates included [1].
    charge
        Gate and output charge of all switches together [1].
    capacitance
        Capacitance of each capacitor for itself [1].
    mismatch
        On-resistance of each switch for itself [1].
    load
        Load current [1].
    temperature_low, temperature_high
        Range of the junction temperature [degC], each temperature as likely as the next.
    resistance_drift
        Relative change of on-resistance per kelvin, counted from 27 degC [1/K].
    leakage_doubling
        Rise of temperature that doubles leakage [K], counted from 27 degC.
    trials
        Number of random trials [1].
    seed
        Seed of the random numbers.

    Raises
    ------
    CapmusterError
        If a value is out of its range.
    """

    resistance: float = 0.0
    density: float = 0.0
    charge: float = 0.0
    capacitance: float = 0.0
    mismatch: float = 0.0
    load: float = 0.0
    temperature_low: float = 27.0
    temperature_high: float = 27.0
    resistance_drift: float = 0.004
    leakage_doubling: float = 10.0
    trials: int = 1000
    seed: int = 1

    def __post_init__(self) -> None:
        """Check the ranges."""
        raise_faults(self._faults())

    def _faults(self) -> Iterator[Fault]:
        for one in fields(self):
            if not math.isfinite(getattr(self, one.name)):
                yield Fault(("tolerance", one.name), "is not finite", "a number")
        for name in ("resistance", "density", "charge", "capacitance", "mismatch", "load"):
            value = getattr(self, name)
            if not 0 <= value < 1:
                yield Fault(("tolerance", name), f"value {value:g} is not allowed", "0 to below 100 %")
        for first, second in (("resistance", "mismatch"), ("density", "capacitance")):
            if getattr(self, first) + getattr(self, second) >= 1:
                yield Fault(
                    ("tolerance", second), f"leaves nothing beside {first}", "both together below 100 %"
                )
        for name, least in (("trials", 20), ("seed", 0)):
            if getattr(self, name) < least:
                yield Fault(
                    ("tolerance", name), f"value {getattr(self, name)} is too small", f"{least} or more"
                )
        yield from self._temperature_faults()

    def _temperature_faults(self) -> Iterator[Fault]:
        low, high = self.temperature_low, self.temperature_high
        if low > high:
            problem = f"{low:g} degC is above temperature_high, {high:g} degC"
            yield Fault(("tolerance", "temperature_low"), problem, "temperature_low <= temperature_high")
        if self.leakage_doubling <= 0:
            yield Fault(("tolerance", "leakage_doubling"), "is not above 0 K", "a rise above 0")
        for name, value in (("temperature_low", low), ("temperature_high", high)):
            if 1 + self.resistance_drift * (value - ROOM) <= 0:
                yield Fault(("tolerance", name), "leaves no on-resistance", "a smaller resistance_drift")
