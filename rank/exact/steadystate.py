r"""The exact periodic steady state of a switched network, at any frequency.

In interval `p` of length `tau` the modal coordinates move by `x_p = D_p (m_p - V_p' w_p)` with
:math:`D_p = 1 - e^{-\lambda \tau}` and the targets `m_p` of `relaxation`. A steady state is periodic,
:math:`\sum_p V_p x_p = 0`: with `N` the null space of :math:`[V_1 V_2 \dots]`, `x = N z`. Eliminating the
states leaves one small linear system,

.. math:: N' K N z = N' m, \qquad K = \tfrac12 \coth(\lambda \tau / 2)

which is symmetric and positive definite for two intervals (with more, `K` gains a skew part that couples
them). It is well conditioned however short or long the period is beside the time constants: no difference of
nearly equal exponentials ever appears. The modes do not depend on the frequency, so a frequency costs one
hyperbolic tangent per mode and one tiny solve.

An irreducible converter without plate parasitics has `n + 1` modes for `n` states, so `N` is one vector, its
charge vector per unit of output charge written in the modes, :math:`\xi`, and
:math:`R_{out} = \sum_k \xi_k^2 / (2 f) \coth(\lambda_k \tau_k / 2)`: one single loop per mode.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from capmuster.enumerate.errors import CapmusterError, IllPosedError
from capmuster.rank.exact.relaxation import Array, Interval, Network, Storage, interval_of, storage_of

if TYPE_CHECKING:
    from capmuster.rank.exact.circuit import Circuit

# Singular values are either 0 or of the order of the root of a ratio of capacitances.
RESTING = 1e-9


def network_of(circuit: Circuit) -> Network:
    """Lay a circuit out as arrays, each series resistance with an inner node of its own.

    Parameters
    ----------
    circuit
        The circuit.

    Returns
    -------
    Network
        Capacitors first, then plates; switches first, then series resistances. The intervals are phase 1 and
        phase 2, each followed by its dead time where there is any.
    """
    count = len(circuit.nodes)
    series = [c for c in circuit.capacitors if c.resistance]
    inner = {c.name: count + index for index, c in enumerate(series)}
    ground = circuit.ports[0]
    capacitor_ends = [(c.plus, inner.get(c.name, c.minus)) for c in circuit.capacitors]
    resistor_ends = [(s.a, s.b) for s in circuit.switches] + [(inner[c.name], c.minus) for c in series]
    always = tuple(range(len(circuit.switches), len(resistor_ends)))
    return Network(
        node_count=count + len(series),
        ports=circuit.ports,
        capacitor_ends=(*capacitor_ends, *((p.node, ground) for p in circuit.plates)),
        capacitances=(*(c.capacitance for c in circuit.capacitors), *(p.capacitance for p in circuit.plates)),
        resistor_ends=tuple(resistor_ends),
        resistances=(*(s.resistance for s in circuit.switches), *(c.resistance for c in series)),
        conducting=tuple(
            tuple(i for i, switch in enumerate(circuit.switches) if switch.phase == phase) + always
            for phase in phases(circuit)
        ),
    )


def phases(circuit: Circuit) -> tuple[int, ...]:
    """Phase that each interval of the period belongs to, 0 for dead time.

    Parameters
    ----------
    circuit
        The circuit.

    Returns
    -------
    tuple of int
        ``(1, 2)``, or ``(1, 0, 2, 0)`` with dead time.
    """
    return (1, 0, 2, 0) if circuit.dead_time else (1, 2)


def durations(circuit: Circuit, frequency: npt.ArrayLike) -> Array:
    """Length of each interval of the period [s].

    Parameters
    ----------
    circuit
        The circuit, for its duty and dead time.
    frequency
        Frequencies [Hz], shape (f,).

    Returns
    -------
    Array
        Shape (f, 2), or (f, 4) with a dead time after each phase.

    Raises
    ------
    CapmusterError
        A frequency is not positive, or the dead time leaves nothing of a phase.
    """
    frequency = np.atleast_1d(np.asarray(frequency, dtype=float))
    if not (np.isfinite(frequency) & (frequency > 0)).all():
        raise CapmusterError("frequency not positive or not finite", accepted="positive numbers")
    shares = np.array([circuit.duty, 1.0 - circuit.duty])
    lengths = shares / frequency[:, None] - circuit.dead_time
    if (lengths <= 0).any():
        highest = float(shares.min()) / circuit.dead_time
        raise CapmusterError(
            f"a dead time of {circuit.dead_time:g} s at {frequency.max():g} Hz leaves a phase without time",
            accepted=f"frequencies below {highest:g} Hz",
        )
    if not circuit.dead_time:
        return np.asarray(lengths)
    dead = np.full(len(frequency), circuit.dead_time)
    return np.column_stack([lengths[:, 0], dead, lengths[:, 1], dead])


@dataclass(frozen=True)
class SteadyState:
    """All periodic steady states of a circuit: what does not depend on frequency and voltages.

    Build it with `SteadyState.of`.

    Attributes
    ----------
    circuit, network, storage, intervals
        The circuit, its arrays, its states, and its modes in each interval.
    rates, directions, targets
        The modes of all intervals side by side, shapes (modes,), (states, modes), (modes, 2).
    interval_index
        Interval of each mode, shape (modes,).
    loops
        Orthonormal basis of the periodic movements, shape (modes, loops).
    recover
        Pseudo-inverse that gives a state from its modal coordinates, shape (states, modes).
    """

    circuit: Circuit
    network: Network
    storage: Storage
    intervals: tuple[Interval, ...]
    rates: Array
    directions: Array
    targets: Array
    interval_index: npt.NDArray[np.intp]
    loops: Array
    recover: Array

    @classmethod
    def of(cls, circuit: Circuit) -> SteadyState:
        """Decompose a circuit.

        Parameters
        ----------
        circuit
            The circuit.

        Returns
        -------
        SteadyState
            Its steady states.

        Raises
        ------
        IllPosedError
            A capacitor never exchanges charge, so its voltage stays open, or no charge reaches the output.
        """
        network = network_of(circuit)
        storage = storage_of(network)
        done: dict[tuple[int, ...], Interval] = {}
        for conducting in network.conducting:
            if conducting not in done:
                done[conducting] = interval_of(network, storage, conducting)
        intervals = tuple(done[conducting] for conducting in network.conducting)
        directions = np.hstack([interval.directions for interval in intervals])
        states = len(storage.state_nodes)
        left, sigma, right = np.linalg.svd(directions)
        moving = int(np.count_nonzero(sigma > RESTING))
        if moving < states:
            resting = np.abs(storage.voltages @ left[:, moving])[: len(circuit.capacitors)]
            name = circuit.capacitors[int(np.argmax(resting))].name
            raise IllPosedError(f"capacitor {name} never exchanges charge: its voltage is not fixed")
        targets = np.vstack([interval.targets for interval in intervals])
        loops = right[states:].T
        if not np.any(np.abs(loops.T @ targets[:, 1]) > RESTING * np.abs(targets[:, 1]).max(initial=0.0)):
            raise IllPosedError("no charge reaches the output")
        return cls(
            circuit=circuit,
            network=network,
            storage=storage,
            intervals=intervals,
            rates=np.concatenate([interval.rates for interval in intervals]),
            directions=directions,
            targets=targets,
            interval_index=np.repeat(
                np.arange(len(intervals)), [len(interval.rates) for interval in intervals]
            ),
            loops=loops,
            recover=(left / sigma) @ right[:states],
        )

    @cached_property
    def bare(self) -> SteadyState:
        """The same circuit without plate parasitics, whose limits are the published sums."""
        return SteadyState.of(replace(self.circuit, plates=())) if self.circuit.plates else self

    @cached_property
    def _skew(self) -> Array | None:
        """Coupling of more than two intervals on the periodic movements."""
        used = np.unique(self.interval_index)
        if len(used) <= 2:  # noqa: PLR2004 - for two intervals it vanishes on every periodic movement
            return None
        later = np.sign(self.interval_index[:, None] - self.interval_index[None, :])
        overlap = 0.5 * later * (self.directions.T @ self.directions)
        projected: Array = self.loops.T @ overlap @ self.loops
        return projected

    def _solve(self, diagonal: Array) -> Array:
        """Solve for the movements per port voltage, (f, modes) to (f, modes, 2)."""
        loops, skew = self.loops, self._skew
        drive = loops.T @ self.targets
        if loops.shape[1] == 1:
            # One loop, as in every irreducible converter: a division.
            return (loops @ drive) / (diagonal @ (loops[:, 0] ** 2))[:, None, None]
        matrix = (loops.T[None] * diagonal[:, None, :]) @ loops
        if skew is not None:
            matrix = matrix + skew
        drives = np.broadcast_to(drive, (len(diagonal), *drive.shape))
        solution: Array = loops @ np.linalg.solve(matrix, drives)
        return solution

    def movements(self, frequency: npt.ArrayLike) -> Array:
        """Movement of every mode over its interval, per volt of input and output.

        Parameters
        ----------
        frequency
            Frequencies [Hz], shape (f,).

        Returns
        -------
        Array
            Shape (f, modes, 2), in the energy coordinates of `relaxation`.
        """
        spans = durations(self.circuit, frequency)[:, self.interval_index] * self.rates
        return self._solve(0.5 / np.tanh(0.5 * spans))

    def settling_cycles(self, frequency: float, tolerance: float) -> int:
        """Count the cycles after which any start has faded to a tolerance.

        Parameters
        ----------
        frequency
            Switching frequency [Hz].
        tolerance
            Share of the first deviation that may be left.

        Returns
        -------
        int
            At least 1.
        """
        lengths = durations(self.circuit, frequency)[0]
        cycle = np.eye(len(self.directions))
        for interval, length in zip(self.intervals, lengths, strict=True):
            faded = -np.expm1(-interval.rates * length)
            cycle -= (interval.directions * faded) @ (interval.directions.T @ cycle)
        left = float(np.abs(np.linalg.eigvals(cycle)).max(initial=0.0))
        return max(1, int(np.ceil(np.log(tolerance) / np.log(max(left, tolerance)))))

    def charges(self, frequency: npt.ArrayLike) -> Array:
        """Charge per cycle [C] that input and output give to the circuit, per volt of each.

        Parameters
        ----------
        frequency
            Frequencies [Hz], shape (f,).

        Returns
        -------
        Array
            Shape (f, 2, 2): row, the port that gives; column, the port whose voltage it is.
        """
        moved: Array = self.targets.T @ self.movements(frequency)
        return moved

    def limit_charges(self, frequency: npt.ArrayLike) -> tuple[Array, Array]:
        """Like `charges`, for each of the two limits alone.

        In the slow limit every mode comes to rest, in the fast limit currents are constant in an interval.

        Parameters
        ----------
        frequency
            Frequencies [Hz], shape (f,); the fast limit depends on it through the dead time only.

        Returns
        -------
        tuple of Array
            Slow and fast, shapes (f, 2, 2).
        """
        spans = durations(self.circuit, frequency)[:, self.interval_index] * self.rates
        slow: Array = self.targets.T @ self._solve(np.full_like(spans, 0.5))
        fast: Array = self.targets.T @ self._solve(1.0 / spans)
        return slow, fast
