"""The vertical axis: heights for the potentials of both phases, on one scale wherever one can be read.

A drawing needs room between two neighbouring rails of a phase for a capacitor with its label. Where
potentials lie so unevenly that one linear scale would make the drawing too tall, the steps that would come
out too small are drawn larger than scale, and reported, so that the axis can show it.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence
    from fractions import Fraction

_BISECTIONS = 60


@dataclass(frozen=True, slots=True)
class Scale:
    """Heights above the lowest potential [px].

    Attributes
    ----------
    levels
        All potentials of both phases, ascending, per volt of input.
    heights
        Their heights [px].
    per_volt
        Height of one volt per volt of input, where the scale holds [px].
    """

    levels: tuple[Fraction, ...]
    heights: tuple[float, ...]
    per_volt: float

    def height(self, level: Fraction) -> float:
        """Height of a potential [px]."""
        return self.heights[self.levels.index(level)]

    @property
    def total(self) -> float:
        """Height of the highest potential [px]."""
        return self.heights[-1]

    def stretched(self, low: Fraction, high: Fraction) -> bool:
        """Whether the step between two potentials is drawn larger than scale."""
        true = self.per_volt * float(high - low)
        return self.height(high) - self.height(low) > true * (1 + 1e-6) + 1e-6


def fit_scale(rooms: Sequence[Mapping[Fraction, float]], least: float, most: float) -> Scale:
    """Find heights that leave every step the room that it needs.

    Parameters
    ----------
    rooms
        For each phase its potentials, and the room wanted above each one, up to the next of that phase [px].
    least, most
        Height of the whole axis [px]: at least, and at most unless the rooms alone take more.
    """
    levels = tuple(sorted({level for room in rooms for level in room}))
    span = float(levels[-1] - levels[0])
    needed = max(room[low] / float(high - low) for room in rooms for low, high in pairwise(sorted(room)))
    if needed * span <= most:
        per_volt = max(needed, least / span)
        return Scale(levels, tuple(per_volt * float(level - levels[0]) for level in levels), per_volt)
    limit = max(most, _heights(levels, rooms, 0.0)[-1] * 1.25)
    low, high = 0.0, needed
    for _ in range(_BISECTIONS):
        middle = 0.5 * (low + high)
        if _heights(levels, rooms, middle)[-1] <= limit:
            low = middle
        else:
            high = middle
    return Scale(levels, _heights(levels, rooms, low), low)


def _heights(
    levels: Sequence[Fraction], rooms: Sequence[Mapping[Fraction, float]], per_volt: float
) -> tuple[float, ...]:
    """Least heights under which every step is at least to scale and has its room."""
    heights: list[float] = []
    before: list[Fraction | None] = [None] * len(rooms)
    at: dict[Fraction, float] = {}
    for k, level in enumerate(levels):
        height = heights[-1] + per_volt * float(level - levels[k - 1]) if heights else 0.0
        for phase, room in enumerate(rooms):
            if level in room:
                lower = before[phase]
                if lower is not None:
                    height = max(height, at[lower] + room[lower])
                before[phase] = level
        heights.append(height)
        at[level] = height
    return tuple(heights)
