"""All trees of switches that can tie the clusters of one vertex together.

With k clusters there are ``k^(k-2)`` trees (Cayley); their Prüfer sequences list each of them once. The
charge through a switch is what the clusters on one side of it bring, whatever the rest of the tree.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from itertools import combinations, product
from typing import TYPE_CHECKING, TypeAlias

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from capmuster.rank.scores.switching import SwitchNetwork

    Floats = NDArray[np.float64]

MOST_CLUSTERS = 6
"""Clusters of a vertex up to which all trees are listed: 1296 of them."""

_PAIR = 2


@dataclass(frozen=True, slots=True)
class VertexTrees:
    """The trees of one vertex of a converter.

    Attributes
    ----------
    phase
        Phase in which its switches are closed, 1 or 2.
    vertex
        The vertex.
    pairs
        Shape (p, 2): clusters that a switch may join; the first has the higher potential in the other phase.
    blocking
        Shape (p,): blocking voltage of such a switch, per volt of input.
    charges
        Shape (trees, p): charge through the switch per output charge; NaN where the tree has none there.
    chain
        Which of the trees is the chain.
    whole
        Whether these are all trees.
    """

    phase: int
    vertex: int
    pairs: NDArray[np.intp]
    blocking: Floats
    charges: Floats
    chain: int
    whole: bool


def trees_of(network: SwitchNetwork, *, chains: bool = False) -> tuple[VertexTrees, ...]:
    """List the trees of every vertex that has two clusters or more.

    Parameters
    ----------
    network
        Clusters and chains of a converter.
    chains
        Whether to list the network's own chains only. Vertices of more than `MOST_CLUSTERS` clusters always
        have nothing but their chain.
    """
    found = []
    for phase in (1, 2):
        inside: dict[int, list[int]] = {}
        for k, cluster in enumerate(network.clusters):
            inside.setdefault(cluster.vertices[phase - 1], []).append(k)
        for vertex, clusters in sorted(inside.items()):
            if len(clusters) >= _PAIR:
                alone = chains or len(clusters) > MOST_CLUSTERS
                found.append(_vertex(network, phase, vertex, clusters, alone=alone))
    return tuple(found)


def _vertex(
    network: SwitchNetwork, phase: int, vertex: int, clusters: list[int], *, alone: bool
) -> VertexTrees:
    there = {k: network.clusters[k].potentials[2 - phase] for k in clusters}
    brought = np.array([float(network.clusters[k].charges[phase - 1]) for k in clusters])
    place = {k: i for i, k in enumerate(clusters)}
    chain = tuple(
        tuple(sorted(place[k] for k in switch.clusters))
        for switch in network.switches
        if switch.phase == phase and switch.clusters[0] in place and switch.clusters[1] in place
    )
    # The chain's own pairs first, in its order: the tree that is the chain lists its switches as it does.
    pairs = list(dict.fromkeys([*chain, *combinations(range(len(clusters)), 2)]))
    column = {pair: j for j, pair in enumerate(pairs)}
    trees = _trees(len(clusters))[0] if not alone else (chain,)
    sides = _trees(len(clusters))[1] if not alone else _sides((chain,), len(clusters))
    moved = np.abs(sides @ brought)
    charges = np.full((len(trees), len(pairs)), np.nan)
    columns = np.array([[column[edge[0], edge[1]] for edge in edges] for edges in trees])
    charges[np.arange(len(trees))[:, None], columns] = np.where(moved < _NOTHING, 0.0, moved)
    ordered = [
        (clusters[i], clusters[j]) if there[clusters[i]] >= there[clusters[j]] else (clusters[j], clusters[i])
        for i, j in pairs
    ]
    return VertexTrees(
        phase=phase,
        vertex=vertex,
        pairs=np.array(ordered, dtype=np.intp),
        blocking=np.array([float(there[high] - there[low]) for high, low in ordered]),
        charges=charges,
        chain=int(np.argmax(np.isfinite(charges[:, : len(chain)]).all(axis=1))),
        whole=not alone,
    )


_NOTHING = 1e-12  # charge multipliers are quotients of small integers


_Edges: TypeAlias = "tuple[tuple[int, ...], ...]"


def _sides(trees: tuple[_Edges, ...], count: int) -> NDArray[np.bool_]:
    """Mark the clusters on the side of each edge's first end, shape (trees, edges, clusters)."""
    found = np.zeros((len(trees), count - 1, count), dtype=bool)
    for t, edges in enumerate(trees):
        for e, cut in enumerate(edges):
            side = {cut[0]}
            for _ in range(count):
                for edge in edges:
                    if edge != cut and (edge[0] in side) != (edge[1] in side):
                        side.update(edge)
            found[t, e, list(side)] = True
    return found


@lru_cache(maxsize=8)
def _trees(count: int) -> tuple[tuple[_Edges, ...], NDArray[np.bool_]]:
    """List all labelled trees of ``count`` vertices by their edges (lesser end first), and their sides."""
    if count == _PAIR:
        listed: tuple[_Edges, ...] = (((0, 1),),)
    else:
        listed = tuple(_decoded(sequence, count) for sequence in product(range(count), repeat=count - 2))
    return listed, _sides(listed, count)


def _decoded(sequence: tuple[int, ...], count: int) -> _Edges:
    """Tree of a Prüfer sequence."""
    degree = [1 + sequence.count(k) for k in range(count)]
    edges = []
    for node in sequence:
        leaf = degree.index(1)
        edges.append((min(leaf, node), max(leaf, node)))
        degree[leaf] -= 1
        degree[node] -= 1
    first, last = (k for k in range(count) if degree[k] == 1)
    edges.append((first, last))
    return tuple(edges)
