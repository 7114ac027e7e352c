"""The families that the trade knows by name, at any size, built from their definition.

Every builder returns one wiring in its usual step-up (or tap) role; the other roles follow from its cell. The
ratio that the definition promises is asserted by the exact analysis.
"""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction
from functools import lru_cache
from typing import TYPE_CHECKING, TypeAlias

from capmuster.enumerate.errors import CapmusterError, shortened
from capmuster.enumerate.wiring import Cell, Converter

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator

_Plates: TypeAlias = tuple[str, str, str, str]


@dataclass(frozen=True, slots=True)
class Member:
    """One converter of a family.

    Attributes
    ----------
    family
        Name of the family.
    size
        What the family is counted by: N of series-parallel, ladder and Dickson; the number of stages of the
        others.
    detail
        What tells members of one size apart, such as a ladder's tap, and what was left out and why.
    converter
        The converter.
    """

    family: str
    size: int
    detail: str
    converter: Converter


def _code(words: list[_Plates]) -> str:
    return " ".join(f"{a}-{b}/{c}-{d}" for a, b, c, d in words)


def _built(words: list[_Plates], ratio: Fraction, family: str) -> Converter:
    converter = Converter.parse(_code(words))
    if converter.ratio != ratio:
        raise AssertionError(f"{family}: built {converter.code} with ratio {converter.ratio}, wanted {ratio}")
    return converter


def series_parallel(n: int) -> Converter:
    """Step up by ``n``: n - 1 capacitors charged side by side from the input, then stacked upon it.

    Raises
    ------
    CapmusterError
        When ``n`` is below 2.
    """
    _check_size("series-parallel", n, least=2)
    levels = ["I", *(f"x{k}" for k in range(1, n - 1)), "O"]
    words = [("I", "G", levels[k + 1], levels[k]) for k in range(n - 1)]
    return _built(words, Fraction(n), "series-parallel")


def ladder(n: int, tap: int = 1) -> Converter:
    """Step down to ``tap / n``: rails one step apart, n - 1 flying capacitors that move up and down a step.

    A rail capacitor holds each step between two rails, in both phases. The stiff ports G, O and I hold the
    rails 0, ``tap`` and ``n``, so a full column of rail capacitors between two ports would close a loop whose
    charge no law fixes: in each column the outermost one (next to G, and next to I) is left out, which leaves
    n - 2. The flying capacitor at that end then feeds the port directly.

    Raises
    ------
    CapmusterError
        When ``n`` is below 2, or the tap is not inside the ladder.
    """
    _check_size("ladder", n, least=2)
    if not 1 <= tap <= n - 1:
        raise CapmusterError(f"ladder: tap {tap} is outside a ladder of {n} steps", accepted=f"1 to {n - 1}")
    ports = {0: "G", tap: "O", n: "I"}
    rails = [ports.get(level, f"x{level}") for level in range(n + 1)]
    words = [(rails[k + 1], rails[k], rails[k + 2], rails[k + 1]) for k in range(n - 1)]
    held = [*range(1, tap), *range(tap, n - 1)]
    words += [(rails[k + 1], rails[k], rails[k + 1], rails[k]) for k in held]
    return _built(words, Fraction(tap, n), "ladder")


def dickson(n: int) -> Converter:
    """Step up by ``n``: a chain of n - 1 capacitors, each charged by the one before, bottoms alternate.

    Raises
    ------
    CapmusterError
        When ``n`` is below 2.
    """
    _check_size("Dickson", n, least=2)
    words = []
    for k in range(1, n):
        low = ("I" if k == 1 else f"x{k - 1}", "G")
        high = ("O" if k == n - 1 else f"x{k}", "I")
        words.append((*low, *high) if k % 2 else (*high, *low))
    return _built(words, Fraction(n), "Dickson")


def fibonacci(stages: int) -> Converter:
    """Step up by 2, 3, 5, 8, ...: each capacitor charges the next one and lifts the one after it.

    Raises
    ------
    CapmusterError
        When ``stages`` is below 1.
    """
    _check_size("Fibonacci", stages, least=1)
    before, number = 1, 2
    for _ in range(stages - 1):
        before, number = number, before + number
    tops = ["I", *(f"y{k}" for k in range(1, stages)), "O"]
    words = []
    for k in range(1, stages + 1):
        # While k charges from ground, k - 1 is lifted; the top of k - 1 charges k and lifts k + 1.
        low = (tops[k - 1], "G")
        high = (tops[k], tops[max(k - 2, 0)])
        words.append((*low, *high) if k % 2 else (*high, *low))
    return _built(words, Fraction(number), "Fibonacci")


def doubler_chain(stages: int, *, alternate: bool = False) -> Converter:
    """Step up by 2^stages: doublers in a row, with a capacitor from each rail between them to ground.

    All stages charge in the same phase; with ``alternate`` every other stage charges in the other phase.

    Raises
    ------
    CapmusterError
        When ``stages`` is below 1.
    """
    _check_size("doubler chain", stages, least=1)
    rails = ["I", *(f"x{k}" for k in range(1, stages)), "O"]
    words: list[_Plates] = []
    for k in range(stages):
        low, high = (rails[k], "G"), (rails[k + 1], rails[k])
        words.append((*high, *low) if alternate and k % 2 else (*low, *high))
    words += [(rail, "G", rail, "G") for rail in rails[1:-1]]
    return _built(words, Fraction(2**stages), "doubler chain")


def _check_size(family: str, size: int, *, least: int) -> None:
    if size < least:
        raise CapmusterError(f"{family}: size {size} is too small", accepted=f"{least} or more")


_NO_RAIL = 2
"""The ladder without a rail between its ports: it has no rail capacitor."""
_LADDER_NOTE = "; the outermost rail capacitor of each column is left out: redundant between two stiff ports"


def _series_parallels(n: int) -> Iterator[tuple[int, str, Converter]]:
    yield n + 1, f"N = {n + 1}", series_parallel(n + 1)


def _ladders(n: int) -> Iterator[tuple[int, str, Converter]]:
    if n % 2:
        steps = (n + 3) // 2
        note = _LADDER_NOTE if steps > _NO_RAIL else ""
        for tap in range(1, steps // 2 + 1):  # upside down, tap k is tap N - k
            yield steps, f"N = {steps}, tap {tap}{note}", ladder(steps, tap)


def _dicksons(n: int) -> Iterator[tuple[int, str, Converter]]:
    yield n + 1, f"N = {n + 1}", dickson(n + 1)


def _fibonaccis(n: int) -> Iterator[tuple[int, str, Converter]]:
    yield n, _stages(n), fibonacci(n)


def _doubler_chains(n: int) -> Iterator[tuple[int, str, Converter]]:
    if n % 2:
        stages = (n + 1) // 2
        yield stages, _stages(stages), doubler_chain(stages)


def _alternating_chains(n: int) -> Iterator[tuple[int, str, Converter]]:
    if n % 2 and n > 1:  # a single stage has nothing to alternate with
        stages = (n + 1) // 2
        yield stages, _stages(stages), doubler_chain(stages, alternate=True)


def _stages(number: int) -> str:
    return f"{number} stage{'s' if number > 1 else ''}"


_FAMILIES: dict[str, Callable[[int], Iterator[tuple[int, str, Converter]]]] = {
    "series-parallel": _series_parallels,
    "ladder": _ladders,
    "Dickson": _dicksons,
    "Fibonacci": _fibonaccis,
    "doubler chain": _doubler_chains,
    "alternating doubler chain": _alternating_chains,
}
"""For each family size, detail and one converter of each of its cells with so many flying capacitors."""
FAMILY_NAMES = tuple(_FAMILIES)
"""Names of the families, in the order in which a converter lists them."""


@lru_cache(maxsize=8)
def members(most_capacitors: int, least_capacitors: int = 1) -> tuple[Member, ...]:
    """Every family member within these numbers of flying capacitors, in every role.

    Each family lists its members once, from small to large. A converter that belongs to two families appears
    under each of them.
    """
    found = []
    for family, of_size in _FAMILIES.items():
        seen: set[Converter] = set()
        for n in range(max(1, least_capacitors), most_capacitors + 1):
            for size, detail, base in of_size(n):
                for converter in Cell(base.words).converters:
                    if converter not in seen:
                        seen.add(converter)
                        found.append(Member(family, size, detail, converter))
    return tuple(found)


@lru_cache(maxsize=8)
def family_names(most_capacitors: int) -> dict[str, tuple[str, ...]]:
    """Names of the families of each member, by its id."""
    names: dict[str, list[str]] = {}
    for member in members(most_capacitors):
        names.setdefault(member.converter.id, []).append(member.family)
    return {converter_id: tuple(listed) for converter_id, listed in names.items()}


def check_family(name: str) -> str:
    """Return the family's name as it is written here.

    Raises
    ------
    CapmusterError
        When there is no such family.
    """
    for known in FAMILY_NAMES:
        if known.casefold() == name.strip().casefold():
            return known
    raise CapmusterError(f"family: '{shortened(name)}' is unknown", accepted=", ".join(FAMILY_NAMES))
