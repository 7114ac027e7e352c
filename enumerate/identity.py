"""The short id of a converter, derived from its canonical wiring.

Up to six capacitors the id is the wiring itself, written as one number: no two converters can share it, and
it can be read back. Above that it is 60 bits of a hash of the wiring.
"""

from __future__ import annotations

import hashlib
import re
from typing import TYPE_CHECKING

from capmuster.enumerate.balance import N_PORTS
from capmuster.enumerate.errors import CapmusterError, shortened

if TYPE_CHECKING:
    from collections.abc import Sequence

    import numpy as np
    from numpy.typing import NDArray

    from capmuster.enumerate.balance import Word

ALPHABET = "0123456789abcdefghjkmnpqrstvwxyz"
"""Base 32 without the letters that are mistaken for digits or for each other."""
MOST_READABLE = 6
"""Most capacitors whose id is the wiring itself."""
_HASH_DIGITS = 12
# Digits by number of capacitors: the least that hold the largest number.
_DIGITS = {1: 2, 2: 3, 3: 5, 4: 7, 5: 10, 6: 12}
_FORM = re.compile(rf"([1-9][0-9]{{0,3}})-([{ALPHABET}]+)\Z")
_ACCEPTED = "an id such as '1-0h', as list prints it"


def wiring_number(words: NDArray[np.integer], m1: NDArray[np.integer]) -> NDArray[np.uint64]:
    """Write canonical wirings as one number each.

    Parameters
    ----------
    words
        Canonical words, shape (N, n, 4), n at most 6.
    m1
        Internal nodes in phase 1, shape (N,).

    Returns
    -------
    Array of uint64, shape (N,).
    """
    import numpy as np  # noqa: PLC0415

    n = words.shape[1]
    vertices = [(m1 + N_PORTS).astype(np.uint64), (n - 1 - m1 + N_PORTS).astype(np.uint64)]
    number = np.zeros(len(words), dtype=np.uint64)
    for i in range(n):
        for phase, count in enumerate(vertices):
            plus = words[:, i, 2 * phase].astype(np.uint64)
            minus = words[:, i, 2 * phase + 1].astype(np.uint64)
            pair = plus * (count - np.uint64(1)) + minus - (minus > plus).astype(np.uint64)
            number = number * (count * (count - np.uint64(1))) + pair
    return number * np.uint64(n) + m1.astype(np.uint64)


def id_of_number(number: int, n: int) -> str:
    """Spell the number of a canonical wiring of ``n`` capacitors as an id."""
    return f"{n}-{_spelt(number, _DIGITS[n])}"


def converter_id(words: Sequence[Word]) -> str:
    """Id of a converter whose words are canonical."""
    n = len(words)
    if n > MOST_READABLE:
        text = " ".join("{}-{}/{}-{}".format(*word) for word in words)
        digest = hashlib.blake2b(text.encode(), digest_size=8).digest()
        return f"{n}-{_spelt(int.from_bytes(digest, 'big') >> 4, _HASH_DIGITS)}"
    import numpy as np  # noqa: PLC0415

    array = np.array([words], dtype=np.int64)
    m1 = np.maximum(array[:, :, :2].max(axis=(1, 2)) - N_PORTS + 1, 0)
    return id_of_number(int(wiring_number(array, m1)[0]), n)


def words_of_id(text: str) -> tuple[Word, ...] | None:
    """Read an id back into words; None where the id is a hash.

    The words may fail to be a canonical converter: the caller compares the converter's id with ``text``.

    Raises
    ------
    CapmusterError
        When the text is not of the form of an id.
    """
    match = _FORM.match(text)
    if match is None:
        raise CapmusterError(f"id '{shortened(text)}' is malformed", accepted=_ACCEPTED)
    n, digits = int(match[1]), match[2]
    wanted = _DIGITS.get(n, _HASH_DIGITS)
    if len(digits) != wanted:
        raise CapmusterError(
            f"id '{shortened(text)}' has {len(digits)} digits after the dash",
            accepted=f"{wanted} for {n} capacitor{'s' if n > 1 else ''}",
        )
    if n > MOST_READABLE:
        return None
    number = 0
    for digit in digits:
        number = 32 * number + ALPHABET.index(digit)
    number, m1 = divmod(number, n)
    counts = (m1 + N_PORTS, n - 1 - m1 + N_PORTS)
    words: list[Word] = []
    for _ in range(n):
        word: list[int] = []
        for count in reversed(counts):
            number, pair = divmod(number, count * (count - 1))
            plus, minus = divmod(pair, count - 1)
            word = [plus, minus + (minus >= plus), *word]
        words.append((word[0], word[1], word[2], word[3]))
    return tuple(reversed(words))


def _spelt(number: int, digits: int) -> str:
    return "".join(ALPHABET[number >> (5 * k) & 31] for k in reversed(range(digits)))
