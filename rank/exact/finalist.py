"""A sized candidate on the exact impedance: its true area, its stress in use and at start-up.

Sizing works with a blend of the limits and with bounds on voltages. Here the elements become a circuit, with
series resistances and plate parasitics. Re-sizing it exactly takes no search: with all areas times `t` every
time constant stays, so the exact impedance falls by exactly `t` and the no-load ratio does not move. The
exact peak voltages then choose the classes again, at equal capacitance and resistance, until nothing changes.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from capmuster.rank.exact.impedance import OutputImpedance, blend, loop_blend
from capmuster.rank.exact.resizing import Job, promised_impedance, reclassed, resized
from capmuster.rank.exact.steadystate import SteadyState
from capmuster.rank.exact.stress import highest_voltages, start_ups, steady_points

if TYPE_CHECKING:
    from collections.abc import Sequence

    from capmuster.enumerate.wiring import Converter
    from capmuster.rank.elements import Element
    from capmuster.rank.exact.circuit import Circuit
    from capmuster.rank.exact.operating import OperatingPoint
    from capmuster.rank.exact.relaxation import Array
    from capmuster.rank.exact.transient import StartUp
    from capmuster.rank.inputs.brief import Brief
    from capmuster.rank.shortlist import Shortlist

_ROUNDS = 20
_FREE_ROUNDS = 5


@dataclass(frozen=True, slots=True)
class Overstress:
    """An element that sees more than its class stands.

    Attributes
    ----------
    name
        The element.
    voltage
        Highest voltage [V].
    rating
        What it stands, derated [V].
    when
        "start-up" or "steady state".
    """

    name: str
    voltage: float
    rating: float
    when: str


@dataclass(frozen=True)
class Finalist:
    """A candidate after exact re-sizing.

    Attributes
    ----------
    converter, brief
        What it is and what it is for.
    elements
        Its elements with their final areas and values.
    circuit, frequency, current
        The circuit, and its switching frequency [Hz] at full load [A] and the lowest input.
    given_area
        Area before [mm2].
    holds
        Whether the shifted no-load ratio leaves any droop budget; without one the areas stay as given.
    impedance
        Exact impedance and limits of the final circuit, at `frequency`.
    points
        Exact steady states at the highest input, over the load.
    starts
        Exact start-ups at the highest input.
    """

    converter: Converter
    brief: Brief
    elements: tuple[Element, ...]
    circuit: Circuit
    frequency: float
    current: float
    given_area: float
    holds: bool
    impedance: OutputImpedance
    points: tuple[OperatingPoint, ...]
    starts: tuple[StartUp, ...]

    @property
    def exact(self) -> float:
        """Exact output resistance [ohm]."""
        return float(self.impedance.resistance[0])

    @property
    def blended(self) -> float:
        """Output resistance by the common blend of the same limits, exponent 2 [ohm]."""
        return float(blend(self.impedance.slow[0], self.impedance.fast[0]))

    @property
    def loop_blended(self) -> float:
        """Output resistance by ``x coth(x/y)`` of the same limits [ohm]."""
        return float(loop_blend(self.impedance.slow[0], self.impedance.fast[0]))

    @property
    def ratio_shift(self) -> float:
        """No-load ratio over the ideal one, less 1: what plate parasitics do."""
        return float(self.impedance.ratio[0]) / float(self.converter.ratio) - 1.0

    @property
    def area(self) -> float:
        """Area of all elements [mm2]."""
        return sum(element.area for element in self.elements)

    @property
    def steady_peaks(self) -> Array:
        """Highest voltage of each element in use [V], in the order of `elements`."""
        return highest_voltages(self.points)

    @property
    def start_up_peaks(self) -> Array:
        """Highest voltage of each element at start-up [V], in the order of `elements`."""
        return highest_voltages(self.starts)

    @property
    def inrush(self) -> float:
        """Highest input current at start-up [A]."""
        return max(start.input_peak for start in self.starts)

    @property
    def overstressed(self) -> tuple[Overstress, ...]:
        """Elements that see more than their class stands, in use first."""
        found = []
        for when, peaks in (("steady state", self.steady_peaks), ("start-up", self.start_up_peaks)):
            for element, peak in zip(self.elements, peaks.tolist(), strict=True):
                if peak > element.rating * (1 + 1e-9):
                    found.append(Overstress(element.name, peak, element.rating, when))
        return tuple(found)


def finalist(
    converter: Converter,
    elements: Sequence[Element],
    brief: Brief,
    *,
    frequency: float | None = None,
    duty: float = 0.5,
    current: float | None = None,
) -> Finalist:
    """Re-size a sized candidate on its exact impedance and find its stress.

    Parameters
    ----------
    converter
        The candidate.
    elements
        Its capacitors, then its switches, sized by any model.
    brief
        What it is for.
    frequency
        Switching frequency at the lowest input and full load [Hz]; the brief's without one.
    duty
        Share of phase 1 [1].
    current
        Full load [A]; the brief's without one.

    Returns
    -------
    Finalist
        Scaled so that it holds the required output at the lowest input and full load, exactly. Where the
        brief counts losses, the exact impedance moreover is not above what the blend has promised.
    """
    job = Job(converter, brief, frequency or brief.frequency, duty, current or brief.current)
    sized, highest = tuple(elements), np.zeros(len(elements))
    promised = promised_impedance(job, sized) if brief.counts_losses else math.inf
    for turn in range(_ROUNDS):
        sized, circuit, impedance, holds = resized(job, sized, promised)
        points = tuple(steady_points(job, SteadyState.of(circuit)))
        peaks = highest_voltages(points)
        highest = np.maximum(highest, peaks)
        # Classes may take turns: after a while only higher voltages count, and that comes to an end.
        again = tuple(
            reclassed(element, peak, brief)
            for element, peak in zip(sized, (peaks if turn < _FREE_ROUNDS else highest).tolist(), strict=True)
        )
        settled = all((a.device, a.series) == (b.device, b.series) for a, b in zip(again, sized, strict=True))
        sized = again
        if settled:
            break
    return Finalist(
        converter=converter,
        brief=brief,
        elements=sized,
        circuit=circuit,
        frequency=job.frequency,
        current=job.current,
        given_area=sum(element.area for element in elements),
        holds=holds,
        impedance=impedance,
        points=points,
        starts=tuple(start_ups(job, circuit)),
    )


def finalists(found: Shortlist, top: int | None = None) -> tuple[Finalist, ...]:
    """Re-size the best candidates of a shortlist.

    Parameters
    ----------
    found
        The shortlist.
    top
        How many; all rows of its table without a number.

    Returns
    -------
    tuple of Finalist
        In the order of the shortlist.
    """
    sized = found.pool.evaluation.sized
    best = []
    for row in range(min(len(found) if top is None else top, len(found.pool))):
        converter, elements = found.pool.converter(row), found.elements(row)
        if sized is None:
            best.append(finalist(converter, elements, found.brief))
        else:
            frequency, design = float(sized.minimum.frequency[row]), sized.design
            best.append(
                finalist(
                    converter,
                    elements,
                    found.brief,
                    frequency=frequency,
                    duty=float(design.duty[row]),
                    current=float(design.current[row]),
                )
            )
    return tuple(best)
