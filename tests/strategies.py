"""Hypothesis strategies: converters to test with, and the renamings that leave a converter the same."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from hypothesis import strategies as st

from capmuster.enumerate.converters import converters
from capmuster.enumerate.errors import CapmusterError
from capmuster.enumerate.families import dickson, doubler_chain, fibonacci, ladder, series_parallel
from capmuster.enumerate.wiring import CONVERTER_PORTS, N_PORTS, Cell, Converter

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence

Words = tuple[tuple[int, ...], ...]


@st.composite
def census_converters(draw: Callable, least: int = 1, most: int = 4) -> Converter:
    """Draw any non-degenerate converter of the census."""
    table = converters(draw(st.integers(least, most)))
    return table.converter(draw(st.integers(0, len(table) - 1)))


@st.composite
def family_converters(draw: Callable, most: int = 40) -> Converter:
    """Draw a family member of up to ``most`` capacitors in any of its roles."""
    n = draw(st.integers(1, most))
    rails = max(2, (n + 3) // 2)
    build = draw(
        st.sampled_from(
            [
                lambda: series_parallel(n + 1),
                lambda: ladder(rails, draw(st.integers(1, rails - 1))),
                lambda: dickson(n + 1),
                lambda: fibonacci(n),
                lambda: doubler_chain((n + 1) // 2, alternate=draw(st.booleans())),
            ]
        )
    )
    return draw(st.sampled_from(Cell.of(build().words).converters))


@st.composite
def wandered_converters(draw: Callable, most: int = 14) -> Converter:
    """Draw a converter of no family: plates of a family member put elsewhere, again and again."""
    converter = draw(family_converters(most))
    rng = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    for _ in range(60):
        words = np.array(converter.words)
        for i, column in zip(rng.integers(len(words), size=2), rng.integers(4, size=2), strict=True):
            pairs = words[:, 2 * (column // 2) : 2 * (column // 2) + 2]
            words[i, column] = rng.integers(int(pairs.max()) + 1)
        try:
            other = Converter.of(words)
        except CapmusterError:
            continue
        if not other.balance.degenerate:
            converter = other
    return converter


@st.composite
def relabelled(draw: Callable, words: Sequence[Sequence[int]]) -> Words:
    """Draw a renaming of a wiring: capacitor order, polarity, node numbers and phase order."""
    renamed = []
    for phase in draw(st.permutations((0, 1))):
        pairs = [word[2 * phase : 2 * phase + 2] for word in words]
        names = [*range(N_PORTS), *(N_PORTS + k for k in draw(st.permutations(range(_inner(pairs)))))]
        renamed.append([(names[plus], names[minus]) for plus, minus in pairs])
    order = draw(st.permutations(range(len(words))))
    flips = draw(st.lists(st.booleans(), min_size=len(words), max_size=len(words)))
    return tuple(
        (*renamed[0][i][::-1], *renamed[1][i][::-1]) if flip else (*renamed[0][i], *renamed[1][i])
        for flip, i in zip(flips, order, strict=True)
    )


@st.composite
def spelt(draw: Callable, words: Sequence[Sequence[int]], ports: Sequence[str] = CONVERTER_PORTS) -> str:
    """Draw a wiring code of these words, with any node names and any space between the words."""
    code: list[list[str]] = [[] for _ in words]
    for phase in (0, 1):
        pairs = [word[2 * phase : 2 * phase + 2] for word in words]
        inner = _inner(pairs)
        name = st.from_regex(r"[a-z][a-z0-9_]{0,5}", fullmatch=True)
        names = [*ports, *draw(st.lists(name, min_size=inner, max_size=inner, unique=True))]
        for place, pair in zip(code, pairs, strict=True):
            place.append("-".join(names[vertex] for vertex in pair))
    space = draw(st.sampled_from([" ", "   ", "\n", "\t"]))
    return space.join("/".join(place) for place in code)


@st.composite
def with_renaming(draw: Callable, kinds: st.SearchStrategy[Converter]) -> tuple[Converter, Words]:
    """Draw a converter together with a renaming of its wiring."""
    converter = draw(kinds)
    return converter, draw(relabelled(converter.words))


def _inner(pairs: Sequence[Sequence[int]]) -> int:
    return max(0, *(max(pair) - N_PORTS + 1 for pair in pairs))
