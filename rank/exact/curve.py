"""Output impedance and efficiency of one circuit against frequency and against load."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from capmuster.enumerate.errors import CapmusterError
from capmuster.rank.exact.impedance import corner_frequency, output_impedance

if TYPE_CHECKING:
    from capmuster.rank.exact.relaxation import Array
    from capmuster.rank.exact.subject import Subject

SPAN = 100.0
"""The frequency range on either side of the corner where none is given."""

HEADER = (
    "sweep",
    "frequency_Hz",
    "load_A",
    "resistance_ohm",
    "slow_limit_ohm",
    "fast_limit_ohm",
    "no_load_ratio",
    "output_voltage_V",
    "efficiency",
)
"""Columns of `Curve.rows`; efficiency is a number, 1 for no loss."""


@dataclass(frozen=True, slots=True)
class Sweep:
    """Points of a curve; every array has shape (p,).

    Attributes
    ----------
    frequency
        Switching frequency [Hz].
    load
        Load current, its magnitude [A].
    resistance, slow, fast
        Exact output resistance and its limits [ohm].
    ratio
        No-load ratio [1].
    output
        Output voltage [V]; NaN where the load is more than the converter gives into a short circuit.
    efficiency
        Output power over input power [1]: conduction and plates; no gate drive. NaN likewise.
    """

    frequency: Array
    load: Array
    resistance: Array
    slow: Array
    fast: Array
    ratio: Array
    output: Array
    efficiency: Array


@dataclass(frozen=True, slots=True)
class Curve:
    """Both sweeps of a subject.

    Attributes
    ----------
    subject
        The circuit and the point that both sweeps go through.
    corner
        Frequency at which the limits are equal [Hz].
    over_frequency, over_load
        The sweeps.
    """

    subject: Subject
    corner: float
    over_frequency: Sweep
    over_load: Sweep

    def rows(self) -> list[list[str]]:
        """Both sweeps as rows with the columns `HEADER`, to full precision; empty for NaN."""
        return [
            [name, *("" if np.isnan(value) else repr(float(value)) for value in point)]
            for name, sweep in (("frequency", self.over_frequency), ("load", self.over_load))
            for point in zip(
                sweep.frequency,
                sweep.load,
                sweep.resistance,
                sweep.slow,
                sweep.fast,
                sweep.ratio,
                sweep.output,
                sweep.efficiency,
                strict=True,
            )
        ]


def curve(
    subject: Subject, *, lowest: float | None = None, highest: float | None = None, points: int = 41
) -> Curve:
    """Sweep the frequency at the subject's load, and the load at the subject's frequency.

    Parameters
    ----------
    subject
        The circuit and its operating point.
    lowest, highest
        Range of frequency [Hz]; a hundredth and a hundred times the corner where none is given.
    points
        Points of each sweep, spaced evenly on a logarithmic scale.

    Returns
    -------
    Curve
        The load goes from a hundredth of the subject's to five times that, or to where the output is 0.

    Raises
    ------
    CapmusterError
        Fewer than 2 points, an empty range, or a refused frequency.
    """
    if points < 2:  # noqa: PLR2004 - a curve has two ends
        raise CapmusterError(f"points: {points} is too small", accepted="2 or more")
    corner = corner_frequency(subject.steady)
    low, high = lowest or corner / SPAN, highest or _most(subject, corner * SPAN)
    if not low < high:
        raise CapmusterError(
            f"frequencies from {low:g} Hz to {high:g} Hz", accepted="a lowest below the highest"
        )
    frequency = np.geomspace(low, high, points)
    found = output_impedance(subject.steady, subject.frequency)
    short = abs(found.ratio[0]) * subject.input_voltage / found.resistance[0]
    load = np.geomspace(subject.load / 100.0, min(5.0 * subject.load, 0.999 * float(short)), points)
    return Curve(
        subject=subject,
        corner=corner,
        over_frequency=_sweep(subject, frequency, np.full(points, subject.load)),
        over_load=_sweep(subject, np.full(points, subject.frequency), load),
    )


def _most(subject: Subject, wanted: float) -> float:
    """Highest frequency that the dead time leaves room for."""
    circuit = subject.circuit
    if not circuit.dead_time:
        return wanted
    return min(wanted, 0.9 * min(circuit.duty, 1 - circuit.duty) / circuit.dead_time)


def _sweep(subject: Subject, frequency: Array, load: Array) -> Sweep:
    found = output_impedance(subject.steady, frequency)
    sign = 1.0 if subject.output_current > 0 else -1.0
    output = found.ratio * subject.input_voltage - found.resistance * sign * load
    drawn = found.idle_conductance * subject.input_voltage + found.back_ratio * sign * load
    holds = sign * output >= 0.0
    with np.errstate(divide="ignore", invalid="ignore"):
        efficiency = output * sign * load / (subject.input_voltage * drawn)
    return Sweep(
        frequency=frequency,
        load=load,
        resistance=found.resistance,
        slow=found.slow,
        fast=found.fast,
        ratio=found.ratio,
        output=np.where(holds, output, np.nan),
        efficiency=np.where(holds, efficiency, np.nan),
    )
