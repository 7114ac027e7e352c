"""Converters and cells as immutable values, always in canonical form."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from itertools import permutations
from typing import TYPE_CHECKING

from capmuster.enumerate.balance import N_PORTS, Balance, analyse
from capmuster.enumerate.canonical import canonical_words
from capmuster.enumerate.errors import IllPosedError, WiringError, shortened
from capmuster.enumerate.identity import converter_id
from capmuster.enumerate.notation import (
    CELL_PORTS,
    CONVERTER_PORTS,
    checked_words,
    format_words,
    node_name,
    parse_words,
    vertex_name,
    words_from_json,
    words_to_json,
)

if TYPE_CHECKING:
    from collections.abc import Sequence
    from fractions import Fraction

    from capmuster.enumerate.balance import Word

__all__ = [
    "CELL_PORTS",
    "CONVERTER_PORTS",
    "N_PORTS",
    "ROLES",
    "Cell",
    "Converter",
    "format_words",
    "node_name",
    "parse_words",
    "vertex_name",
]

ROLES = tuple("".join(role) for role in permutations(CONVERTER_PORTS))
"""The six roles of a cell: the names that its ports A, B, C take, in this order."""


@dataclass(frozen=True, slots=True)
class _Wired:
    """What cells and converters share: words that stand in canonical form."""

    words: tuple[Word, ...]

    @property
    def n(self) -> int:
        """Number of flying capacitors."""
        return len(self.words)

    def internal_nodes(self, phase: int) -> int:
        """Count the internal nodes of phase 1 or 2."""
        first = 2 * (phase - 1)
        return max(0, *(max(word[first : first + 2]) - N_PORTS + 1 for word in self.words))


@dataclass(frozen=True)
class Converter(_Wired):
    """A well-posed irreducible converter, in canonical form.

    Converters compare equal when they differ only by capacitor order, polarity, node names or phase order.
    Capacitors stand in the order of their voltage, and their plates are named so that no voltage is negative.

    Parameters
    ----------
    words
        The wiring over the ports G = 0, I = 1, O = 2, in any order and with any node numbers.

    Raises
    ------
    WiringError
        When the words are malformed.
    IllPosedError
        When the wiring is no converter: the message names the capacitors and the reason.
    """

    def __post_init__(self) -> None:
        """Check the wiring and bring it into canonical form."""
        words = checked_words(self.words)
        object.__setattr__(self, "words", canonical_words(words, analyse(words)))

    @classmethod
    def of(cls, words: Sequence[Sequence[int]]) -> Converter:
        """Make a converter of words in any kind of sequence, such as the rows of an array.

        Raises
        ------
        WiringError
            When the words are malformed.
        IllPosedError
            When the wiring is no converter.
        """
        return cls(checked_words(words))

    @classmethod
    def parse(cls, code: str) -> Converter:
        """Read a wiring code, in any capacitor order, polarity, node names and phase order.

        Raises
        ------
        WiringError
            When the code is malformed.
        IllPosedError
            When the wiring is no converter.
        """
        return cls(parse_words(code))

    @classmethod
    def from_json(cls, text: str) -> Converter:
        """Read the JSON form that `to_json` writes.

        Raises
        ------
        WiringError
            When the text is not of that form.
        IllPosedError
            As `parse`.
        """
        return cls(words_from_json(text, "converter", CONVERTER_PORTS))

    @cached_property
    def balance(self) -> Balance:
        """The exact charges, voltages and potentials."""
        return analyse(self.words)

    @property
    def code(self) -> str:
        """The canonical wiring code."""
        return format_words(self.words)

    @property
    def ratio(self) -> Fraction:
        """M = V_out / V_in at no load."""
        return self.balance.ratio

    @cached_property
    def id(self) -> str:
        """Short stable id, derived from the canonical wiring."""
        return converter_id(self.words)

    @property
    def cell(self) -> Cell:
        """The cell behind this converter, its role forgotten."""
        return Cell.of(self.words)

    def swapped(self) -> Converter:
        """Exchange input and output: the ratio becomes 1/M."""
        exchange = (0, 2, 1)
        return Converter.of([[exchange[v] if v < N_PORTS else v for v in word] for word in self.words])

    def to_json(self) -> str:
        """Write the wiring as JSON."""
        return words_to_json("converter", self.words, CONVERTER_PORTS)

    def __str__(self) -> str:
        """Return the canonical wiring code."""
        return self.code


@dataclass(frozen=True)
class Cell(_Wired):
    """The wiring of both phases over unnamed ports A, B, C, in canonical form.

    That form is the least among its converters' wirings, so cells that differ by port names are equal too.

    Parameters
    ----------
    words
        The wiring over three ports 0, 1, 2 in any order.

    Raises
    ------
    WiringError
        When the words are malformed.
    IllPosedError
        When no role makes a converter of it.
    """

    def __post_init__(self) -> None:
        """Check the wiring and bring it into canonical form."""
        converters = _converters(checked_words(self.words))
        object.__setattr__(self, "words", converters[0].words)
        object.__setattr__(self, "converters", converters)

    @classmethod
    def of(cls, words: Sequence[Sequence[int]]) -> Cell:
        """Make a cell of words in any kind of sequence, such as the rows of an array.

        Raises
        ------
        WiringError
            When the words are malformed.
        IllPosedError
            When no role makes a converter of it.
        """
        return cls(checked_words(words))

    @classmethod
    def parse(cls, code: str) -> Cell:
        """Read a wiring code over the ports A, B, C.

        Raises
        ------
        WiringError
            When the code is malformed.
        IllPosedError
            When no role makes a converter of it.
        """
        return cls(parse_words(code, CELL_PORTS))

    @classmethod
    def from_json(cls, text: str) -> Cell:
        """Read the JSON form that `to_json` writes.

        Raises
        ------
        WiringError
            When the text is not of that form.
        IllPosedError
            As `parse`.
        """
        return cls(words_from_json(text, "cell", CELL_PORTS))

    @property
    def code(self) -> str:
        """The canonical wiring code over A, B, C."""
        return format_words(self.words, CELL_PORTS)

    def converter(self, role: str) -> Converter:
        """Give the ports A, B, C the names in ``role``, such as ``"GIO"``.

        Raises
        ------
        WiringError
            When the role is not an order of G, I, O.
        IllPosedError
            When the cell is no converter in this role (a unity cell has its idle port at ground).
        """
        if role not in ROLES:
            raise WiringError(f"role '{shortened(role)}' is unknown", accepted=", ".join(ROLES))
        return Converter.of(_in_role(self.words, role))

    @cached_property
    def converters(self) -> tuple[Converter, ...]:
        """The distinct converters of this cell, in the order of their wiring."""
        return _converters(self.words)

    @property
    def triple(self) -> tuple[int, int, int]:
        """Absolute port charges over their common divisor, sorted."""
        small, middle, large = sorted(abs(g) for g in self.converters[0].balance.port_charges)
        return small, middle, large

    def to_json(self) -> str:
        """Write the wiring as JSON."""
        return words_to_json("cell", self.words, CELL_PORTS)

    def __str__(self) -> str:
        """Return the canonical wiring code."""
        return self.code


def _in_role(words: Sequence[Sequence[int]], role: str) -> list[list[int]]:
    return [[CONVERTER_PORTS.index(role[v]) if v < N_PORTS else int(v) for v in word] for word in words]


def _converters(words: Sequence[Sequence[int]]) -> tuple[Converter, ...]:
    """Distinct converters of a wiring over unnamed ports, in the order of their words."""
    found: set[Converter] = set()
    reason: IllPosedError | None = None
    for role in ROLES:
        try:
            found.add(Converter.of(_in_role(words, role)))
        except IllPosedError as error:
            reason = error
    if not found and reason is not None:
        raise reason
    return tuple(sorted(found, key=lambda converter: converter.words))
