"""The canonical form of many converters at once; the same definition as `capmuster.enumerate.canonical`.

Up to six capacitors everything about a capacitor that the order depends on, and the vertices of its plates,
fits into one integer, so sorting capacitors is sorting integers. One converter per column. Converters in
which capacitors tie in every invariant try all orders of these, still together.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from itertools import permutations
from typing import TYPE_CHECKING, TypeAlias

import numpy as np

from capmuster.enumerate.sorting import sort_columns

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from capmuster.enumerate.converters import ConverterTable

    _Ints: TypeAlias = NDArray[np.int64]

_AT_ONCE = 1 << 14
_VERTEX_BITS = 3
_VERTEX = (1 << _VERTEX_BITS) - 1
_WORD_BITS = 4 * _VERTEX_BITS
_NAME_BITS = 4
_NAME = (1 << _NAME_BITS) - 1
_PORTS_NAMED = 0x321  # each vertex's name plus one, four bits each: ports keep theirs, nodes have none yet
_FIRST_NODE = 3
_WORDS_PER_NUMBER = 5


def canonical_batch(table: ConverterTable) -> ConverterTable:
    """Bring every row into canonical form.

    The arrays of ``table`` may stand in any capacitor order, polarity, phase order and node names; at most
    six capacitors.
    """
    parts = [_canonical(table.take(slice(k, k + _AT_ONCE))) for k in range(0, len(table), _AT_ONCE)]
    if not parts:
        return table
    return replace(
        table,
        **{
            name: np.concatenate([getattr(part, name) for part in parts])
            for name in ("words", "charges", "potentials", "nodes")
        },
    )


def _canonical(table: ConverterTable) -> ConverterTable:
    plates = _Plates.of(table)
    ahead, behind = (_sorted_keys(plates, first) for first in (0, 1))
    comparison = _compare(ahead >> _WORD_BITS, behind >> _WORD_BITS)
    swap = comparison > 0
    keys = np.where(swap, behind, ahead)
    words, names = _named_least(keys)
    even = np.flatnonzero(comparison == 0)
    if len(even):
        other_words, other_names = _named_least(behind[:, even])
        better = _compare(_packed(other_words), _packed(words[:, :, even])) < 0
        chosen = even[better]
        swap[chosen] = True
        keys[:, chosen] = behind[:, chosen]
        words[:, :, chosen] = other_words[:, :, better]
        names[:, chosen] = other_names[:, better]
    potentials = np.where(swap[:, None, None], table.potentials[:, ::-1], table.potentials)
    return replace(
        table,
        words=np.ascontiguousarray(np.moveaxis(words, 2, 0).astype(np.int8)),
        charges=np.ascontiguousarray(plates.charges_in(keys).T),
        potentials=_renamed(potentials, names),
        nodes=np.where(swap[:, None], table.nodes[:, ::-1], table.nodes),
    )


@dataclass(frozen=True, slots=True)
class _Plates:
    """What the order of capacitors depends on, one converter per column.

    ``vertices`` and ``potentials`` have shape (2 phases, 2 plates, n, N); ``charges`` has shape (n, N).
    """

    vertices: _Ints
    potentials: _Ints
    charges: _Ints

    @classmethod
    def of(cls, table: ConverterTable) -> _Plates:
        rows, n = table.words.shape[:2]
        vertices = table.words.astype(np.int64).reshape(rows, n, 2, 2).transpose(2, 3, 1, 0)
        width = table.potentials.shape[2]
        start = np.arange(rows) * (2 * width)
        potentials = np.stack(
            [table.potentials.reshape(-1)[start + phase * width + vertices[phase]] for phase in (0, 1)]
        )
        return cls(np.ascontiguousarray(vertices), potentials, np.ascontiguousarray(table.charges.T))

    @property
    def most_charge(self) -> int:
        return int(np.abs(self.charges).max())

    def charges_in(self, keys: _Ints) -> _Ints:
        """Read the charges back from keys."""
        return np.asarray((keys >> _WORD_BITS) % (2 * self.most_charge + 1) - self.most_charge)


def _sorted_keys(plates: _Plates, first: int) -> _Ints:
    """Sorted invariants of each capacitor and its word, with phase ``first`` put first; shape (n, N)."""
    second = 1 - first
    taken = plates.charges if first == 0 else -plates.charges
    voltages = plates.potentials[0, 0] - plates.potentials[0, 1]
    flip = (voltages < 0) | ((voltages == 0) & (taken < 0))
    minus = [np.where(flip, plates.potentials[p, 0], plates.potentials[p, 1]) for p in (first, second)]
    most = int(np.abs(plates.potentials).max())
    keys = np.abs(voltages)
    for invariant in minus:
        keys = keys * (2 * most + 1) + (invariant + most)
    keys = keys * (2 * plates.most_charge + 1) + np.where(flip, -taken, taken) + plates.most_charge
    for phase in (first, second):
        plus, minus_vertex = plates.vertices[phase]
        for vertex in (np.where(flip, minus_vertex, plus), np.where(flip, plus, minus_vertex)):
            keys = (keys << _VERTEX_BITS) | vertex
    sorted_keys: _Ints = keys
    sort_columns(sorted_keys)
    return sorted_keys


def _named_least(keys: _Ints) -> tuple[_Ints, _Ints]:
    """Least words among the orders that keep the invariants sorted, and the names of their nodes."""
    invariants = keys >> _WORD_BITS
    words, names = _named(keys)
    tied = np.flatnonzero(np.any(invariants[1:] == invariants[:-1], axis=0))
    if len(tied):
        best = _packed(words[:, :, tied])
        for order in permutations(range(len(keys))):
            index = list(order)
            kept = np.flatnonzero(np.all(invariants[index][:, tied] == invariants[:, tied], axis=0))
            if not len(kept) or index == sorted(index):
                continue
            other_words, other_names = _named(keys[index][:, tied[kept]])
            packed = _packed(other_words)
            better = _compare(packed, best[:, kept]) < 0
            chosen = kept[better]
            best[:, chosen] = packed[:, better]
            words[:, :, tied[chosen]] = other_words[:, :, better]
            names[:, tied[chosen]] = other_names[:, better]
    return words, names


def _named(keys: _Ints) -> tuple[_Ints, _Ints]:
    """Words with internal nodes named in their order of appearance, shape (n, 4, N), and the names, (2, N).

    Names are packed as in `_PORTS_NAMED`, for phase 1 and phase 2.
    """
    n, columns = keys.shape
    words = np.empty((n, 4, columns), dtype=np.int64)
    names = np.full((2, columns), _PORTS_NAMED, dtype=np.int64)
    following = np.full((2, columns), _FIRST_NODE + 1, dtype=np.int64)
    for i in range(n):
        for place in range(4):
            phase = place // 2
            vertex = (keys[i] >> (_VERTEX_BITS * (3 - place))) & _VERTEX
            at = vertex * _NAME_BITS
            name = (names[phase] >> at) & _NAME
            new = name == 0
            fresh = np.where(new, following[phase], 0)
            names[phase] |= fresh << at
            following[phase] += new
            words[i, place] = name + fresh - 1
    return words, names


def _renamed(potentials: _Ints, names: _Ints) -> _Ints:
    """Move the potentials of internal nodes to their new names; unused vertices stay 0."""
    rows, _, width = potentials.shape
    result = np.zeros((rows, 2, width + 1), dtype=potentials.dtype)  # the last place takes unused vertices
    for phase in (0, 1):
        for vertex in range(width):
            name = (names[phase] >> (vertex * _NAME_BITS)) & _NAME
            result[np.arange(rows), phase, name - 1] = potentials[:, phase, vertex]
    result[:, :, width] = 0
    return np.ascontiguousarray(result[:, :, :width])


def _packed(words: _Ints) -> _Ints:
    """Words as a few sortable numbers per column, most significant first."""
    n = len(words)
    numbers = []
    for start in range(0, n, _WORDS_PER_NUMBER):
        number = np.zeros(words.shape[2], dtype=np.int64)
        for word in words[start : start + _WORDS_PER_NUMBER]:
            for vertex in word:
                number = (number << _VERTEX_BITS) | vertex
        numbers.append(number)
    return np.stack(numbers)


def _compare(left: _Ints, right: _Ints) -> _Ints:
    """Compare columns lexicographically: -1, 0 or 1 for each."""
    result = np.zeros(left.shape[1], dtype=np.int64)
    for a, b in zip(left[::-1], right[::-1], strict=True):
        result = np.where(a == b, result, np.where(a < b, -1, 1))
    return result
