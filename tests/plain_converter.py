"""One converter, slowly and plainly: the oracle for wirings of any size.

It shares nothing with ``capmuster``: fractions are eliminated row by row, the best switches of a vertex are
found among all trees, and sameness is decided by networkx (Weisfeiler-Lehman colours, then the isomorphism
test VF2++). Ports are three names, G, I, O in a converter and A, B, C in a cell; any other name is an
internal node of its phase.
"""

from __future__ import annotations

from collections import defaultdict
from dataclasses import dataclass
from fractions import Fraction
from itertools import pairwise, product
from math import gcd, lcm
from typing import TYPE_CHECKING

import networkx as nx

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence

Phase = tuple[tuple[str, str], ...]
"""Where each capacitor sits in one phase: (vertex of its plus plate, vertex of its minus plate)."""

ROLES = ("G", "I", "O")


@dataclass(frozen=True, slots=True)
class Balance:
    """Charges and potentials of one wiring, up to one common factor each, the first port at zero."""

    charges: tuple[int, ...]
    port_charges: tuple[int, ...]
    potentials: tuple[dict[str, Fraction], dict[str, Fraction]]
    voltages: tuple[Fraction, ...]


def null_space(rows: Sequence[Sequence[int]], columns: int) -> list[list[Fraction]]:
    """Basis of the null space, by Gauss-Jordan elimination in fractions."""
    left = [[Fraction(x) for x in row] for row in rows]
    pivots: list[int] = []
    done: list[list[Fraction]] = []
    for column in range(columns):
        row = next((r for r in left if r[column]), None)
        if row is None:
            continue
        left = [r for r in left if r is not row]
        row = [x / row[column] for x in row]
        left = [[x - r[column] * y for x, y in zip(r, row, strict=True)] for r in left]
        done = [[x - r[column] * y for x, y in zip(r, row, strict=True)] for r in done]
        done.append(row)
        pivots.append(column)
    basis = []
    for column in range(columns):
        if column not in pivots:
            vector = [Fraction(int(i == column)) for i in range(columns)]
            for pivot, row in zip(pivots, done, strict=True):
                vector[pivot] = -row[column]
            basis.append(vector)
    return basis


def whole(vector: Sequence[Fraction]) -> tuple[int, ...]:
    """Scale a vector to coprime integers."""
    scaled = [int(x * lcm(*(y.denominator for y in vector))) for x in vector]
    return tuple(x // (gcd(*scaled) or 1) for x in scaled)


def vertices(phase: Phase, ports: Sequence[str]) -> list[str]:
    """Ports, then the internal nodes in the order in which they are met."""
    return list(dict.fromkeys([*ports, *(vertex for place in phase for vertex in place)]))


def incidence(phase: Phase, vertex: str) -> list[int]:
    """One row of the incidence matrix of a phase."""
    return [(plus == vertex) - (minus == vertex) for plus, minus in phase]


def balance(phase1: Phase, phase2: Phase, ports: Sequence[str]) -> Balance | None:
    """Solve charge balance and potentials; None where the wiring is no irreducible cell.

    Capacitor ``i`` takes charge ``q_i`` in phase 1 and gives it back in phase 2, and no internal node keeps
    any: this must fix the charges up to a common factor, and none may be zero. Potentials are solved from the
    capacitors instead (each keeps its voltage), and must agree with the port charges (energy balance).
    """
    n = len(phase1)
    inner1 = vertices(phase1, ports)[3:]
    inner2 = vertices(phase2, ports)[3:]
    rows = [incidence(phase1, a) for a in inner1] + [incidence(phase2, a) for a in inner2]
    charge_space = null_space(rows, n)
    if len(charge_space) != 1 or not all(charge_space[0]):
        return None
    charges = whole(charge_space[0])
    port_charges = tuple(
        sum(q * (x - y) for q, x, y in zip(charges, incidence(phase1, t), incidence(phase2, t), strict=True))
        for t in ports
    )
    if not any(port_charges):
        return None

    unknowns = [(0, t) for t in ports] + [(1, a) for a in inner1] + [(2, a) for a in inner2]
    equations = [[1] + [0] * (len(unknowns) - 1)]  # the first port is the reference
    for place1, place2 in zip(phase1, phase2, strict=True):
        equation = [0] * len(unknowns)
        for number, place, sign in ((1, place1, 1), (2, place2, -1)):
            for vertex, plate in zip(place, (sign, -sign), strict=True):
                equation[unknowns.index((0 if vertex in ports else number, vertex))] += plate
        equations.append(equation)
    (solution,) = null_space(equations, len(unknowns))
    value = dict(zip(unknowns, solution, strict=True))
    if sum(g * value[0, t] for g, t in zip(port_charges, ports, strict=True)) != 0:
        raise AssertionError("energy balance contradicts the capacitor voltages")
    potentials = (
        {v: value[0 if v in ports else 1, v] for v in vertices(phase1, ports)},
        {v: value[0 if v in ports else 2, v] for v in vertices(phase2, ports)},
    )
    voltages = tuple(potentials[0][plus] - potentials[0][minus] for plus, minus in phase1)
    return Balance(charges, port_charges, potentials, voltages)


def clusters_by_vertex(
    phase1: Phase, phase2: Phase, ports: Sequence[str], solved: Balance
) -> list[list[tuple[Fraction, Fraction]]]:
    """For each vertex of each phase its clusters, as (charge that leaves it, potential in the other phase).

    A cluster is what shares a vertex in both phases: plates, or a port with plates. A port takes what the
    rest of its vertex leaves over.
    """
    charge: dict[tuple[str, str], Fraction] = defaultdict(Fraction)
    for q, place1, place2 in zip(solved.charges, phase1, phase2, strict=True):
        charge[place1[0], place2[0]] += q
        charge[place1[1], place2[1]] -= q
    for t in ports:
        charge[t, t] += 0
    groups = []
    for phase in (0, 1):
        for vertex in solved.potentials[phase]:
            members = [c for c in charge if c[phase] == vertex]
            loads = {c: charge[c] for c in members}
            if vertex in ports:
                loads[vertex, vertex] -= sum(loads.values())
            groups.append([(loads[c], solved.potentials[1 - phase][c[1 - phase]]) for c in members])
    return groups


def chain(clusters: Sequence[tuple[Fraction, Fraction]]) -> list[tuple[Fraction, Fraction]]:
    """Switches of the chain in order of potential, as (charge carried, voltage blocked)."""
    ordered = sorted(clusters, key=lambda cluster: cluster[1])
    switches = []
    carried = Fraction(0)
    for (load, low), (_, high) in pairwise(ordered):
        carried += load
        switches.append((abs(carried), high - low))
    return switches


def all_trees(size: int) -> Iterator[list[tuple[int, int]]]:
    """All labelled trees, one for each Pruefer code, edges in the order in which leaves fall off."""
    for code in product(range(size), repeat=max(size - 2, 0)):
        degree = [1 + code.count(v) for v in range(size)]
        edges = []
        for inner in code:
            leaf = degree.index(1)
            edges.append((leaf, inner))
            degree[leaf] -= 1
            degree[inner] -= 1
        if size > 1:
            edges.append((degree.index(1), size - 1 - degree[::-1].index(1)))
        yield edges


def least_tree_cost(clusters: Sequence[tuple[Fraction, Fraction]]) -> Fraction:
    """Least sum of |charge x blocking voltage| over all trees of switches that tie a vertex together."""
    scale = lcm(*(x.denominator for cluster in clusters for x in cluster))
    loads = [int(load * scale) for load, _ in clusters]
    places = [int(potential * scale) for _, potential in clusters]
    least = None
    for edges in all_trees(len(clusters)):
        gathered = list(loads)
        cost = 0
        for leaf, other in edges:  # a removed leaf sends all that its branch has gathered
            cost += abs(gathered[leaf] * (places[leaf] - places[other]))
            gathered[other] += gathered[leaf]
        least = cost if least is None else min(least, cost)
    return Fraction(least or 0, scale * scale)


def utilisations(
    phase1: Phase, phase2: Phase, ports: Sequence[str], solved: Balance
) -> tuple[Fraction, Fraction]:
    """Capacitor and switch utilisation: energy lifted between the ports over what the elements handle."""
    outer = sorted((solved.potentials[0][t], abs(g)) for t, g in zip(ports, solved.port_charges, strict=True))
    lifted = outer[0][1] * (outer[1][0] - outer[0][0])
    handled = sum(abs(q * v) for q, v in zip(solved.charges, solved.voltages, strict=True))
    switched = sum(map(least_tree_cost, clusters_by_vertex(phase1, phase2, ports, solved)))
    return lifted / handled, 4 * lifted / switched


def wiring_graph(phase1: Phase, phase2: Phase, ports: Sequence[str]) -> nx.Graph:
    """Graph whose isomorphisms are the renamings of a wiring: capacitors, plates, nodes, phases.

    The ports of a cell may be renamed too; those of a converter (G, I, O) are kept. Nodes are coloured by the
    Weisfeiler-Lehman refinement of their kinds, which every isomorphism respects.
    """
    graph = nx.Graph()
    for t in ports:
        graph.add_node(("port", t), kind=t if t in ROLES else "port")
    for number, phase in ((1, phase1), (2, phase2)):
        graph.add_node(("phase", number), kind="phase")
        for vertex in vertices(phase, ports):
            graph.add_node((number, vertex), kind="vertex")
            graph.add_edge((number, vertex), ("phase", number))
            if vertex in ports:
                graph.add_edge((number, vertex), ("port", vertex))
    for i, (place1, place2) in enumerate(zip(phase1, phase2, strict=True)):
        graph.add_node(("capacitor", i), kind="capacitor")
        for sign in (0, 1):
            plate = ("plate", i, sign)
            graph.add_node(plate, kind="plate")
            graph.add_edges_from(
                [(plate, ("capacitor", i)), (plate, (1, place1[sign])), (plate, (2, place2[sign]))]
            )
    hashes = nx.weisfeiler_lehman_subgraph_hashes(graph, node_attr="kind", iterations=5)
    nx.set_node_attributes(graph, {node: colours[-1] for node, colours in hashes.items()}, "colour")
    return graph


def symmetries_of(graph: nx.Graph) -> list[dict[tuple[object, ...], tuple[object, ...]]]:
    """All automorphisms of a wiring graph."""
    return list(nx.vf2pp_all_isomorphisms(graph, graph, node_label="colour"))


class GraphIndex:
    """Wirings seen so far, each once up to isomorphism."""

    def __init__(self) -> None:
        self._buckets: dict[tuple[str, ...], list[tuple[nx.Graph, int]]] = defaultdict(list)
        self.size = 0

    def find(self, graph: nx.Graph, *, add: bool = False) -> int | None:
        """Return the number of the wiring that is the same, or None; with `add` a new one is then kept."""
        bucket = self._buckets[tuple(sorted(graph.nodes[node]["colour"] for node in graph))]
        for other, number in bucket:
            if nx.vf2pp_is_isomorphic(other, graph, node_label="colour"):
                return number
        if add:
            bucket.append((graph, self.size))
            self.size += 1
        return None


def read_code(code: str) -> tuple[Phase, Phase]:
    """Read a wiring code."""
    plates = [word.replace("/", "-").split("-") for word in code.split()]
    return tuple((a, b) for a, b, _, _ in plates), tuple((c, d) for _, _, c, d in plates)


def brute_balance(code: str) -> Balance:
    """Charges (coprime), potentials and voltages (per unit of input voltage) of a converter of any size."""
    solved = balance(*read_code(code), ROLES)
    if solved is None or not solved.potentials[0]["I"]:
        raise ValueError(f"no irreducible converter: {code}")
    per_unit = 1 / solved.potentials[0]["I"]
    first, second = ({v: u * per_unit for v, u in phase.items()} for phase in solved.potentials)
    return Balance(
        solved.charges, solved.port_charges, (first, second), tuple(v * per_unit for v in solved.voltages)
    )


def brute_utilisation(code: str) -> tuple[Fraction, Fraction]:
    """Capacitor and switch utilisation of a converter, the latter over all trees of every vertex."""
    return utilisations(*read_code(code), ROLES, brute_balance(code))


def brute_clean(code: str) -> bool:
    """Whether no capacitor voltage is zero and every switch carries charge and blocks a voltage."""
    solved = brute_balance(code)
    groups = clusters_by_vertex(*read_code(code), ROLES, solved)
    return all(solved.voltages) and all(
        charge and voltage for group in groups for charge, voltage in chain(group)
    )


def same_converter(first: str, second: str) -> bool:
    """Whether two wiring codes are one converter, by the isomorphism test of networkx."""
    graphs = [wiring_graph(*read_code(code), ROLES) for code in (first, second)]
    return bool(nx.vf2pp_is_isomorphic(*graphs, node_label="colour"))


def unmatched(first: Sequence[str], second: Sequence[str]) -> tuple[list[str], list[str]]:
    """Wiring codes of either list that have no partner, the same converter, in the other: one to one."""
    index = GraphIndex()
    waiting: dict[int, list[str]] = defaultdict(list)
    for code in first:
        graph = wiring_graph(*read_code(code), ROLES)
        number = index.find(graph, add=True)
        waiting[index.size - 1 if number is None else number].append(code)
    alone = []
    for code in second:
        number = index.find(wiring_graph(*read_code(code), ROLES))
        if number is None or not waiting[number]:
            alone.append(code)
        else:
            waiting[number].pop()
    return [code for codes in waiting.values() for code in codes], alone
