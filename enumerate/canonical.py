"""The canonical form of one converter, at any size.

Exact potentials, voltages and charges survive every renaming, so they order capacitors first; only capacitors
that tie in all of them are searched. The form is the least, over both phase orders, of the sorted invariants
followed by the words with internal nodes named in their order of appearance.

Up to six capacitors the search tries every order of tied ones, as `capmuster.enumerate.canonicalbatch` does.
Above that ties are split by colour refinement, as in McKay, "Practical graph isomorphism", Congressus
Numerantium 30, 1981: two capacitors differ where their plates meet different company. A tie that remains is
broken in every way in turn, which seldom happens: a null space of one dimension leaves a converter no
symmetry, unless a capacitor holds no voltage. Without refinement twenty tied capacitors had 20! orders.
"""

from __future__ import annotations

from itertools import chain, groupby, permutations, product
from math import lcm
from typing import TYPE_CHECKING, TypeAlias, TypeVar

from capmuster.enumerate.balance import N_PORTS

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence

    from capmuster.enumerate.balance import Balance, Word

MOST_TRIED = 6
"""Most capacitors whose tied orders are all tried."""

_Invariants: TypeAlias = tuple[int, int, int, int]
_Key = TypeVar("_Key", bound="tuple[object, ...] | int")


def canonical_words(words: Sequence[Word], balance: Balance) -> tuple[Word, ...]:
    """Order, polarity, phase order and node names of a wiring, made canonical.

    Parameters
    ----------
    words
        Any wiring of the converter.
    balance
        Its exact analysis.
    """
    # Over their common denominator potentials are integers, which compare faster than fractions.
    unit = lcm(*(u.denominator for phase in balance.potentials for u in phase))
    first, second = ([int(u * unit) for u in phase] for phase in balance.potentials)
    turned = [(c, d, a, b) for a, b, c, d in words]
    return min(
        _in_phase_order(words, balance.charges, first, second),
        _in_phase_order(turned, [-charge for charge in balance.charges], second, first),
    )[1]


def _in_phase_order(
    words: Sequence[Word], charges: Sequence[int], first: Sequence[int], second: Sequence[int]
) -> tuple[list[_Invariants], tuple[Word, ...]]:
    """Sort the invariants of a wiring, phases as they stand, and find its least words."""
    keyed: list[tuple[_Invariants, Word]] = []
    for (plus1, minus1, plus2, minus2), charge in zip(words, charges, strict=True):
        voltage = first[plus1] - first[minus1]
        if voltage < 0 or (voltage == 0 and charge < 0):
            seen = (-voltage, first[plus1], second[plus2], -charge)
            keyed.append((seen, (minus1, plus1, minus2, plus2)))
        else:
            seen = (voltage, first[minus1], second[minus2], charge)
            keyed.append((seen, (plus1, minus1, plus2, minus2)))
    keyed.sort(key=lambda pair: pair[0])
    invariants = [key for key, _ in keyed]
    return invariants, _least_words([word for _, word in keyed], _ranks(invariants))


def _least_words(words: Sequence[Word], colours: Sequence[int]) -> tuple[Word, ...]:
    """Least words, nodes renamed, among the orders that keep colours sorted."""
    if len(words) > MOST_TRIED and len(set(colours)) < len(words):
        colours = _refined(words, colours)
        tied = next((group for group in _runs(colours) if len(group) > 1), None)
        if tied is not None:
            return min(
                _least_words(words, [2 * colour - (i == first) for i, colour in enumerate(colours)])
                for first in tied
            )
    return min(nodes_named([words[i] for i in order]) for order in _orders(colours))


def _orders(colours: Sequence[int]) -> Iterator[tuple[int, ...]]:
    """All orders of indices that keep colours sorted."""
    for choice in product(*(permutations(group) for group in _runs(colours))):
        yield tuple(chain.from_iterable(choice))


def _runs(colours: Sequence[int]) -> list[list[int]]:
    """List the indices of each colour, in the order of colours."""
    order = sorted(range(len(colours)), key=colours.__getitem__)
    return [list(group) for _, group in groupby(order, key=colours.__getitem__)]


def _refined(words: Sequence[Word], colours: Sequence[int]) -> list[int]:
    """Split colours by the colours of the plates that each plate meets, until none splits."""
    colours = _ranks(colours)
    while True:
        company: dict[tuple[int, int], list[tuple[int, int]]] = {}
        for word, colour in zip(words, colours, strict=True):
            for column, vertex in enumerate(word):
                company.setdefault((column // 2, vertex), []).append((colour, column % 2))
        vertices = [(min(vertex, N_PORTS), tuple(sorted(plates))) for (_, vertex), plates in company.items()]
        met = dict(zip(company, _ranks(vertices), strict=True))
        finer = _ranks(
            [
                (colour, *(met[column // 2, vertex] for column, vertex in enumerate(word)))
                for word, colour in zip(words, colours, strict=True)
            ]
        )
        if max(finer) == max(colours):
            return finer
        colours = finer


def _ranks(keys: Sequence[_Key]) -> list[int]:
    """Place of each key among the distinct ones."""
    rank = {key: place for place, key in enumerate(sorted(set(keys)))}
    return [rank[key] for key in keys]


def nodes_named(words: Sequence[Word]) -> tuple[Word, ...]:
    """Name internal nodes in their order of appearance, phase by phase."""
    names: tuple[dict[int, int], dict[int, int]] = ({}, {})
    named = []
    for word in words:
        a, b, c, d = (
            vertex
            if vertex < N_PORTS
            else names[column // 2].setdefault(vertex, N_PORTS + len(names[column // 2]))
            for column, vertex in enumerate(word)
        )
        named.append((a, b, c, d))
    return tuple(named)
