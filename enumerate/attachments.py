"""Attachments of a skeleton: which of three unnamed ports each outer plate meets.

An attachment is a string over three letters, one per outer plate, read as a number in base 3. Restricted
growth (a new letter is the next one) absorbs the names of the ports; a string is kept only if it is the
least of its orbit under the skeleton's symmetries. No pair of cells is ever compared.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from itertools import permutations
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from capmuster.enumerate.skeletons import SkeletonTable

N_PORTS = 3
EXCHANGES = np.array(list(permutations(range(N_PORTS))), dtype=np.int8)
"""Ways to rename the ports: row k gives the images of A, B, C; row 0 is the identity."""
_EXCHANGE_OF_CODE = np.zeros(N_PORTS**N_PORTS, dtype=np.int8)
_EXCHANGE_OF_CODE[EXCHANGES @ np.array([9, 3, 1])] = np.arange(len(EXCHANGES))


@dataclass(frozen=True, slots=True)
class Attachments:
    """The attachments of one skeleton, one per cell; all three ports are met.

    Attributes
    ----------
    letters
        Shape (s, N), int8: port 0, 1 or 2 at each outer place, in the order of places.
    values
        Shape (N,), int32: the same strings as numbers in base 3, first letter most significant.
    stabiliser
        Shape (N,), int8: number of symmetries that leave the cell as it is.
    mirror
        Shape (N,), int8: index in `EXCHANGES` of the port exchange that its symmetries allow.
    """

    letters: NDArray[np.int8]
    values: NDArray[np.int32]
    stabiliser: NDArray[np.int8]
    mirror: NDArray[np.int8]

    def take(self, columns: NDArray[np.intp] | slice) -> Attachments:
        """Return the chosen attachments."""
        return Attachments(
            self.letters[:, columns], self.values[columns], self.stabiliser[columns], self.mirror[columns]
        )


def outer_places(words: NDArray[np.int8]) -> NDArray[np.intp]:
    """Places of the flattened (n, 4) words of a skeleton that meet a port."""
    return np.flatnonzero(words.reshape(-1) == 0)


def attachments(skeletons: SkeletonTable, row: int) -> Attachments:
    """List every attachment of one skeleton, one per cell."""
    places = outer_places(skeletons.words[row])
    letters, values = _strings(tuple((places[1:] // 2 == places[:-1] // 2).tolist()))
    stabiliser = np.ones(len(values), dtype=np.int8)
    mirror = np.zeros(len(values), dtype=np.int8)
    if skeletons.order[row] == 1:
        return Attachments(letters, values, stabiliser, mirror)
    kept = np.ones(len(values), dtype=bool)
    slot_of = np.full(4 * skeletons.n, -1)
    slot_of[places] = np.arange(len(places))
    for moved_to in skeletons.symmetries(row)[1:]:
        moved = np.empty_like(letters)
        moved[slot_of[moved_to[places]]] = letters
        moved_values, exchange = _restricted(moved)
        kept &= values <= moved_values
        fixed = values == moved_values
        stabiliser += fixed
        mirror = np.where(fixed & (exchange > 0), exchange, mirror)
    return Attachments(letters[:, kept], values[kept], stabiliser[kept], mirror[kept])


@lru_cache(maxsize=64)
def _strings(paired: tuple[bool, ...]) -> tuple[NDArray[np.int8], NDArray[np.int32]]:
    """Restricted-growth strings that use all three letters, shape (len(paired) + 1, N), and their values.

    ``paired[k]`` says that places k and k + 1 are the two plates of one capacitor in one phase: their letters
    differ.
    """
    most = np.zeros(1, dtype=np.int8)  # largest letter so far
    last = np.zeros(1, dtype=np.int8)
    values = np.zeros(1, dtype=np.int32)
    letter = np.arange(N_PORTS, dtype=np.int8)[:, None]
    for differs in paired:
        allowed = letter <= most + 1
        if differs:
            allowed &= letter != last
        row, column = np.nonzero(allowed.T)
        last = column.astype(np.int8)
        most = np.maximum(most[row], last)
        values = values[row] * np.int32(N_PORTS) + last
    values = values[most == N_PORTS - 1]
    letters = np.empty((len(paired) + 1, len(values)), dtype=np.int8)
    rest = values
    for slot in range(len(paired), -1, -1):
        quotient = rest // N_PORTS
        letters[slot] = rest - N_PORTS * quotient
        rest = quotient
    return letters, values


def _restricted(letters: NDArray[np.int8]) -> tuple[NDArray[np.int32], NDArray[np.int8]]:
    """Values of strings, letters renamed in order of appearance, and the renamings in `EXCHANGES`."""
    first = np.stack([np.argmax(letters == port, axis=0) for port in range(N_PORTS)])
    new_names = np.argsort(np.argsort(first, axis=0), axis=0).astype(np.int8)
    renamed = np.take_along_axis(new_names, letters.astype(np.intp), axis=0)
    values = np.zeros(letters.shape[1], dtype=np.int32)
    for letter in renamed:
        values = values * np.int32(N_PORTS) + letter
    code = np.array([9, 3, 1]) @ new_names
    return values, _EXCHANGE_OF_CODE[code]
