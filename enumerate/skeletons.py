"""All skeletons of n capacitors: which plates meet at which internal nodes, every port merged into vertex 0.

A skeleton is a set of capacitor types ``(plus 1, minus 1, plus 2, minus 2)`` over vertex 0 and the internal
nodes 1, 2, ... of each phase. It fixes the charges. Two skeletons are the same when capacitor order,
polarity, node names or phase order make one of the other; the least bit mask of types stands for all of them.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from itertools import permutations, product
from typing import TYPE_CHECKING, NamedTuple

import numpy as np

if TYPE_CHECKING:
    from collections.abc import Iterator

    from numpy.typing import NDArray

_FLIP = [1, 0, 3, 2]
_LEAST_FREE_OF_TWINS = 3
_COUNT_BITS = 4


@dataclass(frozen=True, slots=True)
class SkeletonTable:
    """Skeletons of ``n`` capacitors with what each of them fixes.

    Attributes
    ----------
    words
        Shape (S, n, 4), int8: 0 is the merged port, k >= 1 internal node k - 1 of that phase.
    charges
        Shape (S, n), int64, coprime: charge into the plus plate in phase 1.
    nodes
        Shape (S, 2), int8: internal nodes in phase 1 and 2, the first not fewer, n - 1 together.
    order
        Shape (S,), int64: number of renamings that keep the skeleton.
    """

    words: NDArray[np.int8]
    charges: NDArray[np.int64]
    nodes: NDArray[np.int8]
    order: NDArray[np.int64]

    def __len__(self) -> int:
        """Count the skeletons."""
        return len(self.words)

    @property
    def n(self) -> int:
        """Number of capacitors."""
        return int(self.words.shape[1])

    def take(self, rows: NDArray[np.intp] | slice) -> SkeletonTable:
        """Return the chosen rows as a table."""
        return SkeletonTable(*(getattr(self, name)[rows] for name in self.__slots__))

    def symmetries(self, row: int) -> NDArray[np.int8]:
        """All renamings that keep a skeleton, the identity first.

        Returns
        -------
        Array of int8, shape (order, 4 n): for each place of the flattened ``(n, 4)`` words the place that its
        plate moves to.
        """
        places = np.arange(4 * self.n, dtype=np.int8)[None]
        if self.order[row] == 1:
            return places
        m1, m2 = self.nodes[row].tolist()
        return _symmetries(self.words[row], _renamings(m1, m2))


class _Renaming(NamedTuple):
    """Phases exchanged or not, then new names for the nodes of phase 1 and of phase 2."""

    swap: bool
    first: tuple[int, ...]
    second: tuple[int, ...]


@lru_cache(maxsize=2)
def skeletons(n: int) -> SkeletonTable:
    """Return every skeleton of ``n`` capacitors once, in a fixed order; ``n`` up to 6 takes seconds."""
    parts = [
        part for m2 in range((n - 1) // 2 + 1) for part in _with_nodes(n, n - 1 - m2, m2) if len(part.words)
    ]
    return SkeletonTable(
        *(np.concatenate([getattr(p, name) for p in parts]) for name in SkeletonTable.__slots__)
    )


def _with_nodes(n: int, m1: int, m2: int) -> Iterator[SkeletonTable]:
    types = _types(n, m1, m2)
    renamings = _renamings(m1, m2)
    images = [_type_images(types, renaming) for renaming in renamings]
    for sets in _sets(len(types), n, repeated=n < _LEAST_FREE_OF_TWINS):
        served = sets[_nodes_served(types, sets, m1, m2)]
        least, order = _least_of_orbit(served, images)
        charges = _charges(types[least], m1, m2)
        kept = np.all(charges != 0, axis=1)
        charges = charges[kept]
        if n < _LEAST_FREE_OF_TWINS:  # twins, and a type that is its own image from both sides, count apart
            order = np.array([len(_symmetries(words, renamings)) for words in types[least]])
        yield SkeletonTable(
            words=types[least[kept]],
            charges=charges // np.gcd.reduce(charges, axis=1, keepdims=True),
            nodes=np.tile(np.array([m1, m2], dtype=np.int8), (len(charges), 1)),
            order=order[kept],
        )


def _types(n: int, m1: int, m2: int) -> NDArray[np.int8]:
    """Capacitor types of one polarity each, shape (T, 4).

    With three capacitors or more, two capacitors of one type would circulate charge between themselves, and a
    capacitor on no internal node would be free of all balance: neither is irreducible, so types are distinct
    and the all-port type is left out.
    """
    pairs = [[(0, 0), *((a, b) for a in range(m + 1) for b in range(m + 1) if a != b)] for m in (m1, m2)]
    found = [(*first, *second) for first, second in product(*pairs)]
    oriented = {min(word, (word[1], word[0], word[3], word[2])) for word in found}
    if n > 1:
        oriented.discard((0, 0, 0, 0))
    return np.array(sorted(oriented), dtype=np.int8).reshape(-1, 4)


def _sets(types: int, n: int, *, repeated: bool) -> Iterator[NDArray[np.int8]]:
    """Ascending choices of ``n`` types in lexicographic order, in blocks of one first type each."""
    for first in range(types):
        sets = np.array([[first]], dtype=np.int8)
        for _ in range(n - 1):
            least = sets[:, -1].astype(np.int64) + (0 if repeated else 1)
            ways = types - least
            row = np.repeat(np.arange(len(sets)), ways)
            following = np.arange(len(row)) - np.repeat(np.cumsum(ways) - ways, ways) + least[row]
            sets = np.concatenate([sets[row], following[:, None].astype(np.int8)], axis=1)
        yield sets


@lru_cache(maxsize=64)
def _renamings(m1: int, m2: int) -> tuple[_Renaming, ...]:
    """All renamings that could keep a skeleton, the identity first."""
    orders = [[(0, *order) for order in permutations(range(1, m + 1))] for m in (m1, m2)]
    swaps = (False, True) if m1 == m2 else (False,)
    return tuple(_Renaming(swap, first, second) for swap in swaps for first, second in product(*orders))


def _renamed(words: NDArray[np.int8], renaming: _Renaming) -> NDArray[np.int8]:
    new = np.concatenate(
        [
            np.array(renaming.first, np.int8)[words[..., :2]],
            np.array(renaming.second, np.int8)[words[..., 2:]],
        ],
        axis=-1,
    )
    return new[..., [2, 3, 0, 1]] if renaming.swap else new


def _type_images(types: NDArray[np.int8], renaming: _Renaming) -> NDArray[np.int8]:
    """Index of the type that each type becomes."""
    index = {tuple(word): k for k, word in enumerate(types.tolist())}
    renamed = _renamed(types, renaming)
    both = zip(renamed.tolist(), renamed[:, _FLIP].tolist(), strict=True)
    return np.array([index[min(tuple(a), tuple(b))] for a, b in both], dtype=np.int8)


def _nodes_served(types: NDArray[np.int8], sets: NDArray[np.int8], m1: int, m2: int) -> NDArray[np.bool_]:
    """Where every internal node holds two plates at least; with fewer no charge could pass.

    Plates per node are counted in four bits each, all nodes in one integer.
    """
    plates = np.zeros(len(types), dtype=np.int64)
    for column in range(4):
        node = types[:, column].astype(np.int64) - 1 + (m1 if column > 1 else 0)
        plates += np.where(types[:, column] > 0, 1 << (_COUNT_BITS * np.maximum(node, 0)), 0)
    total = sum((plates[sets[:, k]] for k in range(sets.shape[1])), np.zeros(len(sets), dtype=np.int64))
    nodes = m1 + m2
    enough = (1 << (_COUNT_BITS - 1)) - 2  # lifts a count of two or more, at most n <= 6, into its top bit
    lift = sum(enough << (_COUNT_BITS * k) for k in range(nodes))
    top = sum(1 << (_COUNT_BITS * k + _COUNT_BITS - 1) for k in range(nodes))
    return np.asarray((total + lift) & top == top, dtype=bool)


def _least_of_orbit(
    sets: NDArray[np.int8], images: list[NDArray[np.int8]]
) -> tuple[NDArray[np.int8], NDArray[np.int64]]:
    """Keep the sets of types that are the least among their renamings, with the number that keep them."""
    bits = [np.uint64(1) << image.astype(np.uint64) for image in images]

    def masks(chosen: NDArray[np.int8], image: NDArray[np.uint64]) -> NDArray[np.uint64]:
        # A sum, not a union: with one or two capacitors a type may stand twice.
        return sum((image[chosen[:, k]] for k in range(chosen.shape[1])), np.zeros(len(chosen), np.uint64))

    own = masks(sets, bits[0])
    order = np.ones(len(sets), dtype=np.int64)
    for image in bits[1:]:
        other = masks(sets, image)
        order += own == other
        least = own <= other
        sets, own, order = sets[least], own[least], order[least]
    return sets, order


def _charges(words: NDArray[np.int8], m1: int, m2: int) -> NDArray[np.int64]:
    """Signed minors of [D1; D2], shape (N, n); zero where the null space is larger than a line."""
    n = words.shape[1]
    balance = np.zeros((len(words), n - 1, n))
    for column in range(4):
        sign = 1 if column % 2 == 0 else -1
        nodes, offset = (m1, -1) if column < 2 else (m2, m1 - 1)  # noqa: PLR2004 -- two columns per phase
        for node in range(1, nodes + 1):
            balance[:, node + offset, :] += sign * (words[:, :, column] == node)
    minors = [(-1) ** k * np.linalg.det(np.delete(balance, k, axis=2)) for k in range(n)]
    return np.asarray(np.rint(np.stack(minors, axis=1)), dtype=np.int64)


def _symmetries(words: NDArray[np.int8], renamings: tuple[_Renaming, ...]) -> NDArray[np.int8]:
    """All ways in which a renaming maps the capacitors onto each other, the identity first."""
    n = len(words)
    found: list[tuple[int, ...]] = []
    own = [tuple(word) for word in words.tolist()]
    for renaming in renamings:
        images = _renamed(words, renaming).tolist()
        targets = []
        for image in images:
            straight, flipped = tuple(image), tuple(image[k] for k in _FLIP)
            targets.append(
                [(j, f) for j in range(n) for f, w in ((False, straight), (True, flipped)) if own[j] == w]
            )
        found.extend(
            tuple(_moved_place(c, j, swap=renaming.swap, flip=f) for j, f in assignment for c in range(4))
            for assignment in product(*targets)
            if len({j for j, _ in assignment}) == n
        )
    identity = tuple(range(4 * n))
    found.sort(key=lambda places: (places != identity, places))
    return np.array(found, dtype=np.int8)


def _moved_place(column: int, target: int, *, swap: bool, flip: bool) -> int:
    if swap:
        column = (column + 2) % 4
    if flip:
        column ^= 1
    return 4 * target + column
