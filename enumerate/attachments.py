"""Attachments of a skeleton: which of three unnamed ports each outer plate meets.

An attachment is a string over three letters, one per outer plate. Restricted growth (a new letter is the next
one) absorbs the names of the ports; a string is kept only if it is the least of its orbit under the skeleton's
symmetries. No pair of cells is ever compared.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from capmuster.enumerate.skeletons import Skeleton

_PORTS = 3
_IDENTITY = (0, 1, 2)


@dataclass(frozen=True, slots=True)
class Attachments:
    """The attachments of one skeleton, one per cell.

    Attributes
    ----------
    places
        Outer places in the flattened (n, 4) words, shape (s,).
    letters
        Port 0, 1 or 2 at each outer place, shape (N, s).
    port_charges
        Charge that each port sends per cycle, shape (N, 3).
    stabiliser
        Number of symmetries that leave the cell as it is, shape (N,).
    mirror
        For each cell the port exchange that its symmetries allow, as ``(image of A, of B, of C)``, shape (N, 3);
        the identity where there is none.
    """

    places: NDArray[np.int64]
    letters: NDArray[np.int8]
    port_charges: NDArray[np.int64]
    stabiliser: NDArray[np.int64]
    mirror: NDArray[np.int8]


def attachments(skeleton: Skeleton) -> Attachments:
    """List every attachment with at least two ports that exchange charge, one per cell."""
    words = skeleton.words.reshape(-1)
    places = np.flatnonzero(words == 0)
    signs = np.where(np.isin(places % 4, (0, 3)), 1, -1)
    weights = signs * skeleton.charges[places // 4]
    letters = _strings(tuple((places[1:] // 2 == places[:-1] // 2).tolist()))
    port_charges = np.stack([(letters == port) @ weights for port in range(_PORTS)], axis=1)
    exchanging = np.any(port_charges != 0, axis=1)
    letters, port_charges = letters[exchanging], port_charges[exchanging]
    stabiliser = np.ones(len(letters), dtype=np.int64)
    mirror = np.tile(np.array(_IDENTITY, dtype=np.int8), (len(letters), 1))
    kept = np.ones(len(letters), dtype=bool)
    values = _values(letters)
    slot_of = np.full(len(words), -1)
    slot_of[places] = np.arange(len(places))
    for symmetry in skeleton.symmetries[1:]:
        moved = np.empty_like(letters)
        moved[:, slot_of[symmetry.places[places]]] = letters
        renamed, new_names = _restricted(moved)
        moved_values = _values(renamed)
        kept &= values <= moved_values
        fixed = values == moved_values
        stabiliser += fixed
        exchanged = fixed & np.any(new_names != np.array(_IDENTITY), axis=1)
        mirror[exchanged] = new_names[exchanged]
    return Attachments(places, letters[kept], port_charges[kept], stabiliser[kept], mirror[kept])


@lru_cache(maxsize=256)
def _strings(paired: tuple[bool, ...]) -> NDArray[np.int8]:
    """Restricted-growth strings that use all three letters, shape (N, len(paired) + 1).

    ``paired[k]`` says that places k and k + 1 are the two plates of one capacitor in one phase: their letters
    differ.
    """
    strings = np.zeros((1, 1), dtype=np.int8)
    for differs in paired:
        letter = np.arange(_PORTS, dtype=np.int8)
        allowed = letter <= strings.max(axis=1, keepdims=True) + 1
        if differs:
            allowed &= letter != strings[:, -1:]
        row, column = np.nonzero(allowed)
        strings = np.concatenate([strings[row], letter[column, None]], axis=1)
    return strings[strings.max(axis=1) == _PORTS - 1]


def _values(letters: NDArray[np.int8]) -> NDArray[np.int64]:
    """Strings as numbers in base 3, first letter most significant."""
    powers = _PORTS ** np.arange(letters.shape[1] - 1, -1, -1, dtype=np.int64)
    return letters.astype(np.int64) @ powers


def _restricted(letters: NDArray[np.int8]) -> tuple[NDArray[np.int8], NDArray[np.int8]]:
    """Rename letters in their order of appearance; also return the new name of each letter, shape (N, 3)."""
    first = np.stack([np.argmax(letters == port, axis=1) for port in range(_PORTS)], axis=1)
    new_names = np.argsort(np.argsort(first, axis=1), axis=1).astype(np.int8)
    return np.take_along_axis(new_names, letters.astype(np.intp), axis=1), new_names
