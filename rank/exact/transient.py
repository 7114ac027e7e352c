"""Start-up from empty capacitors: the exact transient of the first cycles.

The input is switched on as a step while the switches already run. Each interval maps the state linearly, so
the states at all switching instants cost one small product each, and the extremes in between follow from
sums of exponentials: nothing is sampled.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from capmuster.enumerate.errors import CapmusterError
from capmuster.rank.exact.relaxation import Array, Interval, Network, interval_of, storage_of
from capmuster.rank.exact.steadystate import durations, network_of, phases
from capmuster.rank.exact.waveforms import Extremes, waveforms

if TYPE_CHECKING:
    from capmuster.rank.exact.circuit import Circuit

MOST_CYCLES = 20_000
SETTLED = 1e-3


@dataclass(frozen=True, slots=True)
class StartUp:
    """What the elements see from the first switching instant on.

    Arrays over capacitors have shape (n,), over switches (s,), over cycles (cycles,).

    Attributes
    ----------
    cycles
        Number of cycles that were followed.
    settled
        Whether the last state is within 0.1 % of the steady one.
    capacitor_low, capacitor_high
        Least and greatest voltage of each capacitor [V].
    switch_low, switch_high
        Least and greatest voltage of each switch from end to end while it blocks [V].
    input_peak
        Greatest magnitude of the input current [A], the step apart.
    step_charge
        Charge [C] that capacitors hard-wired between stiff ports draw at the very step of the input.
    input_charge
        Charge drawn from the input in each cycle [C], the step apart.
    output_voltage
        Output voltage at the end of each cycle [V].
    """

    cycles: int
    settled: bool
    capacitor_low: Array
    capacitor_high: Array
    switch_low: Array
    switch_high: Array
    input_peak: float
    step_charge: float
    input_charge: Array
    output_voltage: Array

    @property
    def capacitor_peak(self) -> Array:
        """Greatest magnitude of the voltage of each capacitor [V], shape (n,)."""
        return np.maximum(np.abs(self.capacitor_low), np.abs(self.capacitor_high))

    @property
    def switch_peak(self) -> Array:
        """Greatest magnitude of the voltage of each switch while it blocks [V], shape (s,)."""
        return np.maximum(np.abs(self.switch_low), np.abs(self.switch_high))


def start_up(
    circuit: Circuit,
    frequency: float,
    input_voltage: float,
    *,
    output_capacitance: float,
    load_resistance: float = math.inf,
    cycles: int | None = None,
    first_phase: int = 1,
) -> StartUp:
    """Follow a converter from empty capacitors, the output capacitor included.

    Parameters
    ----------
    circuit
        The converter.
    frequency
        Switching frequency [Hz].
    input_voltage
        Height of the input step [V].
    output_capacitance
        Capacitance from output to ground [F]; infinite for an output that stays at 0 V.
    load_resistance
        Load from output to ground [ohm]; infinite for none.
    cycles
        How many cycles to follow; by default until the state has settled, at most 20,000.
    first_phase
        The phase (1 or 2) that the input step falls into.

    Returns
    -------
    StartUp
        Stress and inrush.

    Raises
    ------
    CapmusterError
        A value is not positive, or the dead time leaves nothing of a phase.
    """
    if not output_capacitance > 0:
        raise CapmusterError(f"output capacitance {output_capacitance} F", accepted="a positive number")
    if not load_resistance > 0:
        raise CapmusterError(f"load resistance {load_resistance} ohm", accepted="a positive number")
    if first_phase not in (1, 2):
        raise CapmusterError(f"first phase {first_phase}", accepted="1 or 2")
    network = network_of(circuit)
    if math.isfinite(output_capacitance):
        network = _with_output(network, output_capacitance, load_resistance)
    storage = storage_of(network)
    lengths = [float(length) for length in durations(circuit, frequency)[0]]
    intervals = [interval_of(network, storage, conducting) for conducting in network.conducting]
    names = phases(circuit)
    turn = names.index(first_phase)
    order = [*range(turn, len(names)), *range(turn)]
    ports = np.zeros(len(network.ports) - 1)
    ports[0] = input_voltage

    states, settled = _march(
        [intervals[i] for i in order], [lengths[i] for i in order], storage.start @ ports, ports, cycles
    )
    seen, peak, charge = Extremes(circuit), 0.0, np.zeros(len(states))
    for place, index in enumerate(order):
        interval, start = intervals[index], states[:, place]
        distance = interval.targets @ ports - start @ interval.directions
        wave = waveforms(
            interval,
            storage,
            network.resistor_ends[: len(circuit.switches)],
            start=start,
            distance=distance,
            port_voltages=ports,
            duration=lengths[index],
        )
        seen.take(wave, names[index])
        peak = max(peak, float(np.abs(wave.port_extremes())[:, 0].max(initial=0.0)))
        charge -= (distance * np.expm1(-interval.rates * lengths[index])) @ interval.port_currents[0]
    at_step = storage.voltages @ states[0, 0] + storage.voltages_of_ports @ ports
    drawn = storage.voltages_of_ports[:, 0] @ (np.array(network.capacitances) * at_step)
    output = np.zeros(len(states))
    if len(ports) == 1:
        # The output capacitor is the last one; its voltage is that of the output.
        output = states[:, -1] @ storage.voltages[-1] + storage.voltages_of_ports[-1] @ ports
    return StartUp(
        cycles=len(states),
        settled=settled,
        capacitor_low=np.minimum(seen.capacitor_low, 0.0),
        capacitor_high=np.maximum(seen.capacitor_high, 0.0),
        switch_low=seen.switch_low,
        switch_high=seen.switch_high,
        input_peak=peak,
        step_charge=float(drawn),
        input_charge=charge,
        output_voltage=output,
    )


def _with_output(network: Network, capacitance: float, load: float) -> Network:
    """Set the output free and hang a capacitor and a load on it."""
    ground, source, output = network.ports
    index = len(network.resistances)
    loaded = math.isfinite(load)
    return replace(
        network,
        ports=(ground, source),
        capacitor_ends=(*network.capacitor_ends, (output, ground)),
        capacitances=(*network.capacitances, capacitance),
        resistor_ends=(*network.resistor_ends, *([(output, ground)] if loaded else [])),
        resistances=(*network.resistances, *([load] if loaded else [])),
        conducting=tuple((*c, index) if loaded else c for c in network.conducting),
    )


def _march(
    intervals: list[Interval], lengths: list[float], start: Array, ports: Array, cycles: int | None
) -> tuple[Array, bool]:
    """States at all switching instants, shape (cycles, intervals + 1, states), and whether they settle."""
    size = len(start)
    maps: list[tuple[Array, Array]] = []
    for interval, length in zip(intervals, lengths, strict=True):
        gain = -np.expm1(-interval.rates * length)
        pull = interval.directions * gain
        maps.append((np.eye(size) - pull @ interval.directions.T, pull @ (interval.targets @ ports)))
    whole, shift = np.eye(size), np.zeros(size)
    for matrix, offset in maps:
        whole, shift = matrix @ whole, matrix @ shift + offset
    rest = np.linalg.lstsq(np.eye(size) - whole, shift, rcond=None)[0]
    tolerance = SETTLED * max(float(np.linalg.norm(rest)), float(np.linalg.norm(start)))
    state, rows, settled = start, [], False
    for _ in range(cycles if cycles is not None else MOST_CYCLES):
        row = [state]
        for matrix, offset in maps:
            state = matrix @ state + offset
            row.append(state)
        rows.append(row)
        settled = float(np.linalg.norm(state - rest)) <= tolerance
        if settled and cycles is None:
            break
    return np.array(rows), settled
