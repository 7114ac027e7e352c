"""Voltages and currents of every element during one interval, as sums of exponentials."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from capmuster.rank.exact.exponentials import extremes

if TYPE_CHECKING:
    from collections.abc import Sequence

    from capmuster.rank.exact.circuit import Circuit
    from capmuster.rank.exact.relaxation import Array, Interval, Storage


@dataclass(frozen=True, slots=True)
class Waveforms:
    """One interval, for any number of starting states at once: shape (b, ...) throughout.

    A quantity is `rest + sum(terms exp(-rates t))`; currents have no rest.

    Attributes
    ----------
    duration
        Length of the interval [s].
    rates
        Shape (k,) [1/s].
    capacitor_rest, capacitor_terms
        Capacitor voltages [V], shapes (b, c), (b, c, k).
    switch_rest, switch_terms
        Voltages from end to end of the switches [V], shapes (b, s), (b, s, k).
    capacitor_currents
        Currents into the plus plates [A], shape (b, c, k).
    resistor_currents
        Currents through the conducting resistances [A], shape (b, r, k).
    port_currents
        Currents out of the ports into the circuit [A], shape (b, p, k).
    """

    duration: float
    rates: Array
    capacitor_rest: Array
    capacitor_terms: Array
    switch_rest: Array
    switch_terms: Array
    capacitor_currents: Array
    resistor_currents: Array
    port_currents: Array

    def capacitor_extremes(self) -> tuple[Array, Array]:
        """Least and greatest voltage of each capacitor over time and batch [V], shapes (c,)."""
        return extremes(self.capacitor_rest, self.capacitor_terms, self.rates, self.duration)

    def switch_extremes(self) -> tuple[Array, Array]:
        """Least and greatest voltage of each switch over time and batch [V], shapes (s,)."""
        return extremes(self.switch_rest, self.switch_terms, self.rates, self.duration)

    def port_extremes(self) -> tuple[Array, Array]:
        """Least and greatest current out of each port over time and batch [A], shapes (p,)."""
        return extremes(0.0, self.port_currents, self.rates, self.duration)


class Extremes:
    """Gathers the extremes of all elements over intervals.

    Attributes
    ----------
    capacitor_low, capacitor_high
        Least and greatest voltage of each capacitor so far [V], shape (n,).
    switch_low, switch_high
        Least and greatest voltage of each switch while it blocks, so far [V], shape (s,).
    """

    def __init__(self, circuit: Circuit) -> None:
        count, switch_count = len(circuit.capacitors), len(circuit.switches)
        self._phase = np.array([switch.phase for switch in circuit.switches])
        self.capacitor_low, self.capacitor_high = np.full(count, np.inf), np.full(count, -np.inf)
        self.switch_low, self.switch_high = np.full(switch_count, np.inf), np.full(switch_count, -np.inf)

    def take(self, wave: Waveforms, phase: int) -> None:
        """Take in an interval.

        Parameters
        ----------
        wave
            Its waveforms; all starting states count.
        phase
            Phase that it belongs to, 0 for dead time, in which nothing fixes the voltage of an open switch.
        """
        count = len(self.capacitor_low)
        low, high = wave.capacitor_extremes()
        self.capacitor_low = np.minimum(self.capacitor_low, low[:count])
        self.capacitor_high = np.maximum(self.capacitor_high, high[:count])
        if phase:
            low, high = wave.switch_extremes()
            blocks = self._phase != phase
            self.switch_low[blocks] = np.minimum(self.switch_low, low)[blocks]
            self.switch_high[blocks] = np.maximum(self.switch_high, high)[blocks]


def waveforms(
    interval: Interval,
    storage: Storage,
    switch_ends: Sequence[tuple[int, int]],
    *,
    start: Array,
    distance: Array,
    port_voltages: Array,
    duration: float,
) -> Waveforms:
    """Write all voltages and currents of an interval as sums of exponentials.

    Parameters
    ----------
    interval, storage
        The modes and the states.
    switch_ends
        Node pairs whose voltage is wanted.
    start
        States at the start of the interval, shape (b, states).
    distance
        Distance of each mode from its target at the start, shape (b, modes).
    port_voltages
        Voltages of the ports but ground [V], shape (ports - 1,).
    duration
        Length of the interval [s].

    Returns
    -------
    Waveforms
        Capacitors in the order of the network.
    """
    rest = start + distance @ interval.directions.T
    voltages = storage.voltages @ interval.directions
    ends = np.asarray(switch_ends, dtype=np.intp).reshape(-1, 2)
    across = interval.potentials[ends[:, 0]] - interval.potentials[ends[:, 1]]
    across_of_ports = interval.potentials_of_ports[ends[:, 0]] - interval.potentials_of_ports[ends[:, 1]]
    speed = distance * interval.rates
    return Waveforms(
        duration=duration,
        rates=interval.rates,
        capacitor_rest=rest @ storage.voltages.T + storage.voltages_of_ports @ port_voltages,
        capacitor_terms=-voltages * distance[:, None, :],
        switch_rest=rest @ across.T + across_of_ports @ port_voltages,
        switch_terms=-(across @ interval.directions) * distance[:, None, :],
        capacitor_currents=(storage.charges @ interval.directions) * speed[:, None, :],
        resistor_currents=interval.currents * distance[:, None, :],
        port_currents=interval.port_currents * speed[:, None, :],
    )
