"""One switched circuit, slowly and plainly: the oracle for steady states and transients.

It shares nothing with the code under test but the description of a circuit: capacitor voltages are the
states, each capacitor is a voltage source in modified nodal analysis (so capacitors without series resistance
must not form loops), and `scipy.linalg.expm` of the augmented system carries it through the intervals.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg import expm

from capmuster.enumerate.errors import CapmusterError
from capmuster.enumerate.wiring import Converter
from capmuster.rank.exact.circuit import Capacitor, Circuit, PlateParasitic, Switch

POINTS = 400


@dataclass(frozen=True, slots=True)
class Phase:
    """dv/dt = rate @ [v, U]; branch and port currents and node potentials are linear in [v, U] too."""

    rate: np.ndarray
    resistor_currents: np.ndarray
    port_currents: np.ndarray
    potentials: np.ndarray
    duration: float


def phases_of(circuit: Circuit, frequency: float) -> list[Phase]:
    """Set up each interval of the period."""
    lengths = (circuit.duty / frequency, (1 - circuit.duty) / frequency)
    found = []
    for number, length in enumerate(lengths, start=1):
        found.append(_phase(circuit, number, length - circuit.dead_time))
        if circuit.dead_time:
            found.append(_phase(circuit, 0, circuit.dead_time))
    return found


def _phase(circuit: Circuit, number: int, duration: float) -> Phase:
    capacitors = [(c.plus, c.minus, c.capacitance, c.resistance) for c in circuit.capacitors]
    capacitors += [(p.node, circuit.ports[0], p.capacitance, 0.0) for p in circuit.plates]
    nodes, sources = len(circuit.nodes), len(capacitors)
    # Unknowns: node potentials, capacitor currents, currents out of the three ports.
    size = nodes + sources + 3
    matrix, right = np.zeros((size, size)), np.zeros((size, sources + 2))
    for switch in circuit.switches:
        if switch.phase == number:
            for here, there in ((switch.a, switch.b), (switch.b, switch.a)):
                matrix[here, here] += 1 / switch.resistance
                matrix[here, there] -= 1 / switch.resistance
    for k, (plus, minus, _, resistance) in enumerate(capacitors):
        matrix[plus, nodes + k] += 1
        matrix[minus, nodes + k] -= 1
        matrix[nodes + k, plus] += 1
        matrix[nodes + k, minus] -= 1
        matrix[nodes + k, nodes + k] = -resistance
        right[nodes + k, k] = 1
    for k, port in enumerate(circuit.ports):
        matrix[port, nodes + sources + k] -= 1
        matrix[nodes + sources + k, port] = 1
        if k:
            right[nodes + sources + k, sources + k - 1] = 1
    solution = np.linalg.pinv(matrix, rcond=1e-13) @ right
    currents = solution[nodes : nodes + sources]
    potentials = solution[:nodes]
    branch = np.zeros((len(circuit.switches) + len(circuit.capacitors), sources + 2))
    for k, switch in enumerate(circuit.switches):
        if switch.phase == number:
            branch[k] = (potentials[switch.a] - potentials[switch.b]) / switch.resistance
    branch[len(circuit.switches) :] = currents[: len(circuit.capacitors)]
    rate = currents / np.array([c[2] for c in capacitors])[:, None]
    return Phase(rate, branch, solution[nodes + sources + 1 :], potentials, duration)


def _step(phase: Phase, time: float) -> np.ndarray:
    """Transition matrix of [v, U, integrals of v, charges out of input and output]."""
    states = phase.rate.shape[0]
    size = states + 2 + states + 2
    full = np.zeros((size, size))
    full[:states, : states + 2] = phase.rate
    full[states + 2 : 2 * states + 2, :states] = np.eye(states)
    full[2 * states + 2 :, : states + 2] = phase.port_currents
    return expm(full * time)


def steady(circuit: Circuit, frequency: float, ports: tuple[float, float]) -> dict[str, np.ndarray]:
    """Find everything at given input and output voltages."""
    phases = phases_of(circuit, frequency)
    states = phases[0].rate.shape[0]
    n, wide = len(circuit.capacitors), 2 * states + 4
    whole = np.eye(wide)
    for phase in phases:
        whole = _step(phase, phase.duration) @ whole
    v = np.linalg.solve(
        np.eye(states) - whole[:states, :states], whole[:states, states : states + 2] @ np.array(ports)
    )
    start = np.concatenate([v, ports, np.zeros(states + 2)])
    end = whole @ start
    low, high = np.full(n, np.inf), np.full(n, -np.inf)
    switch_low, switch_high = np.full((2, len(circuit.switches)), [[np.inf], [-np.inf]])
    squares, port_squares = 0.0, 0.0
    state = start
    for index, phase in enumerate(phases):
        trace, before = sample(phase, state), state
        state = _step(phase, phase.duration) @ state
        low, high = np.minimum(low, trace[:, :n].min(0)), np.maximum(high, trace[:, :n].max(0))
        products = mean_products(phase, before)
        squares += np.einsum("ij,jk,ik->i", phase.resistor_currents, products, phase.resistor_currents)
        port_squares += np.einsum("ij,jk,ik->i", phase.port_currents, products, phase.port_currents)
        number = index + 1 if len(phases) == 2 else (1, 0, 2, 0)[index]
        if number:
            potentials = trace @ phase.potentials.T
            for k, switch in enumerate(circuit.switches):
                if switch.phase != number:
                    across = potentials[:, switch.a] - potentials[:, switch.b]
                    switch_low[k] = min(switch_low[k], across.min())
                    switch_high[k] = max(switch_high[k], across.max())
    rms = np.sqrt(squares * frequency)
    return {
        "mean": end[states + 2 : states + 2 + n] * frequency,
        "currents": end[2 * states + 2 :] * frequency,
        "low": low,
        "high": high,
        "switch_low": switch_low,
        "switch_high": switch_high,
        "switch_rms": rms[: len(circuit.switches)],
        "capacitor_rms": rms[len(circuit.switches) :],
        "port_rms": np.sqrt(port_squares * frequency),
    }


def sample(phase: Phase, state: np.ndarray) -> np.ndarray:
    """Trace [v, U] through an interval, densest at its start."""
    states = phase.rate.shape[0]
    times = [0.0, *(phase.duration * np.logspace(-6, 0, POINTS))]
    return np.array([(_step(phase, time) @ state)[: states + 2] for time in times])


def mean_products(phase: Phase, state: np.ndarray) -> np.ndarray:
    """Integrate z z' over an interval, z = [v, U], by the Kronecker sum that carries z z'."""
    states = phase.rate.shape[0]
    size = states + 2
    generator = np.vstack([phase.rate, np.zeros((2, size))])
    z = state[:size]
    full = np.zeros((size**2 + 1, size**2 + 1))
    full[:-1, :-1] = np.kron(generator, np.eye(size)) + np.kron(np.eye(size), generator)
    full[:-1, -1] = np.kron(z, z)
    return expm(full * phase.duration)[:-1, -1].reshape(size, size)


def random_converter(rng: np.random.Generator, n: int) -> Converter:
    """Draw wirings until one is a converter."""
    while True:
        inner = int(rng.integers(0, n))
        columns = [rng.integers(0, 3 + m, size=(n, 2)) for m in (inner, n - 1 - inner)]
        words = np.hstack(columns)
        if (words[:, 0] == words[:, 1]).any() or (words[:, 2] == words[:, 3]).any():
            continue
        try:
            converter = Converter.of(words.tolist())
        except CapmusterError:
            continue
        if not converter.balance.degenerate:
            return converter


def random_circuit(
    converter: Converter,
    rng: np.random.Generator,
    *,
    series: bool = True,
    plates: bool = False,
    **timing: float,
) -> Circuit:
    """Give a converter unequal values and, in each vertex of each phase, any tree of switches."""
    words = converter.words
    pairs = [(p, p) for p in range(3)]
    for word in words:
        pairs += [(word[0], word[2]), (word[1], word[3])]
    clusters = list(dict.fromkeys(pairs))
    where = {pair: k for k, pair in enumerate(clusters)}
    switches = []
    for phase in (1, 2):
        for vertex in sorted({pair[phase - 1] for pair in clusters}):
            members = [k for k, pair in enumerate(clusters) if pair[phase - 1] == vertex]
            for place in range(1, len(members)):
                other = members[int(rng.integers(0, place))]
                name = f"S{len(switches) + 1}"
                switches.append(Switch(name, members[place], other, phase, float(10 ** rng.uniform(-1, 1))))
    capacitors = tuple(
        Capacitor(
            f"C{i + 1}",
            where[word[0], word[2]],
            where[word[1], word[3]],
            float(10 ** rng.uniform(-1, 1)),
            float(10 ** rng.uniform(-2, 0)) if series else 0.0,
        )
        for i, word in enumerate(words)
    )
    # Nodes of ports are held, and two plates on one node would make a loop that the oracle cannot solve.
    free = sorted({c.minus for c in capacitors} - {0, 1, 2})
    parasitics = tuple(
        PlateParasitic(f"P{node}", node, float(10 ** rng.uniform(-2, 0))) for node in free if plates
    )
    names = tuple(str(k) for k in range(len(clusters)))
    return Circuit(names, (0, 1, 2), capacitors, tuple(switches), parasitics, **timing)
