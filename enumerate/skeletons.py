"""All skeletons of n capacitors: which plates meet at which internal nodes, every port merged into vertex 0.

A skeleton is a set of capacitor types ``(plus 1, minus 1, plus 2, minus 2)`` over vertex 0 and the internal nodes
1, 2, ... of each phase. It fixes the charges. Two skeletons are the same when capacitor order, polarity, node
names or phase order make one of the other; the least bit mask of types stands for all of them.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import combinations, combinations_with_replacement, permutations, product
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from collections.abc import Iterator

    from numpy.typing import NDArray

_BLOCK = 1 << 17


@dataclass(frozen=True, slots=True)
class Symmetry:
    """A renaming that leaves a skeleton as it is.

    Attributes
    ----------
    places
        For each place of the flattened ``(n, 4)`` words the place that its plate moves to, shape (4 n,).
    """

    places: NDArray[np.int8]


@dataclass(frozen=True, slots=True)
class Skeleton:
    """One skeleton with what it fixes.

    Attributes
    ----------
    words
        Shape (n, 4): 0 is the merged port, k >= 1 internal node k - 1 of that phase.
    charges
        Shape (n,), coprime integers: charge into the plus plate in phase 1.
    m1, m2
        Internal nodes in phase 1 and 2, ``m1 >= m2`` and ``m1 + m2 = n - 1``.
    symmetries
        All renamings that keep it, the identity first.
    """

    words: NDArray[np.int8]
    charges: NDArray[np.int64]
    m1: int
    m2: int
    symmetries: tuple[Symmetry, ...]

    @property
    def n(self) -> int:
        """Number of capacitors."""
        return len(self.words)


def skeletons(n: int) -> Iterator[Skeleton]:
    """Yield every skeleton of ``n`` capacitors once, in a fixed order."""
    for m2 in range((n - 1) // 2 + 1):
        yield from _with_nodes(n, n - 1 - m2, m2)


def _with_nodes(n: int, m1: int, m2: int) -> Iterator[Skeleton]:
    types = _types(n, m1, m2)
    renamings = _renamings(m1, m2)
    images = [_type_images(types, renaming) for renaming in renamings]
    choose = combinations if n > 2 else combinations_with_replacement  # noqa: PLR2004 -- see _types
    chosen = np.array(list(choose(range(len(types)), n)), dtype=np.int16)
    for start in range(0, len(chosen), _BLOCK):
        sets = chosen[start : start + _BLOCK]
        sets = sets[_nodes_served(types[sets], m1, m2)]
        sets = sets[_least_of_orbit(sets, images)]
        charges = _charges(types[sets], m1, m2)
        kept = np.all(charges != 0, axis=1)
        for row, q in zip(sets[kept], charges[kept], strict=True):
            words = types[row]
            yield Skeleton(words, q // np.gcd.reduce(q), m1, m2, _symmetries(words, renamings))


def _types(n: int, m1: int, m2: int) -> NDArray[np.int8]:
    """Capacitor types of one polarity each, shape (T, 4).

    With three capacitors or more, two capacitors of one type would circulate charge between themselves, and a
    capacitor on no internal node would be free of all balance: neither is irreducible, so types are distinct and
    the all-port type is left out.
    """
    pairs = [[(0, 0), *((a, b) for a in range(m + 1) for b in range(m + 1) if a != b)] for m in (m1, m2)]
    found = [(*first, *second) for first, second in product(*pairs)]
    oriented = {min(word, (word[1], word[0], word[3], word[2])) for word in found}
    if n > 1:
        oriented.discard((0, 0, 0, 0))
    return np.array(sorted(oriented), dtype=np.int8).reshape(-1, 4)


def _renamings(m1: int, m2: int) -> list[tuple[bool, tuple[int, ...], tuple[int, ...]]]:
    """(phases exchanged?, new names of phase 1's nodes, of phase 2's), the identity first."""
    orders = [[(0, *order) for order in permutations(range(1, m + 1))] for m in (m1, m2)]
    swaps = (False, True) if m1 == m2 else (False,)
    return [(swap, first, second) for swap in swaps for first, second in product(*orders)]


def _renamed(
    words: NDArray[np.int8], renaming: tuple[bool, tuple[int, ...], tuple[int, ...]]
) -> NDArray[np.int8]:
    swap, first, second = renaming
    new = np.concatenate(
        [np.array(first, np.int8)[words[..., :2]], np.array(second, np.int8)[words[..., 2:]]], axis=-1
    )
    return new[..., [2, 3, 0, 1]] if swap else new


_FLIP = [1, 0, 3, 2]


def _type_images(
    types: NDArray[np.int8], renaming: tuple[bool, tuple[int, ...], tuple[int, ...]]
) -> NDArray[np.int16]:
    """Index of the type that each type becomes."""
    index = {tuple(word): k for k, word in enumerate(types.tolist())}
    renamed = _renamed(types, renaming)
    return np.array(
        [
            index[min(tuple(a), tuple(b))]
            for a, b in zip(renamed.tolist(), renamed[:, _FLIP].tolist(), strict=True)
        ],
        dtype=np.int16,
    )


def _nodes_served(words: NDArray[np.int8], m1: int, m2: int) -> NDArray[np.bool_]:
    """Where every internal node holds two plates at least; with fewer no charge could pass."""
    served = np.ones(len(words), dtype=bool)
    for columns, nodes in ((words[..., :2], m1), (words[..., 2:], m2)):
        for node in range(1, nodes + 1):
            served &= np.count_nonzero(columns == node, axis=(1, 2)) > 1
    return served


def _least_of_orbit(sets: NDArray[np.int16], images: list[NDArray[np.int16]]) -> NDArray[np.bool_]:
    """Where the sorted set of types is the least among its renamings."""

    def mask(members: NDArray[np.int16]) -> NDArray[np.uint64]:
        bits = np.uint64(1) << members.astype(np.uint64)
        return bits.sum(axis=1, dtype=np.uint64)

    own = mask(sets)
    least = np.ones(len(sets), dtype=bool)
    for image in images[1:]:
        least &= own <= mask(image[sets])
    return least


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
    return np.rint(np.stack(minors, axis=1)).astype(np.int64)


def _symmetries(
    words: NDArray[np.int8], renamings: list[tuple[bool, tuple[int, ...], tuple[int, ...]]]
) -> tuple[Symmetry, ...]:
    """All ways in which a renaming maps the capacitors onto each other, the identity first."""
    n = len(words)
    found: list[tuple[int, ...]] = []
    own = [tuple(word) for word in words.tolist()]
    for renaming in renamings:
        swap = renaming[0]
        images = _renamed(words, renaming).tolist()
        targets = []
        for image in images:
            straight, flipped = tuple(image), tuple(image[k] for k in _FLIP)
            targets.append(
                [(j, f) for j in range(n) for f, w in ((False, straight), (True, flipped)) if own[j] == w]
            )
        for assignment in product(*targets):
            if len({j for j, _ in assignment}) == n:
                found.append(
                    tuple(_moved_place(c, j, swap=swap, flip=f) for j, f in assignment for c in range(4))
                )
    identity = tuple(range(4 * n))
    found.sort(key=lambda places: (places != identity, places))
    return tuple(Symmetry(np.array(places, dtype=np.int8)) for places in found)


def _moved_place(column: int, target: int, *, swap: bool, flip: bool) -> int:
    if swap:
        column = (column + 2) % 4
    if flip:
        column ^= 1
    return 4 * target + column
