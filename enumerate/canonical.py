"""The canonical form of one converter, at any size.

Exact potentials, voltages and charges survive every renaming, so they order capacitors first; only capacitors
that tie in all of them are searched. The form is the least, over both phase orders, of the sorted invariants
followed by the words with internal nodes named in their order of appearance.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, TypeAlias

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence
    from fractions import Fraction

    from capmuster.enumerate.balance import Balance, Word

_Invariants: TypeAlias = "tuple[Fraction | int, ...]"
_N_PORTS = 3


def canonical_words(words: Sequence[Word], balance: Balance) -> tuple[Word, ...]:
    """Order, polarity, phase order and node names of a wiring, made canonical.

    Parameters
    ----------
    words
        Any wiring of the converter.
    balance
        Its exact analysis.
    """
    return min(_in_phase_order(words, balance, first) for first in (0, 1))[1]


def _in_phase_order(
    words: Sequence[Word], balance: Balance, first: int
) -> tuple[list[_Invariants], tuple[Word, ...]]:
    """Sorted invariants and least words with phase ``first`` (0 or 1) put first."""
    ahead, behind = balance.potentials[first], balance.potentials[1 - first]
    keyed: list[tuple[_Invariants, Word]] = []
    for word, voltage, charge in zip(words, balance.voltages, balance.charges, strict=True):
        taken = charge if first == 0 else -charge
        plus1, minus1, plus2, minus2 = word if first == 0 else (word[2], word[3], word[0], word[1])
        if (voltage, taken) < (0, 0) or (voltage == 0 and taken < 0):
            plus1, minus1, plus2, minus2 = minus1, plus1, minus2, plus2
            voltage, taken = -voltage, -taken  # noqa: PLW2901 -- the same capacitor, seen from its other plate
        keyed.append(((voltage, ahead[minus1], behind[minus2], taken), (plus1, minus1, plus2, minus2)))
    keyed.sort(key=lambda pair: pair[0])
    return [invariants for invariants, _ in keyed], _least_words(keyed)


def _least_words(keyed: Sequence[tuple[_Invariants, Word]]) -> tuple[Word, ...]:
    """Least sequence of words among the orders that keep the invariants sorted.

    All partial orders with the same, least beginning are carried along. Two of them that have the same
    capacitors and the same names on nodes still in use continue alike, so one of them is enough.
    """
    result: list[Word] = []
    states: list[tuple[frozenset[int], tuple[dict[int, int], dict[int, int]]]] = [(frozenset(), ({}, {}))]
    for tied in _runs([invariants for invariants, _ in keyed]):
        for _ in tied:
            least: Word | None = None
            following: dict[object, tuple[frozenset[int], tuple[dict[int, int], dict[int, int]]]] = {}
            for used, names in states:
                for i in tied:
                    if i in used:
                        continue
                    word, new_names = _named(keyed[i][1], names)
                    if least is None or word < least:
                        least, following = word, {}
                    if word == least:
                        now_used = used | {i}
                        live = _live_names(keyed, now_used, new_names)
                        following[now_used, live] = (now_used, new_names)
            assert least is not None  # noqa: S101 -- each tied capacitor is placed once
            result.append(least)
            states = list(following.values())
    return tuple(result)


def _runs(keys: Sequence[_Invariants]) -> Iterator[range]:
    """Ranges of equal neighbours."""
    start = 0
    for stop in range(1, len(keys) + 1):
        if stop == len(keys) or keys[stop] != keys[start]:
            yield range(start, stop)
            start = stop


def _named(
    word: Word, names: tuple[dict[int, int], dict[int, int]]
) -> tuple[Word, tuple[dict[int, int], dict[int, int]]]:
    """Write a word in canonical names, naming the nodes that appear for the first time."""
    new = (dict(names[0]), dict(names[1]))
    out = [
        v if v < _N_PORTS else new[k // 2].setdefault(v, _N_PORTS + len(new[k // 2]))
        for k, v in enumerate(word)
    ]
    return (out[0], out[1], out[2], out[3]), new


def _live_names(
    keyed: Sequence[tuple[_Invariants, Word]],
    used: frozenset[int],
    names: tuple[dict[int, int], dict[int, int]],
) -> frozenset[tuple[int, int, int]]:
    """Names of the nodes that capacitors not yet placed still touch."""
    waiting = [word for i, (_, word) in enumerate(keyed) if i not in used]
    return frozenset(
        (phase, vertex, name)
        for phase in (0, 1)
        for vertex, name in names[phase].items()
        if any(vertex in word[2 * phase : 2 * phase + 2] for word in waiting)
    )
