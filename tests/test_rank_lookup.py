"""Converters found by wiring code or by id."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st
from strategies import census_converters, family_converters, spelt

from capmuster.enumerate.errors import CapmusterError
from capmuster.enumerate.families import members
from capmuster.rank.lookup import find_converter


@given(census_converters())
def test_every_id_of_the_census_names_its_converter(converter):
    assert find_converter(converter.id) == converter
    assert find_converter(f"  {converter.id}\n") == converter


@given(st.data(), family_converters(most=8))
def test_any_spelling_of_a_wiring_is_read(data, converter):
    assert find_converter(data.draw(spelt(converter.words))) == converter


def test_ids_of_large_family_members_are_known():
    large = [one.converter for one in members(12) if one.converter.n == 12]
    assert len(large) > 10
    for converter in large:
        assert find_converter(converter.id) == converter


@pytest.mark.parametrize(
    "text",
    ["", " ", "doubler", "1-", "-1", "1-0h-2", "1-0H", "7-0", "2-zzz", "1-zzzzzz", "I-G", "999-0", "1_0h"],
)
def test_anything_else_is_refused_with_what_is_accepted(text):
    with pytest.raises(CapmusterError) as stopped:
        find_converter(text)
    assert stopped.value.accepted
    assert "\n" not in str(stopped.value)


@given(st.text(max_size=12))
def test_no_text_breaks_the_lookup(text):
    try:
        converter = find_converter(text)
    except CapmusterError as error:
        assert "\n" not in str(error)  # noqa: PT017 -- most texts are refused, some are converters
    else:
        assert find_converter(converter.id) == converter
