"""Converters and cells as values: the wiring code, the JSON form, roles, and what is refused."""

from __future__ import annotations

import copy
import dataclasses
import json
import pickle
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from strategies import census_converters, family_converters, spelt, with_renaming

from capmuster.enumerate.census import census
from capmuster.enumerate.errors import CapmusterError, IllPosedError, WiringError
from capmuster.enumerate.families import series_parallel
from capmuster.enumerate.notation import MOST_CAPACITORS
from capmuster.enumerate.wiring import CELL_PORTS, ROLES, Cell, Converter, node_name, parse_words, vertex_name

SYNTAX = (
    "one word per capacitor, plus-minus/plus-minus, e.g. 'I-G/O-I'; ports G, I, O; "
    "internal nodes in lower case"
)
DOUBLER = '{"kind": "converter", "capacitors": [{"plus": ["I", "O"], "minus": ["G", "I"]}]}'
SHAPE = DOUBLER.replace("]}]}", "]}, ...]}")


def test_nodes_are_named_like_the_columns_of_a_spreadsheet():
    names = [node_name(k) for k in range(26 + 26 * 26 + 1)]
    assert names[:3] == ["a", "b", "c"]
    assert names[25:28] == ["z", "aa", "ab"]
    assert names[26 + 26 * 26 - 1 :] == ["zz", "aaa"]
    assert len(set(names)) == len(names)
    assert [vertex_name(v) for v in range(5)] == ["G", "I", "O", "a", "b"]
    assert [vertex_name(v, CELL_PORTS) for v in range(4)] == ["A", "B", "C", "a"]


@given(st.data())
@settings(max_examples=60)
def test_any_spelling_reads_as_the_same_converter(data):
    converter, words = data.draw(with_renaming(census_converters() | family_converters(most=12)))
    code = data.draw(spelt(words))
    read = Converter.parse(code)
    assert read == converter
    assert hash(read) == hash(converter)
    assert (read.code, read.id, read.ratio) == (converter.code, converter.id, converter.ratio)
    assert str(read) == read.code
    assert Converter.parse(read.code).words == read.words
    assert Converter.from_json(read.to_json()) == converter


@given(st.data())
@settings(max_examples=40)
def test_a_cell_is_the_same_whatever_its_ports_are_called(data):
    converter, words = data.draw(with_renaming(census_converters() | family_converters(most=10)))
    ports = data.draw(st.permutations(CELL_PORTS))
    cell = Cell.parse(data.draw(spelt(words, ports)))
    assert cell == converter.cell
    assert converter in cell.converters
    assert Cell.parse(cell.code) == Cell.from_json(cell.to_json()) == Cell.of(cell.words) == cell
    assert all(member.cell == cell for member in cell.converters)


@given(census_converters())
@settings(max_examples=40)
def test_roles_of_a_cell(converter):
    cell = converter.cell
    a, b, c = cell.triple
    assert a + b == c
    made = {}
    for role in ROLES:
        try:
            made[role] = cell.converter(role)
        except IllPosedError as error:
            assert a == 0  # only a unity cell refuses a role
            assert "no charge over a whole cycle" in str(error)  # noqa: PT017 -- not every cell refuses
    assert set(made.values()) == set(cell.converters)
    assert list(cell.converters) == sorted(cell.converters, key=lambda member: member.words)
    # Energy balance g . U = 0 over the three ports: a quotient of two charges with its sign, for each role.
    if a:
        pairs = ((-a, b), (-b, a), (c, a), (a, c), (c, b), (b, c))
        expected = {Fraction(x, y) for x, y in pairs}
        assert len(made) == len(ROLES)
    else:
        expected = {Fraction(1)}
        assert len(made) == 2
    assert {member.ratio for member in cell.converters} == expected


def test_a_cell_of_the_census_in_every_form():
    rows = census(2).words
    cells = [Cell.of(words) for words in rows]
    assert len(set(cells)) == len(rows)
    assert [Cell.parse(cell.code) for cell in cells] == cells


def test_values_cannot_be_changed_and_survive_copying():
    converter = series_parallel(4)
    _ = converter.balance, converter.id
    with pytest.raises(dataclasses.FrozenInstanceError):
        converter.words = ()
    pickled = pickle.loads(pickle.dumps(converter))  # noqa: S301 -- our own bytes
    for same in (pickled, copy.deepcopy(converter), copy.copy(converter)):
        assert same == converter
        assert (same.balance, same.id) == (converter.balance, converter.id)
    cell = converter.cell
    assert pickle.loads(pickle.dumps(cell)) == cell  # noqa: S301 -- our own bytes
    assert cell != converter
    assert {converter: 1}[Converter.parse("I-G/a-I I-G/b-a I-G/O-b")] == 1


def test_no_way_to_make_one_skips_the_checks():
    # The constructor itself: phases exchanged and polarity turned, the doubler all the same.
    assert Converter(((0, 1, 1, 2),)) == Converter.parse("I-G/O-I")
    assert Converter.of(np.array([[1, 2, 0, 1]], dtype=np.int8)) == Converter.parse("I-G/O-I")
    # Numbers of internal nodes may have gaps.
    assert Converter.of([(1, 0, 9, 1), (1, 0, 2, 9)]) == series_parallel(3)
    assert Cell(((0, 1, 1, 2),)) == Converter.parse("I-G/O-I").cell
    with pytest.raises(IllPosedError):
        Converter(((1, 0, 2, 1), (1, 0, 2, 1)))
    with pytest.raises(IllPosedError):
        Cell(((1, 0, 1, 0),))


@given(census_converters() | family_converters(most=12))
@settings(max_examples=40)
def test_exchanging_input_and_output(converter):
    assert converter.swapped().ratio == 1 / converter.ratio
    assert converter.swapped().swapped() == converter
    assert converter.swapped().cell == converter.cell


def test_internal_nodes():
    converter = series_parallel(5)
    assert {converter.internal_nodes(1), converter.internal_nodes(2)} == {0, 3}
    assert converter.n == 4


@pytest.mark.parametrize(
    ("code", "message"),
    [
        ("I-G", "wiring: capacitor 1 'I-G' is malformed"),
        ("I-G/O-I/G-O", "wiring: capacitor 1 'I-G/O-I/G-O' is malformed"),
        ("I-G/O-I I-G/O", "wiring: capacitor 2 'I-G/O' is malformed"),
        ("I-G-a/O-I", "wiring: capacitor 1 'I-G-a/O-I' is malformed"),
        ("I/G-O/I", "wiring: capacitor 1 'I/G-O/I' is malformed"),
        ("I--G/O-I", "wiring: capacitor 1 'I--G/O-I' is malformed"),
        ("I-/O-I", "wiring: capacitor 1 'I-/O-I': unknown vertex ''"),
        ("I-G/O-X", "wiring: capacitor 1 'I-G/O-X': unknown vertex 'X'"),
        ("I-G/O-1", "wiring: capacitor 1 'I-G/O-1': unknown vertex '1'"),
        ("I-G/O-ä", "wiring: capacitor 1 'I-G/O-ä': unknown vertex 'ä'"),
        ("A-B/B-C", "wiring: capacitor 1 'A-B/B-C': unknown vertex 'A'"),
        ("I-G/O-I," * 9, f"wiring: capacitor 1 '{('I-G/O-I,' * 5)[:37]}...' is malformed"),
    ],
)
def test_malformed_codes(code, message):
    with pytest.raises(WiringError) as error:
        Converter.parse(code)
    assert str(error.value) == f"{message}; accepted: {SYNTAX}"


@pytest.mark.parametrize(
    ("code", "phase"), [("I-I/O-G", 1), ("I-G/O-O", 2), ("a-a/O-G", 1), ("I-G/b-b", 2), ("I-I/O-O", 1)]
)
def test_a_shorted_capacitor(code, phase):
    with pytest.raises(WiringError) as error:
        Converter.parse(f"I-G/O-I {code}")
    assert str(error.value) == (
        f"wiring: capacitor 2 '{code}' has both plates on one vertex in phase {phase}; "
        "accepted: two different vertices in each phase"
    )


@pytest.mark.parametrize(
    ("words", "message"),
    [
        ([(1, 0, 2)], "wiring: capacitor 1 [1, 0, 2] is malformed"),
        ([(1, 0, 2, 1, 0)], "wiring: capacitor 1 [1, 0, 2, 1, 0] is malformed"),
        ([(1, 0, 2, 1), ()], "wiring: capacitor 2 [] is malformed"),
        ([(1, -1, 2, 1)], "wiring: capacitor 1 [1, -1, 2, 1] is malformed"),
        ([(1, 1, 2, 1)], "wiring: capacitor 1 [1, 1, 2, 1] has both plates on one vertex in phase 1"),
        ([(1, 0, 3, 3)], "wiring: capacitor 1 [1, 0, 3, 3] has both plates on one vertex in phase 2"),
    ],
)
@pytest.mark.parametrize("kind", [Converter, Cell])
def test_malformed_words(kind, words, message):
    with pytest.raises(WiringError) as error:
        kind.of(words)
    assert error.value.problem == message


@pytest.mark.parametrize("text", ["", "  \n "])
@pytest.mark.parametrize("kind", [Converter, Cell])
def test_a_wiring_without_capacitors(kind, text):
    for make in (lambda: kind.parse(text), lambda: kind.of([]), lambda: kind(())):
        with pytest.raises(WiringError) as error:
            make()
        assert str(error.value) == f"wiring has no capacitor; accepted: 1 to {MOST_CAPACITORS}"


def test_the_largest_wiring():
    assert series_parallel(MOST_CAPACITORS + 1).ratio == MOST_CAPACITORS + 1
    with pytest.raises(WiringError) as error:
        series_parallel(MOST_CAPACITORS + 2)
    assert str(error.value) == "wiring has 101 capacitors; accepted: 1 to 100"


def test_the_json_form():
    assert Converter.parse("I-G/O-I").to_json() == DOUBLER
    # Names of nodes and order of keys are free, and what is not asked for is not read.
    loose = {
        "note": "two stages",
        "capacitors": [
            {"minus": ["G", "I"], "plus": ["I", "mid"], "name": "C9"},
            {"minus": ["G", "mid"], "plus": ["I", "O"]},
        ],
        "kind": "converter",
    }
    assert Converter.from_json(json.dumps(loose)) == series_parallel(3)
    assert json.loads(Cell.parse("A-B/B-C").to_json())["kind"] == "cell"


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("", "wiring: '' is no JSON"),
        ("{\n\ud800", r"wiring: '{\n\ud800' is no JSON"),
        ("[" * 100_000, "wiring: '" + "[" * 37 + "...' is no JSON"),
        ('{"kind": ' + "9" * 5000 + "}", "wiring: '{\"kind\": 9999999999999999999999999999...' is no JSON"),
        ("[1]", "wiring in JSON: kind is missing"),
        ("{}", "wiring in JSON: kind is missing"),
        (DOUBLER.replace("converter", "cell"), 'wiring in JSON: kind is "cell"'),
        ('{"kind": "converter"}', "wiring in JSON: capacitors is missing"),
        ('{"kind": "converter", "capacitors": "I-G/O-I"}', 'wiring in JSON: capacitors is "I-G/O-I"'),
        ('{"kind": "converter", "capacitors": {"plus": 1}}', 'wiring in JSON: capacitors is {"plus": 1}'),
        ('{"kind": "converter", "capacitors": [7]}', "wiring in JSON: plus of capacitor 1 is missing"),
        (DOUBLER.replace('["I", "O"]', '"IO"'), 'wiring in JSON: plus of capacitor 1 is "IO"'),
        (DOUBLER.replace('"G", "I"', '"G"'), 'wiring in JSON: minus of capacitor 1 is ["G"]'),
        (DOUBLER.replace('"G", "I"', '"G", 1'), 'wiring in JSON: minus of capacitor 1 is ["G", 1]'),
        (
            DOUBLER.replace('"G", "I"', '"G", "I-G/O-I I"'),
            'wiring in JSON: minus of capacitor 1 is ["G", "I-G/O-I I"]',
        ),
        (DOUBLER.replace('"G", "I"', '"G", "X"'), 'wiring in JSON: minus of capacitor 1 is ["G", "X"]'),
    ],
)
def test_malformed_json(text, message):
    with pytest.raises(WiringError) as error:
        Converter.from_json(text)
    assert str(error.value) == f"{message}; accepted: {SHAPE}"


def test_json_goes_through_the_checks_of_the_code():
    with pytest.raises(WiringError, match="both plates on one vertex in phase 2"):
        Converter.from_json(DOUBLER.replace('"G", "I"', '"G", "O"'))
    with pytest.raises(WiringError, match="wiring has no capacitor"):
        Converter.from_json('{"kind": "converter", "capacitors": []}')
    with pytest.raises(WiringError) as error:
        Cell.from_json(DOUBLER)
    assert error.value.accepted == SHAPE.replace("converter", "cell").translate(str.maketrans("GIO", "ABC"))


def test_unknown_roles():
    cell = Cell.parse("A-B/B-C")
    for role in ("gio", "GIOO", "GI", "", "IGG"):
        with pytest.raises(WiringError) as error:
            cell.converter(role)
        assert str(error.value) == f"role '{role}' is unknown; accepted: GIO, GOI, IGO, IOG, OGI, OIG"


def test_a_cell_that_no_role_makes_a_converter():
    with pytest.raises(IllPosedError) as error:
        Cell.parse("A-B/A-B")
    assert error.value.problem == "wiring: no port delivers charge over a whole cycle"
    with pytest.raises(IllPosedError, match="C1 and C2 are redundant"):
        Cell.parse("A-B/B-C A-B/B-C")


@given(st.text(alphabet="IGOab-/ \n0é", max_size=24))
@settings(max_examples=300)
def test_any_text_is_read_or_refused_in_one_line(text):
    try:
        words = parse_words(text)
    except WiringError as error:
        assert "\n" not in str(error)  # noqa: PT017 -- most texts are refused, not all
    else:
        assert len(words) == len(text.split())
    try:
        Converter.parse(text)
    except CapmusterError as error:
        assert "\n" not in str(error)  # noqa: PT017 -- as above
