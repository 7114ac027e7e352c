"""Families at many sizes: ratios and voltages of their definition, roles, coincidences, and the census."""

from __future__ import annotations

from fractions import Fraction
from math import gcd

import pytest

from capmuster.enumerate.converters import converters, table_of
from capmuster.enumerate.errors import CapmusterError
from capmuster.enumerate.families import (
    FAMILY_NAMES,
    check_family,
    dickson,
    doubler_chain,
    family_names,
    fibonacci,
    ladder,
    members,
    series_parallel,
)
from capmuster.enumerate.wiring import Cell, Converter

SIZES = (2, 3, 4, 5, 6, 7, 10, 15, 25, 41)
FIBONACCI = [1, 2]  # in the order in which the family counts them: 1, 2, 3, 5, 8, ...
while len(FIBONACCI) < 42:
    FIBONACCI.append(FIBONACCI[-1] + FIBONACCI[-2])


def of_each_voltage(converter):
    """Capacitor voltages per volt of input, sorted."""
    return sorted(converter.balance.voltages)


@pytest.mark.parametrize("n", SIZES)
def test_series_parallel(n):
    # All are charged side by side from the input, then stacked upon it: M = 1 + (n - 1).
    converter = series_parallel(n)
    assert (converter.n, converter.ratio) == (n - 1, n)
    assert of_each_voltage(converter) == [1] * (n - 1)


@pytest.mark.parametrize("n", SIZES)
def test_dickson(n):
    # Capacitor k holds k times the input: each is charged by the one before, lifted by the input.
    converter = dickson(n)
    assert (converter.n, converter.ratio) == (n - 1, n)
    assert of_each_voltage(converter) == list(range(1, n))


@pytest.mark.parametrize("stages", [1, 2, 3, 4, 5, 8, 13, 40])
def test_fibonacci(stages):
    # Capacitor k is charged by the top of k - 1, which is lifted by that of k - 2: voltages 1, 2, 3, 5, ...
    converter = fibonacci(stages)
    assert (converter.n, converter.ratio) == (stages, FIBONACCI[stages])
    assert of_each_voltage(converter) == FIBONACCI[:stages]


@pytest.mark.parametrize("alternate", [False, True])
@pytest.mark.parametrize("stages", [1, 2, 3, 4, 7, 12, 20])
def test_doubler_chain(stages, alternate):
    # Stage k doubles 2^(k-1); the rail behind it is held at 2^k.
    converter = doubler_chain(stages, alternate=alternate)
    assert (converter.n, converter.ratio) == (2 * stages - 1, 2**stages)
    flying = [2**k for k in range(stages)]
    assert of_each_voltage(converter) == sorted(flying + flying[1:])
    assert (doubler_chain(stages) == doubler_chain(stages, alternate=True)) == (stages == 1)


@pytest.mark.parametrize(
    ("n", "tap"), [(n, tap) for n in range(2, 8) for tap in range(1, n)] + [(21, 8), (21, 1)]
)
def test_ladder(n, tap):
    # N - 1 flying and N - 2 rail capacitors, each holding one step.
    converter = ladder(n, tap)
    assert (converter.n, converter.ratio) == ((n - 1) + (n - 2), Fraction(tap, n))
    assert of_each_voltage(converter) == [Fraction(1, n)] * (2 * n - 3)
    # Upside down it is the ladder with the opposite tap: the same cell, G and I exchanged.
    assert ladder(n, n - tap).cell == converter.cell


def test_known_wirings():
    # Common practice: the doubler as the smallest of all, and the wirings that the notation shows.
    doubler = Converter.parse("I-G/O-I")
    smallest = [series_parallel(2), ladder(2).swapped(), dickson(2), fibonacci(1), doubler_chain(1)]
    assert all(doubler in converter.cell.converters for converter in smallest)
    assert series_parallel(4) == Converter.parse("I-G/a-I I-G/b-a I-G/O-b")


def test_families_that_coincide():
    # By hand: with two capacitors the input lifts both, and the second is charged by the first's top.
    assert dickson(3) == fibonacci(2) == Converter.parse("I-G/a-I O-I/a-G")
    # From three stages on Fibonacci lifts by more than the input.
    assert dickson(4) != fibonacci(3)
    names = family_names(5)
    assert names[Converter.parse("I-G/O-I").id] == FAMILY_NAMES[:5]
    assert names[dickson(3).id] == ("Dickson", "Fibonacci")
    assert names[series_parallel(4).id] == ("series-parallel",)
    assert names[doubler_chain(3, alternate=True).id] == ("alternating doubler chain",)
    assert Converter.parse("I-G/O-G").id not in names


@pytest.mark.parametrize("most", [0, 1, 2, 3, 5, 8, 12])
def test_members_are_those_of_the_size_asked_for(most):
    listed = members(most)
    assert {member.family for member in listed} <= set(FAMILY_NAMES)
    assert all(member.converter.n <= most for member in listed)
    # Each once per family, with all roles of its cell, and grouped in the order of FAMILY_NAMES.
    keys = [(member.family, member.converter) for member in listed]
    assert len(set(keys)) == len(keys)
    assert all((family, role) in set(keys) for family, one in keys for role in one.cell.converters)
    order = [FAMILY_NAMES.index(member.family) for member in listed]
    assert order == sorted(order)
    assert members(most, most) == tuple(member for member in listed if member.converter.n == most)
    # None is missing: sizes counted from the definitions.
    expected = {
        "series-parallel": {series_parallel(n).cell for n in range(2, most + 2)},
        "ladder": {ladder(n, t).cell for n in range(2, most + 4) if 2 * n - 3 <= most for t in range(1, n)},
        "Dickson": {dickson(n).cell for n in range(2, most + 2)},
        "Fibonacci": {fibonacci(k).cell for k in range(1, most + 1)},
        "doubler chain": {doubler_chain(k).cell for k in range(1, most + 1) if 2 * k - 1 <= most},
        "alternating doubler chain": {
            doubler_chain(k, alternate=True).cell for k in range(2, most + 1) if 2 * k - 1 <= most
        },
    }
    for family, cells in expected.items():
        assert {member.converter.cell for member in listed if member.family == family} == cells


@pytest.mark.parametrize("n", [1, 2, 3, 4])
def test_small_members_are_in_the_census(n):
    ids = set(converters(n).ids())
    found = [member.converter.id for member in members(n) if member.converter.n == n]
    assert found
    assert set(found) <= ids


def test_every_role_of_a_step_up():
    # M to 1 over ground, input and output: M, 1/M, M/(M-1), (M-1)/M, -1/(M-1), -(M-1).
    for base in (series_parallel(6), dickson(6), fibonacci(4), doubler_chain(3)):
        M = base.ratio
        expected = {M, 1 / M, M / (M - 1), (M - 1) / M, -1 / (M - 1), 1 - M}
        assert {converter.ratio for converter in Cell.of(base.words).converters} == expected


def test_every_ladder_ratio_is_there():
    ratios = {member.converter.ratio for member in members(9) if member.family == "ladder"}
    wanted = {Fraction(tap, n) for n in range(2, 7) for tap in range(1, n)}
    inverting = {-Fraction(a, b) for a in range(1, 6) for b in range(1, 6) if gcd(a, b) == 1 and a + b <= 6}
    assert ratios == wanted | {1 / ratio for ratio in wanted} | inverting


def test_what_members_say_of_themselves():
    said = {(member.family, member.size): member.detail for member in members(5)}
    assert said["series-parallel", 3] == said["Dickson", 3] == "N = 3"
    assert said["Fibonacci", 1] == "1 stage"
    assert said["doubler chain", 3] == "3 stages"
    assert said["ladder", 2] == "N = 2, tap 1"
    assert said["ladder", 3] == (
        "N = 3, tap 1; the outermost rail capacitor of each column is left out: "
        "redundant between two stiff ports"
    )


@pytest.mark.parametrize(
    ("build", "message"),
    [
        (lambda: series_parallel(1), "series-parallel: size 1 is too small; accepted: 2 or more"),
        (lambda: ladder(1), "ladder: size 1 is too small; accepted: 2 or more"),
        (lambda: dickson(0), "Dickson: size 0 is too small; accepted: 2 or more"),
        (lambda: fibonacci(0), "Fibonacci: size 0 is too small; accepted: 1 or more"),
        (lambda: doubler_chain(-3), "doubler chain: size -3 is too small; accepted: 1 or more"),
        (lambda: ladder(4, 4), "ladder: tap 4 is outside a ladder of 4 steps; accepted: 1 to 3"),
        (lambda: ladder(4, 0), "ladder: tap 0 is outside a ladder of 4 steps; accepted: 1 to 3"),
        (
            lambda: check_family("cascade"),
            f"family: 'cascade' is unknown; accepted: {', '.join(FAMILY_NAMES)}",
        ),
        (lambda: dickson(102), "wiring has 101 capacitors; accepted: 1 to 100"),
    ],
)
def test_bad_sizes(build, message):
    with pytest.raises(CapmusterError) as error:
        build()
    assert str(error.value) == message


def test_names_are_found_in_any_case():
    assert [check_family(f" {name.upper()} ") for name in FAMILY_NAMES] == list(FAMILY_NAMES)


def test_a_converter_too_large_for_exact_tables_is_refused_and_never_miscounted():
    table = table_of([doubler_chain(12)])
    assert Fraction(int(table.voltages[0].max()), int(table.scale[0])) == 2**11
    with pytest.raises(CapmusterError, match="too large to rank"):
        table_of([doubler_chain(40)])
