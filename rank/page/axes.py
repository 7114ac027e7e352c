"""Axes of plots: round ticks, linear or logarithmic, and the mapping to px."""

from __future__ import annotations

import math
from dataclasses import dataclass

_PREFIXES = {-15: "f", -12: "p", -9: "n", -6: "µ", -3: "m", 0: "", 3: "k", 6: "M", 9: "G", 12: "T"}
_MOST_LOG_TICKS = 7
_NEARLY_ONE = 0.005


@dataclass(frozen=True, slots=True)
class Axis:
    """A range of values over a range of px.

    Attributes
    ----------
    low, high
        Values at its ends.
    start, end
        Positions of the ends [px]; `end` may be the lesser.
    ticks
        Values that are marked.
    logarithmic
        Whether equal factors are equally long.
    """

    low: float
    high: float
    start: float
    end: float
    ticks: tuple[float, ...]
    logarithmic: bool = False

    def __call__(self, value: float) -> float:
        """Position of a value [px]."""
        if self.logarithmic:
            share = math.log(value / self.low) / math.log(self.high / self.low)
        else:
            share = (value - self.low) / (self.high - self.low)
        return self.start + share * (self.end - self.start)


def linear_axis(low: float, high: float, start: float, end: float, most_ticks: int = 7) -> Axis:
    """Fit a linear axis around values, with ticks at its ends; values that are nearly one get room around."""
    if high - low <= _NEARLY_ONE * max(abs(low), abs(high)):
        margin = 0.02 * max(abs(low), abs(high)) or 1.0
        low, high = low - margin, high + margin
    step = _round_step((high - low) / (most_ticks - 1))
    first, last = math.floor(low / step + 1e-9), math.ceil(high / step - 1e-9)
    ticks = tuple(float(f"{k * step:.12g}") for k in range(first, last + 1))
    return Axis(ticks[0], ticks[-1], start, end, ticks)


def log_axis(low: float, high: float, start: float, end: float) -> Axis:
    """Fit a logarithmic axis around positive values, with ends at 1, 2 or 5 times a power of ten."""
    steps = [
        (m, float(f"{m}e{k}"))
        for k in range(math.floor(math.log10(low)) - 1, math.ceil(math.log10(high)) + 2)
        for m in (1, 2, 5)
    ]
    first = max(k for k, (_, value) in enumerate(steps) if value <= low * (1 + 1e-9))
    last = min(k for k, (_, value) in enumerate(steps) if value >= high * (1 - 1e-9))
    if first == last:
        first, last = first - 1, last + 1
    chosen = steps[first : last + 1]
    if len(chosen) > _MOST_LOG_TICKS:
        ticks = tuple(value for m, value in chosen if m == 1)
    else:
        ticks = tuple(value for _, value in chosen)
    return Axis(chosen[0][1], chosen[-1][1], start, end, ticks, logarithmic=True)


def _round_step(least: float) -> float:
    """Return the least of 1, 2, 5 times a power of ten that is not below a value."""
    power = 10.0 ** math.floor(math.log10(least))
    return next(m * power for m in (1.0, 2.0, 5.0, 10.0) if m * power >= least * (1 - 1e-9))


def engineering(value: float, unit: str) -> str:
    """Write a value with up to three figures and a prefix of the SI: ``20 kHz``."""
    rounded = float(f"{value:.3g}")
    if rounded == 0:
        return f"0 {unit}"
    exponent = min(max(3 * math.floor(math.log10(abs(rounded)) / 3 + 1e-9), -15), 12)
    return f"{rounded / 10.0**exponent:.3g} {_PREFIXES[exponent]}{unit}"
