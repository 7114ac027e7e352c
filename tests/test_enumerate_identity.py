"""Ids: read back where they can be, distinct, in few digits, and refused in one line."""

from __future__ import annotations

from hashlib import blake2b

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from strategies import census_converters, family_converters

from capmuster.enumerate.converters import converters
from capmuster.enumerate.errors import CapmusterError, IllPosedError, WiringError
from capmuster.enumerate.families import fibonacci, members
from capmuster.enumerate.identity import (
    ALPHABET,
    MOST_READABLE,
    converter_id,
    id_of_number,
    wiring_number,
    words_of_id,
)
from capmuster.enumerate.wiring import Converter

FORM = "an id such as '1-0h', as list prints it"


def places(n: int, m1: int) -> int:
    """Count the wirings of n capacitors over m1 internal nodes in phase 1 and n - 1 - m1 in phase 2."""
    first, second = m1 + 3, n - 1 - m1 + 3
    return (first * (first - 1) * second * (second - 1)) ** n


@pytest.mark.parametrize("n", range(1, MOST_READABLE + 1))
def test_digits_are_the_least_that_hold_every_number(n):
    largest = max(n * places(n, m1) - (n - m1) for m1 in range(n))
    assert largest < 2**63
    digits = id_of_number(largest, n).partition("-")[2]
    assert 32 ** (len(digits) - 1) <= largest < 32 ** len(digits)


def test_seven_capacitors_need_more_than_a_hash_has():
    # Why reading back ends at six.
    assert max(7 * places(7, m1) for m1 in range(7)) > 2**60


def test_a_number_by_hand():
    # Doubler I-G/O-I: phase 1 is the place (1, 0) of 3 x 2, number 2; phase 2 the place (2, 1), number 5;
    # 2 x 6 + 5 = 17, the digit h of base 32 without i, l, o and u.
    assert Converter.parse("I-G/O-I").words in (((1, 0, 2, 1),), ((2, 1, 1, 0),))
    assert converter_id([(1, 0, 2, 1)]) == "1-0h"
    assert wiring_number(np.array([[(1, 0, 2, 1)]]), np.array([0])).tolist() == [17]
    assert len(ALPHABET) == 32
    assert not set("ilou") & set(ALPHABET)


@given(census_converters() | family_converters(most=MOST_READABLE))
@settings(max_examples=80)
def test_a_short_id_is_read_back(converter):
    words = words_of_id(converter.id)
    assert words == converter.words
    assert Converter(words).id == converter.id


@given(st.data())
@settings(max_examples=100)
def test_numbers_and_words_are_one_to_one(data):
    """Also for words that are no converter: whatever number stands in an id is another wiring."""
    n = data.draw(st.integers(1, MOST_READABLE))
    m1 = data.draw(st.integers(0, n - 1))
    number = data.draw(st.integers(0, places(n, m1) - 1)) * n + m1
    words = words_of_id(id_of_number(number, n))
    again = wiring_number(np.array([words], dtype=np.int64), np.array([m1]))
    assert again.tolist() == [number]


@pytest.mark.parametrize("n", [1, 2, 3, 4])
def test_ids_of_the_census(n):
    table = converters(n)
    ids = table.ids()
    assert len(set(ids)) == len(ids)
    rows = np.random.default_rng(n).choice(len(ids), min(len(ids), 50), replace=False)
    assert [ids[row] for row in rows] == [table.converter(row).id for row in rows]


def test_ids_of_large_members():
    found = {}
    for member in members(20):
        found.setdefault(member.converter.id, set()).add(member.converter.words)
        if member.converter.n > MOST_READABLE:
            assert words_of_id(member.converter.id) is None
    assert all(len(words) == 1 for words in found.values())
    # Sixty bits of BLAKE2b over the vertices, spelt again from its definition.
    converter = fibonacci(40)
    text = " ".join("{}-{}/{}-{}".format(*word) for word in converter.words)
    bits = f"{int(blake2b(text.encode(), digest_size=8).hexdigest(), 16):064b}"[:60]
    assert converter.id == "40-" + "".join(ALPHABET[int(bits[k : k + 5], 2)] for k in range(0, 60, 5))


def test_an_id_that_is_no_converter_is_found_out():
    # What a caller does: read the words back, and compare.
    refused = other = 0
    for number in range(32**2):
        text = f"1-{ALPHABET[number // 32]}{ALPHABET[number % 32]}"
        words = words_of_id(text)
        try:
            other += Converter(words).id != text
        except (WiringError, IllPosedError):
            refused += 1
    # Doubler, halver, inverter and the bypass, and I-O/O-I, which holds no voltage: five ids stand.
    assert refused + other == 32**2 - 5


@pytest.mark.parametrize(
    "text",
    [
        "",
        "-",
        "1-",
        "-1b",
        "1",
        "0-1b",
        "01-1b",
        "1-1B",
        "1-1b ",
        " 1-1b",
        "1-1b\n",
        "1-il",
        "1--1",
        "+1-1b",
        "1-1é",
        "\u0661-1b",  # an Arabic digit one
        "9" * 5000 + "-1b",
        "I-G/O-I",
    ],
)
def test_malformed_ids(text):
    with pytest.raises(CapmusterError) as error:
        words_of_id(text)
    shown = text if len(text) <= 40 else text[:37] + "..."
    shown = shown.replace("\n", "\\n")
    assert str(error.value) == f"id '{shown}' is malformed; accepted: {FORM}"


@pytest.mark.parametrize(
    ("text", "accepted"),
    [
        ("1-1bb", "2 for 1 capacitor"),
        ("4-0000000000", "7 for 4 capacitors"),
        ("7-1b", "12 for 7 capacitors"),
    ],
)
def test_a_wrong_number_of_digits(text, accepted):
    with pytest.raises(CapmusterError) as error:
        words_of_id(text)
    digits = len(text.partition("-")[2])
    assert str(error.value) == f"id '{text}' has {digits} digits after the dash; accepted: {accepted}"
