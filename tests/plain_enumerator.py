"""A slow, plain enumerator of cells: the oracle that the census is held against, one by one.

It shares nothing with ``capmuster``: no skeletons, no attachments, no canonical form. A cell is a pair of
phase graphs, and every pair of placements of the capacitors is tried. Only what cannot matter is left out: in
phase 1 the order and polarity of capacitors and the names of nodes and ports.
"""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass
from fractions import Fraction
from functools import cache
from itertools import combinations_with_replacement, permutations, product
from math import factorial, gcd, prod
from typing import TYPE_CHECKING

import networkx as nx
from plain_converter import (
    ROLES,
    Balance,
    GraphIndex,
    Phase,
    balance,
    chain,
    clusters_by_vertex,
    symmetries_of,
    utilisations,
    vertices,
    wiring_graph,
)

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence

PORTS = ("A", "B", "C")
NODES = "abcdefghijklmnopqrstuvwxyz"


@dataclass(frozen=True, slots=True)
class PlainConverter:
    """A cell in one role."""

    wiring: str
    ratio: Fraction


@dataclass(frozen=True, slots=True)
class PlainCell:
    """One cell, with one of its wirings.

    ``labelled`` is the number of cells that become this one when the names of capacitors, plates, phases and
    ports are forgotten; ``symmetries`` the number of renamings that leave the wiring as it is. Unity: exactly
    one port charge is zero. Degenerate: some capacitor voltage is zero; such a cell has no converters and no
    utilisation. A unity cell has no utilisation either: it lifts no energy.
    """

    phase1: Phase
    phase2: Phase
    port_charges: tuple[int, ...]
    triple: tuple[int, ...]
    degenerate: bool
    unity: bool
    clean: bool
    switches: int
    capacitor_utilisation: Fraction | None
    switch_utilisation: Fraction | None
    symmetries: int
    labelled: int
    converters: tuple[PlainConverter, ...]


def hangs_together(phase: Phase, ports: Sequence[str], inner: int) -> bool:
    """All internal nodes are there, each with two plates (else one is idle), and every group has a port."""
    graph = nx.MultiGraph(phase)
    nodes = [vertex for vertex in graph if vertex not in ports]
    return (
        len(nodes) == inner
        and all(graph.degree(vertex) > 1 for vertex in nodes)
        and all(group & set(ports) for group in nx.connected_components(graph))
    )


def renamed(phase: Phase, names: dict[str, str]) -> Phase:
    """Give the vertices of a phase other names."""
    return tuple((names[plus], names[minus]) for plus, minus in phase)


def unordered_phases(n: int, inner: int) -> Iterator[tuple[Phase, int]]:
    """List phases up to the order and polarity of capacitors and the names of ports and internal nodes.

    Each comes with the number of labelled phases (internal nodes unnamed) that it stands for.
    """
    names = [*PORTS, *NODES[:inner]]
    renamings = [
        dict(zip(names, (*ports, *nodes), strict=True))
        for ports in permutations(PORTS)
        for nodes in permutations(NODES[:inner])
    ]
    pairs = [(u, v) for k, u in enumerate(names) for v in names[k + 1 :]]
    seen: set[tuple[frozenset[str], ...]] = set()
    for phase in combinations_with_replacement(pairs, n):
        if not hangs_together(phase, PORTS, inner):
            continue
        alike = {
            tuple(sorted((frozenset(p) for p in renamed(phase, names)), key=sorted)) for names in renamings
        }
        if not alike & seen:
            seen |= alike
            orders = factorial(n) // prod(map(factorial, Counter(phase).values()))
            yield phase, len(alike) * orders * 2**n // factorial(inner)


def ordered_phases(n: int, inner: int) -> list[Phase]:
    """List phases with capacitors and polarities told apart, internal nodes named as they are met."""
    names = [*PORTS, *NODES[:inner]]
    return [
        phase
        for phase in product(permutations(names, 2), repeat=n)
        if hangs_together(phase, PORTS, inner) and vertices(phase, PORTS) == names
    ]


@cache
def plain_census(n: int) -> tuple[tuple[PlainCell, ...], int, int]:
    """List all irreducible cells with ``n`` capacitors.

    Returns
    -------
    cells
        Every cell with three port charges, or exactly one zero port charge, once.
    labelled
        Labelled cells with three port charges, tallied while they were generated.
    labelled_unity
        Labelled cells with exactly one zero port charge, likewise.
    """
    index = GraphIndex()
    cells: list[PlainCell] = []
    tally: Counter[bool] = Counter()
    for inner1 in range(n):
        inner2 = n - 1 - inner1
        if inner1 < inner2:
            continue  # the same with the phases exchanged
        seconds = ordered_phases(n, inner2)
        for phase1, weight in unordered_phases(n, inner1):
            for phase2 in seconds:
                solved = balance(phase1, phase2, PORTS)
                if solved is None:
                    continue
                unity = 0 in solved.port_charges
                tally[unity] += weight * (1 if inner1 == inner2 else 2)
                graph = wiring_graph(phase1, phase2, PORTS)
                if index.find(graph, add=True) is None:
                    cells.append(describe(phase1, phase2, solved, graph))
    return tuple(cells), tally[False], tally[True]


def describe(phase1: Phase, phase2: Phase, solved: Balance, graph: nx.Graph) -> PlainCell:
    """Everything that is known of a cell."""
    n = len(phase1)
    symmetries = symmetries_of(graph)
    degenerate = 0 in solved.voltages
    unity = 0 in solved.port_charges
    groups = clusters_by_vertex(phase1, phase2, PORTS, solved)
    switches = [switch for group in groups for switch in chain(group)]
    scores = None if degenerate or unity else utilisations(phase1, phase2, PORTS, solved)
    return PlainCell(
        phase1=phase1,
        phase2=phase2,
        port_charges=solved.port_charges,
        triple=tuple(sorted(abs(g) // gcd(*solved.port_charges) for g in solved.port_charges)),
        degenerate=degenerate,
        unity=unity,
        clean=not degenerate and all(charge and voltage for charge, voltage in switches),
        switches=len(switches),
        capacitor_utilisation=scores[0] if scores else None,
        switch_utilisation=scores[1] if scores else None,
        symmetries=len(symmetries),
        # orbit-stabiliser: renamings of capacitors, plates, phases and ports
        labelled=factorial(n) * 2**n * 2 * 6 // len(symmetries),
        converters=() if degenerate else converters_of(phase1, phase2, solved, symmetries),
    )


def converters_of(
    phase1: Phase,
    phase2: Phase,
    solved: Balance,
    symmetries: Sequence[dict[tuple[object, ...], tuple[object, ...]]],
) -> tuple[PlainConverter, ...]:
    """All roles of a cell, those that a symmetry exchanges once. In a unity cell ground carries no charge."""
    exchanges = {tuple(s["port", t][1] for t in PORTS) for s in symmetries}
    found = []
    seen: set[tuple[str, ...]] = set()
    for role in permutations(ROLES):
        g = dict(zip(role, solved.port_charges, strict=True))
        if role in seen or g["I"] == 0 or g["O"] == 0:
            continue
        seen |= {tuple(role[PORTS.index(t)] for t in exchange) for exchange in exchanges}
        found.append(PlainConverter(wiring_code(phase1, phase2, role, solved), Fraction(-g["I"], g["O"])))
    return tuple(found)


def wiring_code(phase1: Phase, phase2: Phase, role: Sequence[str], solved: Balance) -> str:
    """Write a converter: one word per capacitor, plus-minus in phase 1 / plus-minus in phase 2.

    Plates are named so that every voltage is positive while the input is positive.
    """
    names: dict[str, str] = dict(zip(PORTS, role, strict=True))
    u = {names[t]: solved.potentials[0][t] for t in PORTS}
    words = []
    inner: tuple[dict[str, str], dict[str, str]] = ({}, {})
    for place1, place2, voltage in zip(phase1, phase2, solved.voltages, strict=True):
        order = slice(None) if voltage * (u["I"] - u["G"]) > 0 else slice(None, None, -1)
        halves = []
        for place, known in ((place1, inner[0]), (place2, inner[1])):
            halves.append(
                "-".join(names.get(v) or known.setdefault(v, NODES[len(known)]) for v in place[order])
            )
        words.append("/".join(halves))
    return " ".join(words)
