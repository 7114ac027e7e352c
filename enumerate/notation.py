"""The notation of one wiring: the wiring code and its JSON form, read and written.

A vertex of a phase is a number: 0, 1, 2 are the ports (G, I, O of a converter; A, B, C of a cell) and
``3 + k`` is internal node ``k`` of that phase. A *word* is one capacitor: the vertices of its plus and minus
plate in phase 1, then in phase 2.
"""

from __future__ import annotations

import json
import re
from typing import TYPE_CHECKING

from capmuster.enumerate.balance import N_PORTS
from capmuster.enumerate.canonical import nodes_named
from capmuster.enumerate.errors import WiringError, shortened

if TYPE_CHECKING:
    from collections.abc import Sequence

    from capmuster.enumerate.balance import Word

CONVERTER_PORTS = ("G", "I", "O")
CELL_PORTS = ("A", "B", "C")
_SYNTAX = (
    "one word per capacitor, plus-minus/plus-minus, e.g. 'I-G/O-I'; ports {}; internal nodes in lower case"
)
_NODE = re.compile(r"[a-z][a-z0-9_]*\Z")
_COLUMNS = 4
MOST_CAPACITORS = 100
"""Most flying capacitors of one wiring: far beyond what is built, and a vertex still fits a byte."""


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
    _check_number(len(chunks))
    nodes: tuple[dict[str, int], dict[str, int]] = ({}, {})
    words: list[Word] = []
    for number, chunk in enumerate(chunks, start=1):
        here = f"wiring: capacitor {number} '{shortened(chunk)}'"
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
                    raise WiringError(f"{here}: unknown vertex '{shortened(name)}'", accepted=accepted)
        if word[0] == word[1] or word[2] == word[3]:
            raise _shorted(here, word)
        words.append((word[0], word[1], word[2], word[3]))
    return tuple(words)


def checked_words(words: Sequence[Sequence[int]]) -> tuple[Word, ...]:
    """Check words that come as numbers, and number their internal nodes without gaps."""
    _check_number(len(words))
    checked: list[Word] = []
    for number, word in enumerate(words, start=1):
        vertices = [int(vertex) for vertex in word]
        if len(vertices) != _COLUMNS or min(vertices) < 0:
            raise WiringError(
                f"wiring: capacitor {number} {shortened(str(vertices))} is malformed",
                accepted="four vertices, each a number from 0: plus and minus in phase 1, then in phase 2",
            )
        if vertices[0] == vertices[1] or vertices[2] == vertices[3]:
            raise _shorted(f"wiring: capacitor {number} {vertices}", vertices)
        checked.append((vertices[0], vertices[1], vertices[2], vertices[3]))
    return nodes_named(checked)


def _check_number(capacitors: int) -> None:
    if not 1 <= capacitors <= MOST_CAPACITORS:
        number = f"{capacitors or 'no'} capacitor{'s' * (capacitors > 1)}"
        raise WiringError(f"wiring has {number}", accepted=f"1 to {MOST_CAPACITORS}")


def _shorted(where: str, vertices: Sequence[int]) -> WiringError:
    phase = 1 if vertices[0] == vertices[1] else 2
    return WiringError(
        f"{where} has both plates on one vertex in phase {phase}",
        accepted="two different vertices in each phase",
    )


def words_to_json(kind: str, words: Sequence[Word], ports: Sequence[str]) -> str:
    """Write words as JSON; ``kind`` is converter or cell."""
    capacitors = [
        {
            "plus": [vertex_name(word[0], ports), vertex_name(word[2], ports)],
            "minus": [vertex_name(word[1], ports), vertex_name(word[3], ports)],
        }
        for word in words
    ]
    return json.dumps({"kind": kind, "capacitors": capacitors})


def words_from_json(text: str, kind: str, ports: Sequence[str]) -> tuple[Word, ...]:
    """Read what `words_to_json` writes.

    Raises
    ------
    WiringError
        When the text is not of that form.
    """
    first, second = ports[1], ports[2]
    example = f'{{"plus": ["{first}", "{second}"], "minus": ["{ports[0]}", "{first}"]}}'
    accepted = f'{{"kind": "{kind}", "capacitors": [{example}, ...]}}'
    try:
        data: object = json.loads(text)
    except (ValueError, RecursionError) as error:
        raise WiringError(f"wiring: '{shortened(text)}' is no JSON", accepted=accepted) from error
    found = data if isinstance(data, dict) else {}
    if found.get("kind") != kind:
        raise WiringError(f"wiring in JSON: kind is {_shown(found.get('kind'))}", accepted=accepted)
    capacitors = found.get("capacitors")
    if not isinstance(capacitors, list):
        raise WiringError(f"wiring in JSON: capacitors is {_shown(capacitors)}", accepted=accepted)
    chunks = []
    for number, capacitor in enumerate(capacitors, start=1):
        sides = []
        for side in ("plus", "minus"):
            given = capacitor.get(side) if isinstance(capacitor, dict) else None
            if not (isinstance(given, list) and len(given) == 2 and all(_is_vertex(v, ports) for v in given)):  # noqa: PLR2004 -- two phases
                raise WiringError(
                    f"wiring in JSON: {side} of capacitor {number} is {_shown(given)}", accepted=accepted
                )
            sides.append(given)
        (plus1, plus2), (minus1, minus2) = sides
        chunks.append(f"{plus1}-{minus1}/{plus2}-{minus2}")
    return parse_words(" ".join(chunks), ports)


def _is_vertex(name: object, ports: Sequence[str]) -> bool:
    return isinstance(name, str) and (name in ports or _NODE.match(name) is not None)


def _shown(value: object) -> str:
    """Quote a JSON value, or say that there is none."""
    return "missing" if value is None else shortened(json.dumps(value))
