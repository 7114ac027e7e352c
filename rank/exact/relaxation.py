r"""How a switched network relaxes while a fixed set of its resistances conducts.

Between two switching instants the circuit is a network of capacitors and resistors between stiff ports, so it
has real, non-positive modes. With `y` the potentials of the capacitor-connected groups, each relative to one
of its own nodes (a group that holds a stiff port: relative to ground), and `L L' = C` the Cholesky factor of
their capacitance matrix, the coordinates `w = L' y` measure stored energy as :math:`|w|^2/2`, and

.. math:: w' = -J'(J w + J_P U), \qquad J = P \Sigma V'

where `J` holds the resistive branches weighted by the root of their conductance, after projecting out the
common potentials of floating groups. The singular value decomposition gives the rates
:math:`\lambda = \sigma^2`, the directions `V` and the targets :math:`V' w \to -\Sigma^{-1} P' J_P U`. What
`V` does not span rests. The number of relaxing modes is counted on the graph, never by a threshold, so slow
modes stay slow and resting ones rest, whatever the spread of values. Loops of capacitors with each other or
with stiff ports need no special case, since only potentials of groups are states.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt
from scipy.linalg import lapack

from capmuster.enumerate.errors import CapmusterError

if TYPE_CHECKING:
    from collections.abc import Sequence

Array = npt.NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Network:
    """A network as plain arrays; `conducting` says which resistances conduct in which interval.

    Attributes
    ----------
    node_count
        Number of nodes.
    ports
        The stiff nodes, the reference (0 V) first.
    capacitor_ends, resistor_ends
        Pairs of nodes (from, to).
    capacitances, resistances
        Values [F], [ohm].
    conducting
        For each interval the indices of the resistances that conduct.
    """

    node_count: int
    ports: tuple[int, ...]
    capacitor_ends: tuple[tuple[int, int], ...]
    capacitances: tuple[float, ...]
    resistor_ends: tuple[tuple[int, int], ...]
    resistances: tuple[float, ...]
    conducting: tuple[tuple[int, ...], ...]


@dataclass(frozen=True, slots=True)
class Storage:
    """The states: what the capacitors can hold.

    Attributes
    ----------
    voltages
        Capacitor voltages per state, shape (capacitors, states).
    voltages_of_ports
        Capacitor voltages per port voltage, shape (capacitors, ports - 1).
    charges
        Capacitor charge per state, `C` times `voltages`.
    start
        State per port voltage when every capacitor is empty and the ports step, shape (states, ports - 1).
    state_nodes
        Node whose potential (relative to its group) each unscaled state is, shape (states,).
    inverse_factor
        Inverse of the transposed Cholesky factor, `y = inverse_factor @ w`.
    groups
        For each node its floating group, or -1 if its group holds a port.
    group_count
        Number of floating groups.
    """

    voltages: Array
    voltages_of_ports: Array
    charges: Array
    start: Array
    state_nodes: npt.NDArray[np.intp]
    inverse_factor: Array
    groups: tuple[int, ...]
    group_count: int


@dataclass(frozen=True, slots=True)
class Interval:
    """The relaxing modes of one interval; `a` is the distance of a mode from its target, `a exp(-rate t)`.

    Attributes
    ----------
    rates
        Shape (modes,) [1/s].
    directions
        Orthonormal, shape (states, modes).
    targets
        Modal coordinate at rest per port voltage, shape (modes, ports - 1).
    resistors
        Indices of the conducting resistances.
    currents
        Current from end to end of each conducting resistance per modal distance, shape (resistors, modes).
    port_currents
        Current out of each port into the network per modal distance times its rate, shape (ports - 1, modes).
    potentials, potentials_of_ports
        Potential of every node per state and per port voltage, shapes (nodes, states), (nodes, ports - 1).
    referenced
        For each node whether a conducting path or a capacitor ties it to a port; others float freely.
    """

    rates: Array
    directions: Array
    targets: Array
    resistors: tuple[int, ...]
    currents: Array
    port_currents: Array
    potentials: Array
    potentials_of_ports: Array
    referenced: npt.NDArray[np.bool_]


def _components(count: int, edges: Sequence[tuple[int, int]]) -> list[int]:
    """Label the connected components of a graph by their least vertex."""
    label = list(range(count))
    for a, b in edges:
        while label[a] != a:
            a = label[a]  # noqa: PLW2901 - climbing to the root
        while label[b] != b:
            b = label[b]  # noqa: PLW2901
        if a < b:
            label[b] = a
        elif b < a:
            label[a] = b
    for vertex in range(count):
        label[vertex] = label[label[vertex]]
    return label


def _incidence(ends: Sequence[tuple[int, int]], count: int) -> Array:
    matrix = np.zeros((len(ends), count))
    if ends:
        rows = np.arange(len(ends))
        pairs = np.asarray(ends)
        matrix[rows, pairs[:, 0]] += 1.0
        matrix[rows, pairs[:, 1]] -= 1.0
    return matrix


def storage_of(network: Network) -> Storage:
    """Find the states of a network.

    Parameters
    ----------
    network
        The network; its resistances do not matter here.

    Returns
    -------
    Storage
        The states in energy coordinates.
    """
    component = _components(network.node_count, network.capacitor_ends)
    stiff = {component[port] for port in network.ports}
    ports = set(network.ports)
    number: dict[int, int] = {}
    state_nodes: list[int] = []
    groups: list[int] = []
    for node, root in enumerate(component):
        if root in stiff:
            groups.append(-1)
            if node not in ports:
                state_nodes.append(node)
        elif root == node:
            # The least node of a floating group is the one that the others are measured from.
            number[node] = len(number)
            groups.append(number[node])
        else:
            groups.append(number[root])
            state_nodes.append(node)
    picked = np.array(state_nodes, dtype=np.intp)
    incidence = _incidence(network.capacitor_ends, network.node_count)
    capacitances = np.asarray(network.capacitances)
    of_states = incidence[:, picked]
    of_ports = incidence[:, list(network.ports[1:])]
    weighted = of_states * capacitances[:, None]
    factor = np.linalg.cholesky(of_states.T @ weighted)
    inverse = lapack.dtrtri(factor, lower=1)[0].T if len(picked) else np.zeros((0, 0))
    charges = weighted @ inverse
    return Storage(
        voltages=of_states @ inverse,
        voltages_of_ports=of_ports,
        charges=charges,
        start=-(charges.T @ of_ports),
        state_nodes=picked,
        inverse_factor=inverse,
        groups=tuple(groups),
        group_count=len(number),
    )


def interval_of(network: Network, storage: Storage, conducting: tuple[int, ...]) -> Interval:
    """Find the relaxing modes while some resistances conduct.

    Parameters
    ----------
    network, storage
        The network and its states.
    conducting
        Indices of the conducting resistances.

    Returns
    -------
    Interval
        Its modes.

    Raises
    ------
    CapmusterError
        The conducting resistances tie two stiff ports together.
    """
    nodes, ports = network.node_count, network.ports
    ends = [network.resistor_ends[index] for index in conducting]
    tied = _components(nodes, ends)
    stiff = {tied[port] for port in ports}
    if len(stiff) < len(ports):
        raise CapmusterError("two stiff ports are tied together by switches of the same phase")

    # Groups that conduct to each other and to no port share a free common potential: fix one of them at 0.
    group = [vertex + 1 for vertex in storage.groups]
    joined = _components(storage.group_count + 1, [(group[a], group[b]) for a, b in ends])
    kept = [vertex for vertex in range(1, storage.group_count + 1) if joined[vertex] != vertex]
    free_nodes = nodes - len(ports)
    adrift = sum(1 for node in range(nodes) if tied[node] == node and node not in stiff)
    mode_count = (free_nodes - adrift) - len(kept)

    incidence = _incidence(ends, nodes)
    weight = np.sqrt(1.0 / np.array([network.resistances[index] for index in conducting]))[:, None]
    weighted = incidence * weight
    membership = np.zeros((nodes, len(kept)))
    column = {vertex: index for index, vertex in enumerate(kept)}
    for node, vertex in enumerate(group):
        if vertex in column:
            membership[node, column[vertex]] = 1.0
    of_ports = weighted[:, list(ports[1:])]
    of_states = weighted[:, storage.state_nodes] @ storage.inverse_factor
    basis, triangle = np.linalg.qr(weighted @ membership)
    shares_of_states, shares_of_ports = basis.T @ of_states, basis.T @ of_ports

    left, sigma, right = np.linalg.svd(of_states - basis @ shares_of_states, full_matrices=False)
    left, sigma, directions = left[:, :mode_count], sigma[:mode_count], right[:mode_count].T
    targets = -(left.T @ of_ports) / sigma[:, None]

    # Common potentials of the floating groups follow from the states by Kirchhoff's current law.
    lift = membership @ np.linalg.inv(triangle) if kept else np.zeros((nodes, 0))
    potentials = -(lift @ shares_of_states)
    potentials[storage.state_nodes] += storage.inverse_factor
    potentials_of_ports = -(lift @ shares_of_ports)
    potentials_of_ports[list(ports[1:]), range(len(ports) - 1)] += 1.0
    return Interval(
        rates=sigma * sigma,
        directions=directions,
        targets=targets,
        resistors=conducting,
        currents=-(weight * left) * sigma,
        port_currents=targets.T + (storage.voltages_of_ports.T @ storage.charges) @ directions,
        potentials=potentials,
        potentials_of_ports=potentials_of_ports,
        referenced=np.array([joined[vertex] == 0 for vertex in group]),
    )
