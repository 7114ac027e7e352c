"""One operating point of a converter, exact: mean values, ripple, peaks and losses."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from capmuster.enumerate.errors import CapmusterError
from capmuster.rank.exact.exponentials import mean_square
from capmuster.rank.exact.steadystate import SteadyState, durations, phases
from capmuster.rank.exact.waveforms import Extremes, waveforms

if TYPE_CHECKING:
    from capmuster.rank.exact.relaxation import Array

SMALL_SPAN = 0.2


@dataclass(frozen=True, slots=True)
class OperatingPoint:
    """A periodic steady state between stiff ports.

    Arrays over capacitors have shape (n,), over switches (s,), in the order of the circuit.

    Attributes
    ----------
    frequency
        Switching frequency [Hz].
    input_voltage, output_voltage
        Port voltages [V], constant.
    input_current, output_current
        Means [A]: drawn from the input, given to the output.
    input_rms, output_rms
        Root mean squares of the same currents [A].
    input_peak
        Greatest magnitude of the input current [A].
    charges
        Charge [C] given by input and output in phase 1 and in phase 2, shape (2 phases, 2 ports).
    capacitor_mean, capacitor_low, capacitor_high
        Mean over the period, least and greatest voltage of each capacitor [V]; without its series resistance.
    capacitor_rms
        Root mean square current of each capacitor [A].
    switch_low, switch_high
        Least and greatest voltage of each switch from end to end in the other phase [V].
    switch_mean, switch_rms
        Mean and root mean square current of each switch from end to end over the period [A].
    loss
        Heat in all resistances [W]; equals input power less output power.
    """

    frequency: float
    input_voltage: float
    output_voltage: float
    input_current: float
    output_current: float
    input_rms: float
    output_rms: float
    input_peak: float
    charges: Array
    capacitor_mean: Array
    capacitor_low: Array
    capacitor_high: Array
    capacitor_rms: Array
    switch_low: Array
    switch_high: Array
    switch_mean: Array
    switch_rms: Array
    loss: float

    @property
    def ripple(self) -> Array:
        """Peak-to-peak voltage of each capacitor [V], shape (n,)."""
        return self.capacitor_high - self.capacitor_low

    @property
    def capacitor_peak(self) -> Array:
        """Greatest magnitude of the voltage of each capacitor [V], shape (n,)."""
        return np.maximum(np.abs(self.capacitor_low), np.abs(self.capacitor_high))

    @property
    def switch_peak(self) -> Array:
        """Greatest magnitude of the voltage of each switch while it blocks [V], shape (s,)."""
        return np.maximum(np.abs(self.switch_low), np.abs(self.switch_high))

    @property
    def efficiency(self) -> float:
        """Output power over input power."""
        return self.output_voltage * self.output_current / (self.input_voltage * self.input_current)


def _mean_progress(spans: Array) -> Array:
    r"""Average of `(1 - exp(-t)) / (1 - exp(-span))` over the span; 1/2 when short, 1 when long."""
    half = 0.5 * spans
    square = half * half
    series = half / 3.0 * (1.0 - square / 15.0 * (1.0 - 2.0 * square / 21.0 * (1.0 - square / 10.0)))
    with np.errstate(divide="ignore", invalid="ignore"):
        direct = 1.0 / np.tanh(half) - 1.0 / half
    return 0.5 + 0.5 * np.where(half < SMALL_SPAN, series, direct)


def output_voltage_at(
    steady: SteadyState, frequency: float, input_voltage: float, output_current: float
) -> float:
    """Output voltage at a load current.

    Parameters
    ----------
    steady
        The converter.
    frequency
        Switching frequency [Hz].
    input_voltage
        Input voltage [V].
    output_current
        Mean current given to the output [A].

    Returns
    -------
    float
        Output voltage [V].
    """
    charge = steady.charges(frequency)[0, 1] * frequency
    return float((-output_current - charge[0] * input_voltage) / charge[1])


def operate(
    steady: SteadyState,
    frequency: float,
    input_voltage: float,
    *,
    output_voltage: float | None = None,
    output_current: float | None = None,
) -> OperatingPoint:
    """Find the steady state at given port voltages, or at a load current.

    The output may be held anywhere: below its no-load value is regulated use.

    Parameters
    ----------
    steady
        The converter.
    frequency
        Switching frequency [Hz].
    input_voltage
        Input voltage [V].
    output_voltage
        Voltage at which the output is held [V].
    output_current
        Mean current given to the output [A], instead of the voltage.

    Returns
    -------
    OperatingPoint
        The steady state.

    Raises
    ------
    CapmusterError
        Not exactly one of output voltage and output current is given, or the frequency is refused.
    """
    if (output_voltage is None) == (output_current is None):
        raise CapmusterError("the output needs a voltage or a current", accepted="one of the two")
    if output_voltage is None:
        output_voltage = output_voltage_at(steady, frequency, input_voltage, output_current or 0.0)
    ports = np.array([input_voltage, output_voltage])
    circuit, storage, network = steady.circuit, steady.storage, steady.network
    lengths = durations(circuit, frequency)[0]
    moved = steady.movements(frequency)[0] @ ports
    spans = lengths[steady.interval_index] * steady.rates
    distance = -moved / np.expm1(-spans)

    # State at the start of the first interval, from the modal coordinates of all intervals.
    paths = [steady.directions * (steady.interval_index < p) @ moved for p in range(len(lengths))]
    known = steady.targets @ ports - distance
    for index, path in enumerate(paths):
        chosen = steady.interval_index == index
        known[chosen] -= steady.directions[:, chosen].T @ path
    first = steady.recover @ known

    count, switch_count = len(circuit.capacitors), len(circuit.switches)
    weights = lengths * frequency
    seen, mean, capacitor_square = Extremes(circuit), np.zeros(count), np.zeros(count)
    resistor_charge, resistor_square = np.zeros((2, len(network.resistances)))
    port_square, port_peak, charges = np.zeros(2), 0.0, []
    for index, (interval, phase) in enumerate(zip(steady.intervals, phases(circuit), strict=True)):
        chosen = steady.interval_index == index
        wave = waveforms(
            interval,
            storage,
            network.resistor_ends[:switch_count],
            start=(first + paths[index])[None],
            distance=distance[chosen][None],
            port_voltages=ports,
            duration=float(lengths[index]),
        )
        seen.take(wave, phase)
        voltages = storage.voltages @ interval.directions
        at_start = wave.capacitor_rest[0] + wave.capacitor_terms[0].sum(axis=-1)
        between = at_start + voltages @ (moved[chosen] * _mean_progress(spans[chosen]))
        mean += weights[index] * between[:count]
        charges.append(interval.port_currents @ moved[chosen])
        if not len(interval.rates):
            continue  # all rests, as in a dead time without loops of series resistances
        used = list(interval.resistors)
        resistor_charge[used] += interval.currents @ (moved[chosen] / interval.rates)
        weight, wanted = weights[index], wave.capacitor_currents[0, :count]
        capacitor_square += weight * mean_square(wanted, interval.rates, wave.duration)
        port_square += weight * mean_square(wave.port_currents[0], interval.rates, wave.duration)
        resistor_square[used] += weight * mean_square(
            wave.resistor_currents[0], interval.rates, wave.duration
        )
        port_peak = max(port_peak, float(np.abs(wave.port_extremes())[:, 0].max()))

    given = np.array(charges)
    total = given.sum(axis=0) * frequency
    return OperatingPoint(
        frequency=float(frequency),
        input_voltage=float(input_voltage),
        output_voltage=float(output_voltage),
        input_current=float(total[0]),
        output_current=float(-total[1]),
        input_rms=float(np.sqrt(port_square[0])),
        output_rms=float(np.sqrt(port_square[1])),
        input_peak=port_peak,
        charges=given[np.array(phases(circuit)) > 0],
        capacitor_mean=mean,
        capacitor_low=seen.capacitor_low,
        capacitor_high=seen.capacitor_high,
        capacitor_rms=np.sqrt(capacitor_square),
        switch_low=seen.switch_low,
        switch_high=seen.switch_high,
        switch_mean=resistor_charge[:switch_count] * frequency,
        switch_rms=np.sqrt(resistor_square[:switch_count]),
        loss=float(resistor_square @ np.array(network.resistances)),
    )
