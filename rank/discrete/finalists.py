"""The best candidates of a brief when they are built from parts, and what is proven about them."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

from capmuster.rank.inputs.cautions import cautions
from capmuster.rank.inputs.quantity import format_quantity

if TYPE_CHECKING:
    from capmuster.enumerate.wiring import Converter
    from capmuster.rank.discrete.blends import Blend
    from capmuster.rank.discrete.design import Condition, Filling
    from capmuster.rank.inputs.brief import Brief
    from capmuster.rank.inputs.parts_request import PartsRequest


@dataclass(frozen=True, slots=True)
class Finalist:
    """A converter with the best parts for it.

    Attributes
    ----------
    converter
        The converter.
    area_place
        Its place by the least area for conduction in continuous sizing, counted from 1.
    frequency
        Switching frequency [Hz], the best of those asked for.
    fillings
        Its capacitors and switches with their parts.
    operating
        What it does at the input where losses count.
    exact_impedance
        Its output impedance there without any blend, wiring included [ohm].
    conditions
        What it does at the least, nominal and highest input; where frequency holds the output, at that
        frequency.
    objective, bound, relaxed
        What is made least [W, mm2 or EUR], a value that no choice of parts goes below, proven by the integer
        solver, and the continuous bound.
    proven
        Whether the integer solver proved that no choice is better at any of the frequencies.
    """

    converter: Converter
    area_place: int
    frequency: float
    fillings: tuple[Filling, ...]
    operating: Condition
    exact_impedance: float
    conditions: tuple[Condition, Condition, Condition]
    objective: float
    bound: float
    relaxed: float
    proven: bool

    @property
    def gap(self) -> float:
        """Relative distance of the bound [1]."""
        return (self.objective - self.bound) / self.objective if self.objective else 0.0

    @property
    def footprint(self) -> float:
        """Footprint of all parts and drivers [mm2]."""
        return math.fsum(one.footprint for one in self.fillings)

    @property
    def price(self) -> float:
        """Price of all parts and drivers [EUR]."""
        return math.fsum(one.price for one in self.fillings)

    @property
    def parts(self) -> int:
        """Number of parts [1]."""
        return sum(one.number for one in self.fillings)

    @property
    def highest_stress(self) -> float:
        """Highest voltage over derated rating of all elements [1]."""
        return max(one.stress for one in self.fillings)


@dataclass(frozen=True, slots=True)
class PartsShortlist:
    """The finalists of a brief and what stands behind them.

    Attributes
    ----------
    brief
        What is asked for.
    request
        What is asked of the parts, resolved.
    blend
        How R_SSL and R_FSL are joined.
    finalists
        Best first.
    candidates
        Converters that can hold the output.
    searched
        For how many of these the best parts were searched; every other one's bound is above the last place.
    exact
        Whether every one of these searches was exhaustive.
    left_out
        How many were left out, by reason.
    """

    brief: Brief
    request: PartsRequest
    blend: Blend
    finalists: tuple[Finalist, ...]
    candidates: int
    searched: int
    exact: bool
    left_out: dict[str, int]

    def __len__(self) -> int:
        """Return the number of finalists."""
        return len(self.finalists)

    @property
    def certificate(self) -> str:
        """What is proven, in one sentence."""
        if not self.finalists:
            return "No candidate can be built from the stock within the limits."
        proven = all(one.proven for one in self.finalists)
        gap = max(one.gap for one in self.finalists)
        parts = (
            f"The parts of every finalist are proven best{f', to a relative gap of {gap:.0e}' if gap else ''}"
            if proven
            else f"The parts of the finalists are within {gap:.1e} of the best; not all are proven best"
        )
        if not self.exact:
            return f"{parts}. Some searches were cut short: another candidate might be better."
        others = f"No other of all {self.candidates} candidates"
        return f"{parts}. {others} has less {self.request.least} than place {len(self.finalists)}."

    @property
    def cautions(self) -> list[str]:
        """Dangers and limits that a reader must know, in words."""
        found = cautions(self.brief)
        floor = self.brief.efficiency_floor
        for place, one in enumerate(self.finalists, start=1):
            worst = min(one.conditions, key=lambda condition: condition.efficiency)
            if floor is not None and worst.efficiency < floor:
                found.append(
                    f"Place {place} reaches {format_quantity(worst.efficiency, '1')} at "
                    f"{format_quantity(worst.input_voltage, 'V')}, below the brief's floor of "
                    f"{format_quantity(floor, '1')}."
                )
            if any(filling.series > 1 for filling in one.fillings):
                found.append(
                    f"Place {place} has parts in series: they need parts around them that share the voltage."
                )
        return found
