"""The best classes and switch trees of one converter, together with its sizes, exactly.

At the prices of a sized choice the Lagrangian of every other choice is known (`capmuster.rank.optioncosts`),
and is a lower bound on what that choice can reach. It depends on the frequency: each ``sqrt(n c)`` changes by
at most the square root of the frequency's change, so a grid of frequencies bounds all of them, and is refined
where it must. Options whose bound is above the best choice so far are out; what is left is sized, all of it.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from fractions import Fraction
from itertools import islice, product
from typing import TYPE_CHECKING, Any, TypeAlias

import numpy as np

from capmuster.enumerate.converters import table_of
from capmuster.rank.classprices import merged
from capmuster.rank.devicechoice import choose_and_size
from capmuster.rank.evaluation import choose_elements
from capmuster.rank.networktable import network_table
from capmuster.rank.objectives import Sized, part_of, size_candidates
from capmuster.rank.operation import Candidates
from capmuster.rank.optioncosts import OptionSet, option_costs, option_set
from capmuster.rank.profile import loss_points
from capmuster.rank.structs import rows_of
from capmuster.rank.switching import Switch, SwitchNetwork, switch_network
from capmuster.rank.switchtable import SwitchTable
from capmuster.rank.technology import Choice as ClassChoice

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence

    from numpy.typing import NDArray

    from capmuster.enumerate.converters import ConverterTable
    from capmuster.enumerate.wiring import Converter
    from capmuster.rank.brief import Brief
    from capmuster.rank.optioncosts import OptionCosts
    from capmuster.rank.trees import VertexTrees

    Floats = NDArray[np.float64]

_O = 2
_ROUNDS = 8
_MOST_CHOICES = 3000
_FIRST_STEP = 0.05  # of log f
_LAST_STEP = 2e-4
_MARGIN = 1e-9  # relative: a choice that is no better than this is not better


@dataclass(frozen=True, slots=True)
class ExactChoice:
    """One converter with the best classes and trees that there are.

    Attributes
    ----------
    network
        Its clusters, and the switches that were chosen.
    candidate
        The converter with these switches and their classes, one row.
    sized
        Its sizes, one row.
    least
        Proven lower bound on the merit over all classes, trees and sizes.
    proven
        Whether no other choice is better, to a relative 1e-9.
    """

    network: SwitchNetwork
    candidate: Candidates
    sized: Sized
    least: float
    proven: bool


def exact_choice(converter: Converter, brief: Brief, enough: float = np.inf) -> ExactChoice | None:
    """Find the best classes, trees and sizes of a converter, or None where no sizes were found to start from.

    Parameters
    ----------
    converter
        The converter.
    brief
        A brief for which `capmuster.rank.screening.can_be_exact` holds.
    enough
        Merit above which the exact choice is of no interest: the search stops once it is proven to be above.
    """
    network, start = start_of(converter, brief)
    candidate, sized = choose_and_size(start)
    options = option_set(start, network, loss_points(brief, sized))
    choice = _chains(candidate, options)
    if not np.isfinite(sized.merit[0]):
        firsts = _least_impedances(options)
        tried = build(start, network, options, firsts)
        found = size_candidates(tried)
        if not np.isfinite(found.merit).any():
            return None
        rows = np.array([int(np.nanargmin(found.merit))])
        candidate, sized, choice = part_of(tried, rows), rows_of(found, rows), firsts[int(rows[0])]
    probe, probed = sized, choice
    seen, least = {probed}, -np.inf
    for _ in range(_ROUNDS):
        # Any sized choice gives prices, and any prices a bound on all choices.
        options = option_set(start, network, loss_points(brief, probe))
        bound = _bound(options, probed, probe, float(sized.merit[0]), brief)
        least = max(least, bound.least)
        if least >= enough:
            break
        choices, whole = _open_choices(options, bound)
        choices = [one for one in choices if one not in seen]
        if choices:
            seen.update(choices)
            others = build(start, network, options, choices)
            found = size_candidates(others)
            rows = np.array([int(np.argmin(np.where(np.isfinite(found.merit), found.merit, np.inf)))])
            probe, probed = rows_of(found, rows), choices[int(rows[0])]
            if probe.merit[0] < sized.merit[0] * (1 - _MARGIN):
                candidate, sized = part_of(others, rows), probe
        if whole:
            # All that could be better has been sized: the best of it is the best there is.
            merit = float(sized.merit[0])
            return _found(network, candidate, sized, merit, proven=bool(sized.proven[0]))
        if not choices or not np.isfinite(probe.merit[0]):
            break
    return _found(network, candidate, sized, min(least, float(sized.merit[0])), proven=False)


def start_of(converter: Converter, brief: Brief) -> tuple[SwitchNetwork, Candidates]:
    """Make a candidate of a converter, with its chains and with classes by least area."""
    network = switch_network(converter)
    table = table_of([converter])
    switches = network_table(table, network)
    return network, Candidates(table, switches, choose_elements(table, switches, brief), brief)


def _found(
    network: SwitchNetwork, candidate: Candidates, sized: Sized, least: float, *, proven: bool
) -> ExactChoice:
    return ExactChoice(_with_switches(network, candidate), candidate, sized, least, proven=proven)


def _with_switches(network: SwitchNetwork, candidate: Candidates) -> SwitchNetwork:
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


_Vertex: TypeAlias = tuple[int, tuple[int, ...]]


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
    vertices: tuple[_Vertex, ...]


def _chains(candidate: Candidates, options: OptionSet) -> Choice:
    """Return what a candidate with chains has chosen."""
    classes = iter(candidate.elements.switch_choice.index[0].tolist())
    vertices = []
    for vertex in options.vertices:
        edges = int(np.isfinite(vertex.charges[vertex.chain]).sum())
        vertices.append((vertex.chain, tuple(next(classes) for _ in range(edges))))
    return Choice(tuple(candidate.elements.capacitor_choice.index[0].tolist()), tuple(vertices))


def out_of_reach(converter: Converter, brief: Brief) -> bool:
    """Whether no choice at all meets the droop within the area budgets; "least-loss" only.

    The trees and classes of the switches that give the least fast limit are tried with all classes of the
    capacitors; False where these are too many.
    """
    if brief.objective != "least-loss" or len(brief.technology.capacitors) ** converter.n > _MOST_CHOICES:
        return False
    network, start = start_of(converter, brief)
    options = option_set(start, network, loss_points(brief, size_candidates(start)))
    found = size_candidates(build(start, network, options, _least_impedances(options)))
    return not np.isfinite(found.merit).any()


def _least_impedances(options: OptionSet) -> list[Choice]:
    """Choose the switches of least fast limit on a given area, with all classes of the capacitors."""
    vertices = []
    for vertex, fast in zip(options.vertices, options.fast, strict=True):
        costs = np.sqrt(fast)
        total = np.nan_to_num(vertex.charges) @ np.nan_to_num(costs.min(axis=1), posinf=1e30)
        tree = int(np.argmin(total))
        vertices.append((tree, tuple(int(np.argmin(costs[p])) for p in _edges(vertex, tree))))
    count, classes = options.slow.shape
    every = islice(product(range(classes), repeat=count), _MOST_CHOICES)
    return [Choice(one, tuple(vertices)) for one in every]


def _cost(options: OptionSet, costs: OptionCosts, choice: Choice) -> Floats:
    """Sum of ``sqrt(n c)`` over the elements of a choice, shape (C,)."""
    total = sum(costs.capacitors[i, k] for i, k in enumerate(choice.capacitors))
    for vertex, pairs, (tree, classes) in zip(options.vertices, costs.pairs, choice.vertices, strict=True):
        for p, k in zip(_edges(vertex, tree), classes, strict=True):
            if vertex.charges[tree, p] > 0:
                total = total + vertex.charges[tree, p] * pairs[p, k]
    return np.asarray(total)


def _edges(vertex: VertexTrees, tree: int) -> list[int]:
    return np.flatnonzero(np.isfinite(vertex.charges[tree])).tolist()


@dataclass(frozen=True, slots=True)
class _Bound:
    """Bounds on all choices, over C stretches of the frequency that may hold a better one.

    Attributes
    ----------
    least
        Lower bound on the merit of every choice.
    costs
        Costs in the middle of each stretch.
    room
        Shape (C,): by how much a choice may cost more than the best options, in ``sum sqrt(n c)``, and still
        be better.
    """

    least: float
    costs: OptionCosts
    room: Floats


def _bound(options: OptionSet, choice: Choice, sized: Sized, best: float, brief: Brief) -> _Bound:
    """Bound all choices at the prices of one of them; a choice better than ``best`` is of interest."""
    f = float(sized.prices.frequency[0])
    own = _cost(options, option_costs(options, sized.prices, np.array([f])), choice)[0]
    # The Lagrangian of the choice itself is at least its proven bound; all but its elements is common to all.
    rest = float(sized.least[0]) - 2 * float(own)
    aim = best * (1 - _MARGIN)
    low = brief.frequency if brief.frequency_minimum is None else brief.frequency_minimum
    span = np.log(brief.frequency / low)
    count = max(1, int(np.ceil(span / _FIRST_STEP)))
    step = span / count
    middle = np.log(low) + step * (np.arange(count) + 0.5)
    least = np.inf
    while True:
        costs = option_costs(options, sized.prices, np.exp(middle))
        falls = 2 * np.exp(-step / 4)
        bounds = rest + falls * costs.least
        kept = bounds < aim
        least = min(least, float(bounds[~kept].min(initial=np.inf)))
        if not kept.any() or step <= _LAST_STEP:
            break
        step /= 4
        middle = (middle[kept][:, None] + step * (np.arange(4) - 1.5)).ravel()
    least = min(least, float(bounds[kept].min(initial=np.inf)), best)
    kept_costs = option_costs(options, sized.prices, np.exp(middle[kept]))
    return _Bound(least, kept_costs, (aim - bounds[kept]) / falls)


def _open_choices(options: OptionSet, bound: _Bound) -> tuple[list[Choice], bool]:
    """List the choices that may be better, and whether these are all; if too many, the one of least bound."""
    costs, room = bound.costs, bound.room
    if not len(room):
        return [], True
    groups: list[list[tuple[Any, Floats]]] = [
        list(_options_within(own - own.min(axis=0), room)) for own in costs.capacitors
    ]
    for vertex, pairs, trees in zip(options.vertices, costs.pairs, costs.trees, strict=True):
        groups.append(list(_tree_options(vertex, pairs, trees - trees.min(axis=0), room)))
    n = len(costs.capacitors)
    found: list[Choice] = []
    whole = True
    for picked in _combined(groups, room):
        if len(found) == _MOST_CHOICES:
            whole = False
            break
        found.append(Choice(tuple(picked[:n]), tuple(picked[n:])))
    if whole:
        return found, True
    at = int(np.argmax(room))
    best = [min(group, key=lambda one: float(one[1][at]))[0] for group in groups]
    return [Choice(tuple(best[:n]), tuple(best[n:]))], False


def _options_within(excess: Floats, room: Floats) -> Iterator[tuple[int, Floats]]:
    """Yield the options whose excess leaves room at some frequency."""
    for k, one in enumerate(excess):
        if (one < room).any():
            yield k, one


def _tree_options(
    vertex: VertexTrees, pairs: Floats, excess: Floats, room: Floats
) -> Iterator[tuple[_Vertex, Floats]]:
    """Yield trees with classes that leave room."""
    best = pairs.min(axis=1)
    for tree, beyond in _options_within(excess, room):
        edges = _edges(vertex, tree)
        switches: list[list[tuple[int, Floats]]] = []
        for p in edges:
            charge = vertex.charges[tree, p]
            if charge > 0:
                switches.append(list(_options_within(charge * (pairs[p] - best[p]), room - beyond)))
            else:
                switches.append([(0, np.zeros_like(room))])  # idle: the smallest device is put in later
        for classes in _combined(switches, room - beyond):
            extra = sum(
                (
                    vertex.charges[tree, p] * (pairs[p, k] - best[p])
                    for p, k in zip(edges, classes, strict=True)
                    if vertex.charges[tree, p] > 0
                ),
                start=np.zeros_like(room),
            )
            yield (tree, tuple(classes)), beyond + extra


def _combined(groups: list[list[tuple[Any, Floats]]], room: Floats) -> Iterator[list[Any]]:
    """Yield one option of each group in all ways whose excesses together leave room at some frequency."""
    if not groups:
        yield []
        return
    for option, excess in groups[0]:
        left = room - excess
        if (left > 0).any():
            for rest in _combined(groups[1:], left):
                yield [option, *rest]


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
                for p, k in zip(_edges(options.vertices[v], tree), each, strict=True)
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
            for p in _edges(vertex, tree):
                ends = [network.clusters[k].vertices[2 - vertex.phase] for k in vertex.pairs[p]]
                charge, blocked = vertex.charges[tree, p] * output, vertex.blocking[p] * scale
                row.append((round(charge), round(blocked), vertex.phase, vertex.vertex, *ends))
        rows.append(row)
    values = np.array(rows, dtype=np.int64)
    phase, here, high, low = (values[..., k].astype(np.int8) for k in range(2, 6))
    count = np.full(len(choices), values.shape[1])
    return SwitchTable(values[..., 0], values[..., 1], phase, here, high, low, count)
