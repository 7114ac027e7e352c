"""Choices of classes and switch trees for one converter, and the candidates that they make."""

from __future__ import annotations

from dataclasses import dataclass, replace
from fractions import Fraction
from itertools import islice, product
from typing import TYPE_CHECKING, TypeAlias

import numpy as np

from capmuster.enumerate.converters import table_of
from capmuster.rank.design.classprices import merged
from capmuster.rank.design.operation import Candidates
from capmuster.rank.evaluation import choose_elements
from capmuster.rank.inputs.technology import Choice as ClassChoice
from capmuster.rank.scores.networktable import network_table
from capmuster.rank.scores.switching import Switch, SwitchNetwork, switch_network
from capmuster.rank.scores.switchtable import SwitchTable

if TYPE_CHECKING:
    from collections.abc import Sequence

    from capmuster.enumerate.converters import ConverterTable
    from capmuster.enumerate.wiring import Converter
    from capmuster.rank.design.optioncosts import OptionSet
    from capmuster.rank.design.trees import VertexTrees
    from capmuster.rank.inputs.brief import Brief

_O = 2
MOST_CHOICES = 3000
"""Choices of one converter that are sized at once."""

VertexChoice: TypeAlias = tuple[int, tuple[int, ...]]


@dataclass(frozen=True, slots=True)
class Choice:
    """Everything that is chosen.

    Attributes
    ----------
    capacitors
        Class of each.
    vertices
        For each vertex its tree, and the class of each of its switches.
    """

    capacitors: tuple[int, ...]
    vertices: tuple[VertexChoice, ...]


def start_of(converter: Converter, brief: Brief) -> tuple[SwitchNetwork, Candidates]:
    """Make a candidate of a converter, with its chains and with classes by least area."""
    network = switch_network(converter)
    table = table_of([converter])
    switches = network_table(table, network)
    return network, Candidates(table, switches, choose_elements(table, switches, brief), brief)


def least_impedances(options: OptionSet) -> list[Choice]:
    """Choose the switches of least fast limit on a given area, with all classes of the capacitors."""
    vertices = []
    for vertex, fast in zip(options.vertices, options.fast, strict=True):
        costs = np.sqrt(fast)
        total = np.nan_to_num(vertex.charges) @ np.nan_to_num(costs.min(axis=1), posinf=1e30)
        tree = int(np.argmin(total))
        vertices.append((tree, tuple(int(np.argmin(costs[p])) for p in edges_of(vertex, tree))))
    count, classes = options.slow.shape
    every = islice(product(range(classes), repeat=count), MOST_CHOICES)
    return [Choice(one, tuple(vertices)) for one in every]


def edges_of(vertex: VertexTrees, tree: int) -> list[int]:
    """Columns of the pairs that a tree joins."""
    return np.flatnonzero(np.isfinite(vertex.charges[tree])).tolist()


def build(
    start: Candidates, network: SwitchNetwork, options: OptionSet, choices: Sequence[Choice]
) -> Candidates:
    """Make candidates of choices, one row each."""
    count = len(choices)
    table = start.table.take(np.zeros(count, dtype=np.intp))
    switches = _switch_rows(table, network, options, choices)
    elements = choose_elements(table, switches, start.brief)
    capacitors = np.array([one.capacitors for one in choices])
    classes = np.array([[k for _, each in one.vertices for k in each] for one in choices])
    series = np.array(
        [
            [
                options.series[v][p, k]
                for v, (tree, each) in enumerate(one.vertices)
                for p, k in zip(edges_of(options.vertices[v], tree), each, strict=True)
            ]
            for one in choices
        ]
    )
    own = np.arange(capacitors.shape[1])
    technology = start.brief.technology
    capacitor_series = options.capacitor_series[own, capacitors]
    chosen = ClassChoice(classes, series, series**2 * technology.switch_columns().resistance[classes])
    return Candidates(
        table,
        switches,
        replace(
            elements,
            capacitor_choice=ClassChoice(
                capacitors,
                capacitor_series,
                capacitor_series**2 / technology.capacitor_columns().density[capacitors],
            ),
            switch_choice=merged(switches.charges > 0, chosen, elements.switch_choice),
        ),
        start.brief,
    )


def _switch_rows(
    table: ConverterTable, network: SwitchNetwork, options: OptionSet, choices: Sequence[Choice]
) -> SwitchTable:
    """Write the switches of every choice, vertex by vertex."""
    output, scale = abs(int(table.port_charges[0, _O])), int(table.scale[0])
    rows: list[list[tuple[int, ...]]] = []
    for one in choices:
        row = []
        for vertex, (tree, _) in zip(options.vertices, one.vertices, strict=True):
            for p in edges_of(vertex, tree):
                ends = [network.clusters[k].vertices[2 - vertex.phase] for k in vertex.pairs[p]]
                charge, blocked = vertex.charges[tree, p] * output, vertex.blocking[p] * scale
                row.append((round(charge), round(blocked), vertex.phase, vertex.vertex, *ends))
        rows.append(row)
    values = np.array(rows, dtype=np.int64)
    phase, here, high, low = (values[..., k].astype(np.int8) for k in range(2, 6))
    count = np.full(len(choices), values.shape[1])
    return SwitchTable(values[..., 0], values[..., 1], phase, here, high, low, count)


def with_switches(network: SwitchNetwork, candidate: Candidates) -> SwitchNetwork:
    """Put a candidate's switches into the network of its clusters."""
    table, rows = candidate.table, candidate.switches
    output, scale = abs(int(table.port_charges[0, _O])), int(table.scale[0])
    at = {cluster.vertices: k for k, cluster in enumerate(network.clusters)}
    switches = []
    for j in range(int(rows.count[0])):
        phase, here = int(rows.phase[0, j]), int(rows.vertex[0, j])
        ends = [int(rows.high[0, j]), int(rows.low[0, j])]
        high, low = (at[(here, there) if phase == 1 else (there, here)] for there in ends)
        switches.append(
            Switch(
                name=f"S{j + 1}",
                clusters=(high, low),
                nodes=(network.clusters[high].name, network.clusters[low].name),
                phase=phase,
                multiplier=Fraction(int(rows.charges[0, j]), output),
                blocking_voltage=Fraction(int(rows.blocking[0, j]), scale),
            )
        )
    return SwitchNetwork(network.clusters, tuple(switches))
