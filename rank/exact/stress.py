"""What elements see: exact steady states over the load, and start-ups, both at the highest input."""

from __future__ import annotations

import math
from contextlib import suppress
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
from scipy.optimize import brentq

from capmuster.enumerate.errors import CapmusterError
from capmuster.rank.exact.impedance import output_impedance, regulating_frequency
from capmuster.rank.exact.operating import OperatingPoint, operate
from capmuster.rank.exact.steadystate import SteadyState
from capmuster.rank.exact.transient import StartUp, start_up

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence

    from capmuster.rank.exact.circuit import Circuit
    from capmuster.rank.exact.relaxation import Array
    from capmuster.rank.exact.resizing import Job

OUTPUT_CAPACITANCE = 10.0
"""Output capacitor of the start-up over the sum of the flying ones; one that stays empty is tried too."""

LOADS = (1.0, 0.5, 0.2, 0.05)
"""Shares of the load current at which the swing in regulated use is taken; no load is the slow limit."""

AT_REST = 40.0
"""Span of the slowest mode, in time constants, that counts as the slow limit."""

_MOST_WEAKENED = 40.0


def highest_voltages(states: Sequence[OperatingPoint | StartUp]) -> Array:
    """Highest voltage of each element over states [V]: capacitors, then switches."""
    peaks = [np.concatenate([state.capacitor_peak, state.switch_peak]) for state in states]
    return np.asarray(np.max(peaks, axis=0))


def steady_points(job: Job, steady: SteadyState) -> Iterator[OperatingPoint]:
    """Steady states at the highest input over the load; in regulated use the output is held."""
    brief = job.brief
    volts = brief.input_maximum
    if brief.use == "fixed-ratio":
        for share in (0.0, 1.0):
            yield operate(steady, job.frequency, volts, output_current=brief.sign * share * job.current)
    elif brief.regulation == "conductance":
        for share in LOADS:
            held = _held_by_resistance(job, steady.circuit, share * job.current)
            yield operate(SteadyState.of(held), job.frequency, volts, output_voltage=brief.required)
    else:
        slowest = min(float(steady.rates.min()) / (2 * AT_REST), job.frequency)
        for share in LOADS:
            frequency = job.frequency
            with suppress(CapmusterError):  # not even the highest input holds the output: take what there is
                frequency = regulating_frequency(
                    steady, volts, brief.required, share * job.current, lowest=slowest, highest=frequency
                )
            yield operate(steady, frequency, volts, output_voltage=brief.required)
        yield operate(steady, slowest, volts, output_voltage=brief.required)


def _held_by_resistance(job: Job, circuit: Circuit, current: float) -> Circuit:
    """Raise all on-resistances by one factor until the highest input holds the output."""
    brief = job.brief

    def weakened(logarithm: float) -> Circuit:
        factor = math.exp(logarithm)
        switches = tuple(replace(one, resistance=one.resistance * factor) for one in circuit.switches)
        return replace(circuit, switches=switches)

    def surplus(logarithm: float) -> float:
        impedance = output_impedance(weakened(logarithm), job.frequency)
        reached = abs(impedance.ratio[0]) * brief.input_maximum - current * impedance.resistance[0]
        return float(reached - abs(brief.required))

    if surplus(0.0) <= 0:
        return circuit
    return weakened(brentq(surplus, 0.0, _MOST_WEAKENED, xtol=1e-9))


def start_ups(job: Job, circuit: Circuit) -> Iterator[StartUp]:
    """Start-ups at the highest input, in either phase, into an output that rises and one that stays at 0."""
    total = sum(capacitor.capacitance for capacitor in circuit.capacitors)
    for output in (OUTPUT_CAPACITANCE * total, math.inf):
        for phase in (1, 2):
            yield start_up(
                circuit, job.frequency, job.brief.input_maximum, output_capacitance=output, first_phase=phase
            )
