"""Hard-wired nodes and the switches of one converter, exactly.

Plates and ports that share a vertex in both phases form one hard-wired node, a *cluster*. Inside a vertex the
clusters are tied together by switches. A switch that closes there blocks, in the other phase, the difference
of its clusters' potentials in that phase; these lie on a line, so the chain sorted by them has the least sum
of |charge| x |blocking voltage| of all trees (optimal transport on a line).
"""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction
from itertools import groupby, pairwise
from typing import TYPE_CHECKING

from capmuster.enumerate.wiring import CONVERTER_PORTS, N_PORTS

if TYPE_CHECKING:
    from collections.abc import Iterable, Iterator, Sequence

    from capmuster.enumerate.wiring import Converter

_MOST_ORDERED = 10


@dataclass(frozen=True, slots=True)
class Cluster:
    """A hard-wired node.

    Attributes
    ----------
    name
        The port's letter, or else its first plate, such as ``C1+``.
    vertices
        Vertex of phase 1 and of phase 2 that it belongs to.
    potentials
        Potential in phase 1 and in phase 2, per volt of input.
    plates
        ``(capacitor, +1 or -1)`` for each plate on it, capacitors counted from 0.
    port
        The port's letter, or None.
    charges
        Charge that flows into the capacitors and out of the port here in phase 1 and in phase 2, per unit of
        output charge: what the switches have to bring.
    """

    name: str
    vertices: tuple[int, int]
    potentials: tuple[Fraction, Fraction]
    plates: tuple[tuple[int, int], ...]
    port: str | None
    charges: tuple[Fraction, Fraction]


@dataclass(frozen=True, slots=True)
class Switch:
    """A switch between two clusters.

    Attributes
    ----------
    name
        ``S1``, ``S2``, ...
    clusters
        Indices of its two clusters; the first is the positive one while the switch blocks.
    nodes
        Names of these clusters.
    phase
        Phase in which it is closed, 1 or 2.
    multiplier
        a_r: charge through it per cycle over output charge, not negative.
    blocking_voltage
        Voltage across it while it is open, per volt of input, not negative.
    """

    name: str
    clusters: tuple[int, int]
    nodes: tuple[str, str]
    phase: int
    multiplier: Fraction
    blocking_voltage: Fraction


@dataclass(frozen=True, slots=True)
class SwitchNetwork:
    """All clusters and switches of a converter."""

    clusters: tuple[Cluster, ...]
    switches: tuple[Switch, ...]

    @property
    def clean(self) -> bool:
        """Whether every switch carries charge and blocks voltage."""
        return all(switch.multiplier and switch.blocking_voltage for switch in self.switches)


def switch_network(converter: Converter) -> SwitchNetwork:
    """Find the clusters, and the optimal chain of switches in every vertex of both phases."""
    clusters = _clusters(converter)
    switches: list[Switch] = []
    for phase in (0, 1):
        for vertex in range(N_PORTS + converter.internal_nodes(phase + 1)):
            inside = [i for i, cluster in enumerate(clusters) if cluster.vertices[phase] == vertex]
            for low, high, charge in _chain(clusters, inside, phase):
                blocking = clusters[high].potentials[1 - phase] - clusters[low].potentials[1 - phase]
                switches.append(
                    Switch(
                        name=f"S{len(switches) + 1}",
                        clusters=(high, low),
                        nodes=(clusters[high].name, clusters[low].name),
                        phase=phase + 1,
                        multiplier=abs(charge),
                        blocking_voltage=blocking,
                    )
                )
    return SwitchNetwork(clusters, tuple(switches))


def _clusters(converter: Converter) -> tuple[Cluster, ...]:
    balance = converter.balance
    output = Fraction(abs(balance.port_charges[2]))
    plates: dict[tuple[int, int], list[tuple[int, int]]] = {(port, port): [] for port in range(N_PORTS)}
    for i, (plus1, minus1, plus2, minus2) in enumerate(converter.words):
        plates.setdefault((plus1, plus2), []).append((i, 1))
        plates.setdefault((minus1, minus2), []).append((i, -1))
    found = []
    for (first, second), on_it in plates.items():
        port = CONVERTER_PORTS[first] if first == second and first < N_PORTS else None
        into = sum((sign * balance.charges[i] for i, sign in on_it), start=0) / output
        brought = [into, -into]
        if port is not None:
            # Kirchhoff's current law over the vertex: the port makes up for all other plates there.
            for phase in (0, 1):
                brought[phase] = -_others(converter, first, phase, on_it) / output
        sign = {1: "+", -1: "-"}
        name = port or "{}{}".format(f"C{on_it[0][0] + 1}", sign[on_it[0][1]])
        found.append(
            Cluster(
                name=name,
                vertices=(first, second),
                potentials=(balance.potentials[0][first], balance.potentials[1][second]),
                plates=tuple(on_it),
                port=port,
                charges=(Fraction(brought[0]), Fraction(brought[1])),
            )
        )
    return tuple(found)


def _others(converter: Converter, vertex: int, phase: int, own: Sequence[tuple[int, int]]) -> Fraction:
    """Charge into the plates that meet a port's vertex in one phase and are not wired to the port."""
    total = 0
    for i, word in enumerate(converter.words):
        taken = converter.balance.charges[i] * (1 if phase == 0 else -1)
        for sign, v in ((1, word[2 * phase]), (-1, word[2 * phase + 1])):
            if v == vertex and (i, sign) not in own:
                total += sign * taken
    return Fraction(total)


def _chain(
    clusters: Sequence[Cluster], inside: Iterable[int], phase: int
) -> Iterator[tuple[int, int, Fraction]]:
    """Yield the chain's links: lower cluster, upper cluster, charge through the switch between them."""
    ordered = sorted(inside, key=lambda i: (clusters[i].potentials[1 - phase], i))
    line: list[int] = []
    carried = Fraction(0)
    for _, tied in groupby(ordered, key=lambda i: clusters[i].potentials[1 - phase]):
        best = _least_carrying([(i, clusters[i].charges[phase]) for i in tied], carried)
        line += best
        carried += sum(clusters[i].charges[phase] for i in best)
    passed = Fraction(0)
    for low, high in pairwise(line):
        passed += clusters[low].charges[phase]
        yield low, high, passed


def _least_carrying(tied: Sequence[tuple[int, Fraction]], carried: Fraction) -> list[int]:
    """Order clusters of equal potential: least sum of |charge| through the switches, then by name.

    ``carried`` is the charge from the clusters below. The order is the best of all, by dynamic programming
    over the clusters already placed. Above `_MOST_ORDERED` clusters it is greedy: the next cluster is the one
    that leaves the least charge to carry on.
    """
    if len(tied) > _MOST_ORDERED:
        remaining, line = list(tied), []
        while remaining:
            following = min(remaining, key=lambda pair: abs(carried + pair[1]))
            remaining.remove(following)
            carried += following[1]
            line.append(following[0])
        return line
    # Least sum from each set of placed clusters to the end, with the first cluster that attains it.
    everything = (1 << len(tied)) - 1
    onward: list[tuple[Fraction, int]] = [(Fraction(0), -1)] * (everything + 1)
    for placed in reversed(range(everything)):
        passed = carried + sum(charge for k, (_, charge) in enumerate(tied) if placed >> k & 1)
        onward[placed] = min(
            (abs(passed + charge) + onward[placed | 1 << k][0], k)
            for k, (_, charge) in enumerate(tied)
            if not placed >> k & 1
        )
    line, placed = [], 0
    while placed != everything:
        k = onward[placed][1]
        line.append(tied[k][0])
        placed |= 1 << k
    return line
