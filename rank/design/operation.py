"""What sized candidates do at an input voltage and a load: frequency, losses by term, efficiency."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Protocol

import numpy as np

from capmuster.rank.design.losses import best_of_all, loss_model
from capmuster.rank.sizing import Losses, LossModel, impedance, losses
from capmuster.rank.structs import rows_of

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from capmuster.enumerate.converters import ConverterTable
    from capmuster.rank.evaluation import Elements
    from capmuster.rank.inputs.brief import Brief
    from capmuster.rank.scores.switchtable import SwitchTable

    Floats = NDArray[np.float64]


class Modelled(Protocol):
    """N converters with coefficients: all that a sizing needs."""

    @property
    def table(self) -> ConverterTable:
        """The converters."""

    @property
    def switches(self) -> SwitchTable:
        """Their switches."""

    @property
    def elements(self) -> Elements:
        """Classes of their elements."""

    @property
    def brief(self) -> Brief:
        """The job."""

    def model(self, volts: float) -> LossModel:
        """Coefficients at an input voltage [V]."""

    def ideal(self, volts: float) -> Floats:
        """Output without droop, its magnitude, shape (N,) [V]."""

    def take(self, rows: NDArray[np.intp]) -> Modelled:
        """Return the chosen rows."""


@dataclass(frozen=True, slots=True)
class Candidates:
    """N converters with the classes of their elements, for one brief.

    Attributes
    ----------
    table, switches, elements
        The converters, their switches, and the class of every element.
    brief
        The job.
    relaxed
        Whether each coefficient is the best of all classes and trees at once, for bounds.
    """

    table: ConverterTable
    switches: SwitchTable
    elements: Elements
    brief: Brief
    relaxed: bool = False

    def model(self, volts: float) -> LossModel:
        """Coefficients at an input voltage [V]."""
        write = best_of_all if self.relaxed else loss_model
        return write(self.table, self.switches, self.elements, self.brief.technology, volts)

    def ideal(self, volts: float) -> Floats:
        """Output without droop, its magnitude, shape (N,) [V]."""
        return np.abs(self.table.ratios) * volts

    def take(self, rows: NDArray[np.intp]) -> Candidates:
        """Return the chosen rows."""
        return Candidates(
            self.table.take(rows),
            self.switches.take(rows),
            rows_of(self.elements, rows),
            self.brief,
            self.relaxed,
        )


@dataclass(frozen=True, slots=True)
class Design:
    """Sizes of N candidates.

    Attributes
    ----------
    capacitors, switches
        Areas, shapes (N, n) and (N, m) [mm2].
    frequency
        Switching frequency; where the frequency holds the output, unused there; shape (N,) [Hz].
    duty
        Share of phase 1, shape (N,) [1].
    current
        Full load, shape (N,) [A].
    """

    capacitors: Floats
    switches: Floats
    frequency: Floats
    duty: Floats
    current: Floats


@dataclass(frozen=True, slots=True)
class Operation:
    """N sized candidates at one input and load; every array but those of `losses` has shape (N,).

    Attributes
    ----------
    frequency
        Switching frequency [Hz]; NaN where no frequency holds the output.
    slow, fast, impedance
        Both limits, and the output impedance [ohm].
    output
        Magnitude of the output voltage [V].
    output_power
        Power into the load [W].
    losses
        Loss by term.
    efficiency
        Output power over output power and loss [1].
    """

    frequency: Floats
    slow: Floats
    fast: Floats
    impedance: Floats
    output: Floats
    output_power: Floats
    losses: Losses
    efficiency: Floats


def operation(
    candidates: Modelled, design: Design, volts: float, current: Floats, model: LossModel | None = None
) -> Operation:
    """Work out what sized candidates do.

    Parameters
    ----------
    candidates, design
        The candidates and their sizes.
    volts
        Input voltage [V].
    current
        Load current, shape (N,), above 0 [A].
    model
        Their coefficients at that input, if they are at hand.

    Notes
    -----
    In fixed-ratio use the output is ``|M| V_in - I R_out``. In regulated use it is held: by the frequency,
    which follows from ``R_SSL = sqrt((R - R_lead)^2 - R_FSL^2)`` with ``R = (|M| V_in - |V_out|) / I``; or by
    the on-resistances at the design's frequency. Then the whole of ``I (|M| V_in - |V_out|)`` is lost.
    """
    brief = candidates.brief
    model = candidates.model(volts) if model is None else model
    ideal = candidates.ideal(volts)
    sizes = (design.capacitors, design.switches)
    if brief.use == "fixed-ratio":
        limits = impedance(model, *sizes, design.frequency, design.duty)
        wasted = losses(model, *sizes, design.frequency, design.duty, mean_square_current=np.square(current))
        output, frequency, resistance = ideal - current * limits.output, design.frequency, limits.output
    else:
        output = np.broadcast_to(abs(brief.required), ideal.shape)
        resistance = (ideal - output) / current
        frequency = (
            held_frequency(model, design, resistance) if brief.regulation == "frequency" else design.frequency
        )
        limits = impedance(model, *sizes, frequency, design.duty)
        wasted = losses(model, *sizes, frequency, design.duty, held=current * (ideal - output))
    power = output * current
    return Operation(
        frequency=frequency,
        slow=limits.slow,
        fast=limits.fast,
        impedance=resistance,
        output=output,
        output_power=power,
        losses=wasted,
        efficiency=power / (power + wasted.total),
    )


def held_frequency(model: LossModel, design: Design, resistance: Floats) -> Floats:
    """Frequency at which candidates have a given output impedance by the blend, shape (N,) [Hz].

    NaN where the fast limit alone is too high.
    """
    at_one = impedance(model, design.capacitors, design.switches, np.ones(len(model)), design.duty)
    rest = resistance - at_one.lead
    with np.errstate(invalid="ignore", divide="ignore"):
        slow = np.sqrt((rest - at_one.fast) * (rest + at_one.fast))
        return np.where(rest > at_one.fast, at_one.slow / slow, np.nan)


def asleep(model: LossModel, sleep_power: float, controller_power: float) -> LossModel:
    """Coefficients while the clock stands still: leakage and the controller's sleep power alone."""
    nothing = np.zeros_like
    return replace(
        model,
        plate=nothing(model.plate),
        gate=nothing(model.gate),
        output_charge=nothing(model.output_charge),
        cycle=nothing(model.cycle),
        controller=model.controller - controller_power + sleep_power,
    )
