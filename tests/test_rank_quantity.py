"""Quantities are read exactly, with the field's unit and the SI's prefixes, and refused with a reason."""

from __future__ import annotations

import math
from decimal import Decimal
from fractions import Fraction

import pytest
from hypothesis import given
from hypothesis import strategies as st

from capmuster.enumerate.errors import CapmusterError
from capmuster.rank.inputs.quantity import UNITS, format_quantity, parse_quantity, parse_ratio, read_quantity

# BIPM, "The International System of Units (SI)", 9th edition, table 7.
SI_PREFIXES = {"f": -15, "p": -12, "n": -9, "u": -6, "µ": -6, "m": -3, "": 0, "k": 3, "M": 6, "G": 9, "T": 12}
PLAIN_UNITS = ["V", "A", "W", "Hz", "F", "C", "J", "s", "ohm"]


@given(
    number=st.decimals(min_value="0.0001", max_value="9999", places=4),
    prefix=st.sampled_from(sorted(SI_PREFIXES)),
    unit=st.sampled_from(PLAIN_UNITS),
    space=st.sampled_from(["", " ", "  "]),
    written=st.booleans(),
)
def test_a_prefix_is_a_power_of_ten(number, prefix, unit, space, written):
    text = f"{number}{space}{prefix}{unit if written else ''}"
    assert parse_quantity(text, unit) == Fraction(number) * Fraction(10) ** SI_PREFIXES[prefix]


@pytest.mark.parametrize(
    ("text", "unit", "value"),
    [
        ("10 uF", "F", "0.00001"),
        ("2.5 mm2", "mm2", "2.5"),
        ("2.5 mm²", "mm2", "2.5"),
        ("2.5 mm^2", "mm2", "2.5"),
        ("4.7k", "ohm", "4700"),
        ("4.7 k\N{GREEK CAPITAL LETTER OMEGA}", "ohm", "4700"),
        ("4.7 k\N{OHM SIGN}", "ohm", "4700"),
        ("3 \N{GREEK SMALL LETTER MU}A", "A", "0.000003"),
        ("1.2 V", "V", "1.2"),
        (".5 V", "V", "0.5"),
        ("5.", "V", "5"),
        ("1e3", "Hz", "1000"),
        ("1.5E-3 A", "A", "0.0015"),
        ("85 %", "1", "0.85"),
        ("0.85", "1", "0.85"),
        ("0.5 ohm mm2", "ohm mm2", "0.5"),
        ("98 mohm mm2", "ohm mm2", "0.098"),
        ("98 mΩ·mm²", "ohm mm2", "0.098"),
        ("98 mohm*mm2", "ohm mm2", "0.098"),
        ("2 kohm um2", "ohm mm2", "0.002"),
        ("1.5 nF/mm2", "F/mm2", "1.5e-9"),
        ("1.5 nF / mm2", "F/mm2", "1.5e-9"),
        ("1.5 fF/um2", "F/mm2", "1.5e-9"),  # common practice: 1 fF/um2 = 1 nF/mm2
        ("15 uF/cm2", "F/mm2", "1.5e-7"),
        ("2 cm2", "mm2", "200"),
        ("400 um2", "mm2", "0.0004"),
        (5, "V", "5"),
        (1.2, "V", "1.2"),
        (Decimal("0.10"), "V", "0.1"),
    ],
)
def test_what_people_write_is_read_exactly(text, unit, value):
    assert parse_quantity(text, unit) == Fraction(value)


def test_m_is_milli_and_capital_m_is_mega():
    # SI; in SPICE both would be milli.
    assert parse_quantity("2 MHz", "Hz") == 2_000_000
    assert parse_quantity("2 mHz", "Hz") == Fraction(2, 1000)


@pytest.mark.parametrize(
    ("value", "unit", "reason"),
    [
        ("10 uV", "F", "wrong unit 'uV'"),
        ("10 R", "ohm", "wrong unit 'R'"),
        ("3 v", "V", "wrong unit 'v'"),
        ("3 KHz", "Hz", "wrong unit 'KHz'"),
        ("3 Meg", "Hz", "wrong unit 'Meg'"),
        ("2.5 mm", "mm2", "wrong unit 'mm'"),
        ("2.5m", "mm2", "wrong unit 'm'"),  # metres or thousandths: not guessed
        ("1.5 nF", "F/mm2", "wrong unit 'nF'"),
        ("1.5n", "F/mm2", "wrong unit 'n'"),
        ("1 ohm/mm2", "ohm mm2", "wrong unit 'ohm/mm2'"),
        ("5 %", "V", "wrong unit '%'"),
        ("3 V V", "V", "wrong unit"),
        ("V", "V", "not a number"),
        ("", "V", "not a number"),
        ("1,2 V", "V", "not a number"),
        ("1.2.3 V", "V", "not a number"),
        ("1e99999 V", "V", "not a number"),
        ("\N{ARABIC-INDIC DIGIT THREE} V", "V", "not a number"),
        ("1e40 V", "V", "out of range"),
        ("1e-40 V", "V", "out of range"),
        (Decimal("1e999999999"), "V", "out of range"),
        ("inf V", "V", "not finite"),
        ("-nan", "V", "not finite"),
        (math.inf, "V", "not finite"),
        (math.nan, "V", "not finite"),
        (Decimal("inf"), "V", "not finite"),
        (True, "V", "not a quantity"),
        (None, "V", "not a quantity"),
        (["1 V"], "V", "value a list is not a quantity"),
        ({"V": 1}, "V", "value a table is not a quantity"),
        ("-3 V", "V", "negative"),
        (-3, "V", "negative"),
        ("0 V", "V", "zero"),
    ],
)
def test_anything_else_is_refused_with_the_reason(value, unit, reason):
    with pytest.raises(CapmusterError) as caught:
        parse_quantity(value, unit)
    assert reason in caught.value.problem
    assert "such as" in caught.value.accepted
    assert "\n" not in str(caught.value)


def test_signs_and_limits():
    assert parse_quantity("-3 V", "V", sign="any") == -3
    assert parse_quantity("0 V", "V", sign="not negative") == 0
    assert parse_quantity("0.1", "1", least=0.1, most=0.1) == Fraction(1, 10)
    with pytest.raises(CapmusterError, match=r"'120 %' is too large; accepted: .*, above 0, 100 % at most$"):
        parse_quantity("120 %", "1", most=1.0)
    with pytest.raises(CapmusterError, match=r"'2 mHz' is too small; accepted: .*, 1 Hz or more$"):
        parse_quantity("2 mHz", "Hz", least=1.0)
    with pytest.raises(CapmusterError, match=r"negative; accepted: .*, 0 or above$"):
        parse_quantity("-1 A", "A", sign="not negative")


def test_the_field_and_its_place_are_named():
    with pytest.raises(CapmusterError) as caught:
        read_quantity("input.minimum", "3 A", "V", place="node.toml:7")
    assert str(caught.value) == (
        "node.toml:7: input.minimum: value '3 A' has the wrong unit 'A'; "
        "accepted: a voltage such as 3.3 V or 850 mV (a plain number is in V), above 0"
    )


def test_a_long_value_is_cut_and_stays_on_one_line():
    with pytest.raises(CapmusterError) as caught:
        parse_quantity("3 \n" + "x" * 10_000, "V")
    assert len(str(caught.value)) < 400
    assert "\n" not in str(caught.value)


@pytest.mark.parametrize(
    ("value", "unit", "text"),
    [
        (4.7e-3, "ohm", "4.7 mΩ"),
        (999.4, "V", "999 V"),
        (999.96, "ohm", "1 kΩ"),
        (0.99996, "V", "1 V"),
        (2.5e6, "Hz", "2.5 MHz"),
        (3e-6, "A", "3 µA"),
        (0.00042, "mm2", "0.00042 mm²"),
        (123_456.0, "mm2", "123000 mm²"),
        (1.5e-9, "F/mm2", "1.5 nF/mm²"),
        (0.098, "ohm mm2", "98 mΩ mm²"),
        (0.8523, "1", "85.2 %"),
        (1.0, "1", "100 %"),
        (0.0, "V", "0 V"),
        (-0.0, "V", "0 V"),
        (-1.2, "V", "-1.2 V"),
        (math.inf, "ohm", "∞ Ω"),
        (-math.inf, "ohm", "-∞ Ω"),
        (math.nan, "ohm", "n/a"),
    ],
)
def test_tables_show_three_digits_and_a_prefix(value, unit, text):
    assert format_quantity(value, unit) == text


@given(
    value=st.floats(1e-14, 1e14) | st.floats(-1e14, -1e-14),
    unit=st.sampled_from(UNITS),
    digits=st.integers(2, 12),
)
def test_what_is_written_reads_back_to_the_digits_written(value, unit, digits):
    back = float(parse_quantity(format_quantity(value, unit, digits), unit, sign="any"))
    assert back == pytest.approx(value, rel=0.51 * 10.0 ** (1 - digits))


@given(value=st.floats(1e-14, 1e14), unit=st.sampled_from(PLAIN_UNITS))
def test_a_prefix_leaves_one_to_three_digits_before_the_point(value, unit):
    number = float(format_quantity(value, unit).split()[0])
    assert 1 <= number < 1000


@given(top=st.integers(-(10**9), 10**9), bottom=st.integers(1, 10**9))
def test_a_ratio_is_a_fraction(top, bottom):
    if top:
        assert parse_ratio(f" {top} / {bottom} ") == Fraction(top, bottom)


@pytest.mark.parametrize(
    ("text", "ratio"),
    [
        ("2", "2"),
        ("-1", "-1"),
        ("+2/4", "1/2"),
        ("2/-5", "-2/5"),
        ("0.4", "2/5"),
        (Decimal("0.4"), "2/5"),
        (3, "3"),
    ],
)
def test_ratios_as_people_write_them(text, ratio):
    assert parse_ratio(text) == Fraction(ratio)


@pytest.mark.parametrize(
    ("text", "reason"),
    [
        ("0", "is 0"),
        ("0/3", "is 0"),
        ("0.0", "is 0"),
        ("1/0", "divides by 0"),
        ("x", "is not a number"),
        ("", "is not a number"),
        ("1/2/3", "is not a number"),
        ("nan", "is not a number"),
        ("inf", "is not a number"),
        (math.nan, "is not a number"),
        ("3:1", "reads both ways"),
        ("1" * 40, "is not a number"),
        (True, "is not a number"),
        (None, "is not a number"),
    ],
)
def test_a_ratio_of_nothing_is_refused(text, reason):
    with pytest.raises(CapmusterError, match=reason) as caught:
        parse_ratio(text)
    assert "2/5" in caught.value.accepted
