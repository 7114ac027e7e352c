"""How one converter is wired: the wiring code, and converters and cells as immutable values.

A vertex of a phase is a number: 0, 1, 2 are the ports (G, I, O of a converter; A, B, C of a cell) and
``3 + k`` is internal node ``k`` of that phase. A *word* is one capacitor: the vertices of its plus and minus
plate in phase 1, then in phase 2.
"""

from __future__ import annotations

import json
import re
from dataclasses import dataclass
from functools import cached_property
from itertools import permutations
from typing import TYPE_CHECKING, Any

from capmuster.enumerate.balance import Balance, analyse
from capmuster.enumerate.canonical import canonical_words
from capmuster.enumerate.errors import WiringError
from capmuster.enumerate.identity import converter_id

if TYPE_CHECKING:
    from collections.abc import Sequence
    from fractions import Fraction

    from capmuster.enumerate.balance import Word

CONVERTER_PORTS = ("G", "I", "O")
CELL_PORTS = ("A", "B", "C")
N_PORTS = 3
ROLES = tuple("".join(role) for role in permutations(CONVERTER_PORTS))
"""The six roles of a cell: the names that its ports A, B, C take, in this order."""

_SYNTAX = (
    "one word per capacitor, plus-minus/plus-minus, e.g. 'I-G/O-I'; ports {}; internal nodes in lower case"
)
_NODE = re.compile(r"[a-z][a-z0-9_]*\Z")
_MOST_CAPACITORS = 400


def node_name(index: int) -> str:
    """Name of internal node ``index``: a, b, ..., z, aa, ab, ... ."""
    name = ""
    index += 1
    while index:
        index, letter = divmod(index - 1, 26)
        name = chr(ord("a") + letter) + name
    return name


def vertex_name(vertex: int, ports: Sequence[str] = CONVERTER_PORTS) -> str:
    """Name of a vertex: a port's letter, or an internal node's lower-case name."""
    return ports[vertex] if vertex < N_PORTS else node_name(vertex - N_PORTS)


def format_words(words: Sequence[Sequence[int]], ports: Sequence[str] = CONVERTER_PORTS) -> str:
    """Write words as a wiring code."""
    named = ([vertex_name(int(v), ports) for v in word] for word in words)
    return " ".join(f"{a}-{b}/{c}-{d}" for a, b, c, d in named)


def parse_words(text: str, ports: Sequence[str] = CONVERTER_PORTS) -> tuple[Word, ...]:
    """Read a wiring code; nodes are numbered in their order of appearance, phase by phase.

    Raises
    ------
    WiringError
        When a word is malformed, or a capacitor has both plates on one vertex.
    """
    accepted = _SYNTAX.format(", ".join(ports))
    chunks = text.split()
    if not chunks:
        raise WiringError("wiring '' has no capacitor", accepted=accepted)
    if len(chunks) > _MOST_CAPACITORS:
        raise WiringError(f"wiring has {len(chunks)} capacitors", accepted=f"at most {_MOST_CAPACITORS}")
    nodes: tuple[dict[str, int], dict[str, int]] = ({}, {})
    words: list[Word] = []
    for number, chunk in enumerate(chunks, start=1):
        here = f"wiring: capacitor {number} '{_shortened(chunk)}'"
        phases = [phase.split("-") for phase in chunk.split("/")]
        if [len(phase) for phase in phases] != [2, 2]:
            raise WiringError(f"{here} is malformed", accepted=accepted)
        word: list[int] = []
        for names, phase in zip(nodes, phases, strict=True):
            for name in phase:
                if name in ports:
                    word.append(ports.index(name))
                elif _NODE.match(name):
                    word.append(N_PORTS + names.setdefault(name, len(names)))
                else:
                    raise WiringError(f"{here}: unknown vertex '{_shortened(name)}'", accepted=accepted)
        if word[0] == word[1] or word[2] == word[3]:
            shorted = 1 if word[0] == word[1] else 2
            raise WiringError(
                f"{here} has both plates on one vertex in phase {shorted}",
                accepted="two different vertices in each phase",
            )
        words.append((word[0], word[1], word[2], word[3]))
    return tuple(words)


def _shortened(text: str, most: int = 40) -> str:
    return text if len(text) <= most else text[: most - 3] + "..."


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
    """

    @classmethod
    def of(cls, words: Sequence[Sequence[int]]) -> Converter:
        """Make a converter of words over the ports G = 0, I = 1, O = 2.

        Raises
        ------
        IllPosedError
            When the wiring is no converter: the message names the capacitors and the reason.
        """
        given: tuple[Word, ...] = tuple((int(a), int(b), int(c), int(d)) for a, b, c, d in words)
        return cls(canonical_words(given, analyse(given)))

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
        return cls.of(parse_words(code))

    @classmethod
    def from_json(cls, text: str) -> Converter:
        """Read the JSON form that `to_json` writes.

        Raises
        ------
        WiringError
            When the text is not of that form.
        """
        return cls.parse(_code_in_json(text, "converter"))

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
        """The converter with input and output exchanged: its ratio is 1/M."""
        exchange = (0, 2, 1)
        return Converter.of([[exchange[v] if v < N_PORTS else v for v in word] for word in self.words])

    def to_json(self) -> str:
        """Write the wiring as JSON."""
        return _to_json("converter", self.words, CONVERTER_PORTS)

    def __str__(self) -> str:
        """The canonical wiring code."""
        return self.code


@dataclass(frozen=True)
class Cell(_Wired):
    """The wiring of both phases over unnamed ports A, B, C, in canonical form."""

    @classmethod
    def of(cls, words: Sequence[Sequence[int]]) -> Cell:
        """Make a cell of words over three ports in any order: the least of its converters' wirings.

        Raises
        ------
        IllPosedError
            When no role makes a converter of it.
        """
        return cls(min(converter.words for converter in _converters(words)))

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
        return cls.of(parse_words(code, CELL_PORTS))

    @classmethod
    def from_json(cls, text: str) -> Cell:
        """Read the JSON form that `to_json` writes.

        Raises
        ------
        WiringError
            When the text is not of that form.
        """
        return cls.parse(_code_in_json(text, "cell"))

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
            raise WiringError(f"role '{_shortened(role)}' is unknown", accepted=", ".join(ROLES))
        return Converter.of(_in_role(self.words, role))

    @property
    def converters(self) -> tuple[Converter, ...]:
        """The distinct converters of this cell, in the order of their wiring."""
        return tuple(sorted(_converters(self.words), key=lambda converter: converter.words))

    @property
    def triple(self) -> tuple[int, int, int]:
        """Absolute port charges over their common divisor, sorted."""
        small, middle, large = sorted(abs(g) for g in self.converters[0].balance.port_charges)
        return small, middle, large

    def to_json(self) -> str:
        """Write the wiring as JSON."""
        return _to_json("cell", self.words, CELL_PORTS)

    def __str__(self) -> str:
        """The canonical wiring code."""
        return self.code


def _in_role(words: Sequence[Sequence[int]], role: str) -> list[list[int]]:
    return [[CONVERTER_PORTS.index(role[v]) if v < N_PORTS else int(v) for v in word] for word in words]


def _converters(words: Sequence[Sequence[int]]) -> set[Converter]:
    from capmuster.enumerate.errors import IllPosedError  # noqa: PLC0415

    found: set[Converter] = set()
    reason: IllPosedError | None = None
    for role in ROLES:
        try:
            found.add(Converter.of(_in_role(words, role)))
        except IllPosedError as error:
            reason = error
    if not found and reason is not None:
        raise reason
    return found


def _to_json(kind: str, words: Sequence[Word], ports: Sequence[str]) -> str:
    capacitors = [
        {
            "plus": [vertex_name(word[0], ports), vertex_name(word[2], ports)],
            "minus": [vertex_name(word[1], ports), vertex_name(word[3], ports)],
        }
        for word in words
    ]
    return json.dumps({"kind": kind, "capacitors": capacitors})


def _code_in_json(text: str, kind: str) -> str:
    accepted = f'{{"kind": "{kind}", "capacitors": [{{"plus": ["I", "O"], "minus": ["G", "I"]}}, ...]}}'
    try:
        data: Any = json.loads(text)
        if data["kind"] != kind:
            raise WiringError(f"kind: '{_shortened(str(data['kind']))}'", accepted=accepted)
        pairs = [(c["plus"], c["minus"]) for c in data["capacitors"]]
        return " ".join(f"{plus[0]}-{minus[0]}/{plus[1]}-{minus[1]}" for plus, minus in pairs)
    except (json.JSONDecodeError, KeyError, TypeError, IndexError) as error:
        raise WiringError(
            f"wiring in JSON: '{_shortened(text)}' cannot be read", accepted=accepted
        ) from error
