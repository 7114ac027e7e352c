"""The best classes and switch trees of one converter, together with its sizes, exactly.

Any sized candidate gives prices, and at these the Lagrangian of every choice is known
(`capmuster.rank.design.optioncosts`): a lower bound on what that choice can reach. It depends on the
frequency: each ``sqrt(n c)`` changes by at most the square root of the frequency's change, so a grid of
frequencies bounds all of them, and is refined where it must. Options whose bound is above the best choice
so far are out; if what is left is little enough, all of it is sized. If not, the prices are poor, and
better ones lie between: those of a fictitious candidate whose coefficients are means of the last one's and
of the choice with the least bound.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from capmuster.rank.design.choices import (
    MOST_CHOICES,
    Choice,
    VertexChoice,
    build,
    edges_of,
    least_impedances,
    start_of,
    with_switches,
)
from capmuster.rank.design.devicechoice import choose_and_size
from capmuster.rank.design.mixtures import Blend
from capmuster.rank.design.objectives import Sized, priced_model, size_candidates, total_cost
from capmuster.rank.design.optioncosts import option_costs, option_set
from capmuster.rank.design.profile import loss_points
from capmuster.rank.design.trees import trees_of
from capmuster.rank.structs import rows_of

if TYPE_CHECKING:
    from collections.abc import Iterator

    from numpy.typing import NDArray

    from capmuster.enumerate.wiring import Converter
    from capmuster.rank.design.operation import Candidates, Modelled
    from capmuster.rank.design.optioncosts import OptionCosts, OptionSet
    from capmuster.rank.design.trees import VertexTrees
    from capmuster.rank.inputs.brief import Brief
    from capmuster.rank.scores.switching import SwitchNetwork

    Floats = NDArray[np.float64]

_ROUNDS = 12
_EARLY, _FEW = 6, 200  # in early rounds the prices are still poor: many choices are not worth a listing
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
        A brief for which `capmuster.rank.design.screening.can_be_exact` holds.
    enough
        Merit above which the exact choice is of no interest: the search stops once it is proven to be above.
    """
    network, start = start_of(converter, brief)
    candidate, sized = _first(network, start)
    if not np.isfinite(sized.merit[0]):
        return None
    source: Modelled = candidate
    probe, least = sized, -np.inf
    seen: set[Choice] = set()
    for turn in range(_ROUNDS):
        options = option_set(start, network, loss_points(brief, probe))
        own = float(total_cost(priced_model(source, probe), probe.prices)[0])
        bound = _bound(options, own, probe, float(sized.merit[0]), brief)
        least = max(least, bound.least)
        if least >= enough:
            break
        choices, whole = _open_choices(options, bound, MOST_CHOICES if turn >= _EARLY else _FEW)
        relaxed = build(start, network, options, choices) if choices else None
        if relaxed is not None and not seen.issuperset(choices):
            seen.update(choices)
            found = _best(relaxed, size_candidates(relaxed))
            if found[1].merit[0] < sized.merit[0] * (1 - _MARGIN):
                candidate, sized = found
        if whole:
            # All that could be better has been sized: the best of it is the best there is.
            return _found(network, candidate, sized, float(sized.merit[0]), proven=bool(sized.proven[0]))
        if relaxed is None:
            break
        between = _between(source, relaxed, turn)
        if between is None:
            break
        source, probe = between
    return _found(network, candidate, sized, min(least, float(sized.merit[0])), proven=False)


def _first(network: SwitchNetwork, start: Candidates) -> tuple[Candidates, Sized]:
    """Size a first choice; where the usual ones have no sizes, one that gives the least output impedance."""
    candidate, sized = choose_and_size(start)
    if np.isfinite(sized.merit[0]) or start.brief.drive == "rails":
        return candidate, sized
    options = option_set(start, network, loss_points(start.brief, sized))
    tried = build(start, network, options, least_impedances(options))
    return _best(tried, size_candidates(tried))


def _best(tried: Candidates, found: Sized) -> tuple[Candidates, Sized]:
    """Return the best of many choices, or any if none has sizes."""
    rows = np.array([int(np.argmin(np.where(np.isfinite(found.merit), found.merit, np.inf)))])
    return tried.take(rows), rows_of(found, rows)


def _between(source: Modelled, relaxed: Candidates, turn: int) -> tuple[Modelled, Sized] | None:
    """Blend a source of prices with the choice that they let through; None where no blend has sizes."""
    weight = 1.0 / (turn + 2)
    for _ in range(4):
        blend = Blend(source, relaxed, np.array([weight]))
        sized = size_candidates(blend)
        if np.isfinite(sized.merit[0]) and np.isfinite(sized.least[0]):
            return blend, sized
        weight /= 3
    return None


def _found(
    network: SwitchNetwork, candidate: Candidates, sized: Sized, least: float, *, proven: bool
) -> ExactChoice:
    if candidate.brief.use == "fixed-ratio" and not all(vertex.whole for vertex in trees_of(network)):
        least, proven = -np.inf, False  # a vertex has more trees than are listed
    return ExactChoice(with_switches(network, candidate), candidate, sized, least, proven=proven)


def out_of_reach(converter: Converter, brief: Brief) -> bool:
    """Whether no choice at all meets the droop within the area budgets; "least-loss" only.

    The trees and classes of the switches that give the least fast limit are tried with all classes of the
    capacitors; False where these are too many.
    """
    if brief.objective != "least-loss" or len(brief.technology.capacitors) ** converter.n > MOST_CHOICES:
        return False
    network, start = start_of(converter, brief)
    options = option_set(start, network, loss_points(brief, size_candidates(start)))
    found = size_candidates(build(start, network, options, least_impedances(options)))
    return not np.isfinite(found.merit).any()


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


def _bound(options: OptionSet, own: float, sized: Sized, best: float, brief: Brief) -> _Bound:
    """Bound all choices at the prices of a sized candidate whose own elements cost ``own``.

    A choice whose merit is below ``best`` is of interest.
    """
    # Its own Lagrangian is at least its proven bound, and all but the elements is common to all choices.
    rest = float(sized.least[0]) - 2 * own
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


def _open_choices(options: OptionSet, bound: _Bound, most: int) -> tuple[list[Choice], bool]:
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
        if len(found) == most:
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
) -> Iterator[tuple[VertexChoice, Floats]]:
    """Yield trees with classes that leave room."""
    best = np.nan_to_num(pairs.min(axis=1), posinf=0.0)  # a barred pair is in no tree that is left
    for tree, beyond in _options_within(excess, room):
        edges = edges_of(vertex, tree)
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
