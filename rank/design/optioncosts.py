"""What every option of a converter's elements costs at given prices, over the frequency.

The options are the classes of each capacitor, and for each vertex its trees with the classes of their
switches. At prices of limits, area and loss every element adds ``2 sqrt(n c)`` to the Lagrangian, whatever
the other elements are (see `capmuster.rank.sizing.elements`), so the best options are found one by one.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from capmuster.rank.design.gatedrive import rail_driven
from capmuster.rank.design.losses import (
    capacitor_coefficients,
    every_class,
    plate_steps,
    series_counts,
    switch_coefficients,
)
from capmuster.rank.design.trees import VertexTrees, trees_of
from capmuster.rank.scores.switchtable import SwitchTable

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from capmuster.rank.design.operation import Candidates
    from capmuster.rank.design.profile import LossPoint
    from capmuster.rank.scores.switching import SwitchNetwork
    from capmuster.rank.sizing import Prices

    Floats = NDArray[np.float64]

_O = 2


@dataclass(frozen=True, slots=True)
class OptionSet:
    """Coefficients of every option of one converter; see `capmuster.rank.design.losses` for their units.

    Attributes
    ----------
    slow, zeta, plate, leakage
        Of capacitors, shape (n, classes).
    vertices
        The trees of each vertex.
    fast, cycle, still
        For each vertex: of a switch between each pair of clusters, per squared charge multiplier (`fast`),
        shape (pairs, classes); `fast` is inf for a class that may not be used.
    series
        For each vertex: devices in series, shape (pairs, classes).
    capacitor_series
        The same for capacitors, shape (n, classes).
    """

    slow: Floats
    zeta: Floats
    plate: Floats
    leakage: Floats
    capacitor_series: NDArray[np.int64]
    vertices: tuple[VertexTrees, ...]
    fast: tuple[Floats, ...]
    cycle: tuple[Floats, ...]
    still: tuple[Floats, ...]
    series: tuple[NDArray[np.int64], ...]


def option_set(candidate: Candidates, network: SwitchNetwork, points: Sequence[LossPoint]) -> OptionSet:
    """List the options of the one converter of a table.

    Parameters
    ----------
    candidate
        The converter, with its chains as switches in the order of the network.
    network
        The same switches.
    points
        Where losses count.

    Notes
    -----
    In regulated use only chains are listed, since the bound on their voltages is one of chains.
    """
    brief, table = candidate.brief, candidate.table
    technology = brief.technology
    multiplier = np.abs(table.charges / table.port_charges[:, _O, None])[0, :, None]
    held = (np.abs(table.voltages) / table.scale[:, None])[0, :, None]
    series = series_counts(candidate.elements.ratings.capacitors[0], technology.capacitor_columns().limit)
    each = every_class(series)
    parts = [
        capacitor_coefficients(
            technology, each, multiplier, held * one.volts, plate_steps(table)[0, :, None] * one.volts
        )
        for one in points
    ]
    vertices = trees_of(network, chains=brief.use == "regulated")
    switches = [_pair_coefficients(candidate, network, vertex, points) for vertex in vertices]
    return OptionSet(
        slow=parts[0].slow,
        zeta=parts[0].series,
        plate=np.sum([one.cycle * part.plate for one, part in zip(points, parts, strict=True)], axis=0),
        leakage=np.sum([one.still * part.leakage for one, part in zip(points, parts, strict=True)], axis=0),
        capacitor_series=series,
        vertices=vertices,
        fast=tuple(one[0] for one in switches),
        cycle=tuple(one[1] for one in switches),
        still=tuple(one[2] for one in switches),
        series=tuple(one[3] for one in switches),
    )


def _pair_coefficients(
    candidate: Candidates, network: SwitchNetwork, vertex: VertexTrees, points: Sequence[LossPoint]
) -> tuple[Floats, Floats, Floats, NDArray[np.int64]]:
    brief = candidate.brief
    technology = brief.technology
    rated = vertex.blocking * brief.input_maximum
    if brief.use == "regulated":
        rated = _chain_ratings(candidate, network, vertex, rated)
    series = series_counts(rated, technology.switch_columns().limit)
    one = np.ones_like(series, dtype=np.float64)
    parts = [
        switch_coefficients(technology, every_class(series), one, (vertex.blocking * point.volts)[:, None])
        for point in points
    ]
    fast = parts[0].fast
    if brief.drive == "rails":
        able = rail_driven(candidate.table, pair_table(network, vertex), brief)[0]
        fast = np.where(able, fast, np.inf)
    return (
        fast,
        np.sum(
            [
                point.cycle * (part.gate + part.output_charge)
                for point, part in zip(points, parts, strict=True)
            ],
            axis=0,
        ),
        np.sum([point.still * part.leakage for point, part in zip(points, parts, strict=True)], axis=0),
        series,
    )


def _chain_ratings(
    candidate: Candidates, network: SwitchNetwork, vertex: VertexTrees, rated: Floats
) -> Floats:
    """Voltages that the switches of the chain must stand, in their pairs' places."""
    known = {
        (switch.phase, frozenset(switch.clusters)): float(volts)
        for switch, volts in zip(network.switches, candidate.elements.ratings.switches[0], strict=True)
    }
    return np.array(
        [
            known.get((vertex.phase, frozenset(pair)), float(ideal))
            for pair, ideal in zip(vertex.pairs.tolist(), rated, strict=True)
        ]
    )


def pair_table(network: SwitchNetwork, vertex: VertexTrees) -> SwitchTable:
    """Write a switch between every pair of a vertex as a row of a switch table, without charges."""
    pairs = vertex.pairs
    there = np.array([cluster.vertices[2 - vertex.phase] for cluster in network.clusters], dtype=np.int8)
    zeros = np.zeros((1, len(pairs)), dtype=np.int64)
    return SwitchTable(
        charges=zeros,
        blocking=zeros,
        phase=np.full((1, len(pairs)), vertex.phase, dtype=np.int8),
        vertex=np.full((1, len(pairs)), vertex.vertex, dtype=np.int8),
        high=there[pairs[:, 0]][None],
        low=there[pairs[:, 1]][None],
        count=np.array([len(pairs)]),
    )


@dataclass(frozen=True, slots=True)
class OptionCosts:
    """``sqrt(n c)`` of every option at C frequencies.

    Attributes
    ----------
    capacitors
        Shape (n, classes, C).
    pairs
        For each vertex: of a switch between a pair, per charge multiplier, shape (pairs, classes, C).
    trees
        For each vertex: of each tree with the best class of every switch, shape (trees, C).
    """

    capacitors: Floats
    pairs: tuple[Floats, ...]
    trees: tuple[Floats, ...]

    @property
    def least(self) -> Floats:
        """Sum over all elements with their best options, shape (C,)."""
        total = self.capacitors.min(axis=1).sum(axis=0)
        for trees in self.trees:
            total = total + trees.min(axis=0)
        return np.asarray(total)


def option_costs(options: OptionSet, prices: Prices, frequency: Floats) -> OptionCosts:
    """Price every option.

    Parameters
    ----------
    options
        The options of one converter.
    prices
        Prices of one row, found at `Prices.frequency`.
    frequency
        Frequencies to price at, shape (C,) [Hz]; the price of ``sum alpha / A`` is in inverse proportion.
    """
    slow = float(prices.slow[0]) * float(prices.frequency[0]) / frequency
    zeta, loss = float(prices.series[0]), float(prices.loss[0])
    limits = options.slow[..., None] * slow + options.zeta[..., None] * zeta
    spent = options.plate[..., None] * frequency + options.leakage[..., None]
    capacitors = np.sqrt(limits * (float(prices.capacitor_area[0]) + loss * spent))
    pairs, trees = [], []
    for vertex, fast, cycle, still in zip(
        options.vertices, options.fast, options.cycle, options.still, strict=True
    ):
        on = float((prices.phase_1 if vertex.phase == 1 else prices.phase_2)[0])
        spent = cycle[..., None] * frequency + still[..., None]
        cost = np.sqrt(on * fast[..., None] * (float(prices.switch_area[0]) + loss * spent))
        pairs.append(cost)
        best = cost.min(axis=1)
        # A pair that no allowed class serves must not spoil the trees that do without it.
        barred = ~np.isfinite(best)
        total = np.nan_to_num(vertex.charges) @ np.where(barred, 0.0, best)
        blocked = (np.nan_to_num(vertex.charges) > 0) @ barred > 0
        trees.append(np.where(blocked, np.inf, total))
    return OptionCosts(capacitors, tuple(pairs), tuple(trees))
