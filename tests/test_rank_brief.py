"""Briefs: what they derive, what they warn of, and what they refuse."""

from __future__ import annotations

import math
import re
import subprocess
import sys
from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from capmuster import catalogs
from capmuster.enumerate.errors import CapmusterError
from capmuster.rank.inputs.brief import Brief, load_brief
from capmuster.rank.inputs.cautions import cautions
from capmuster.rank.inputs.technology import load_technology

NODE = load_brief("greenhouse-node")
PUMP = load_brief("pump-shelf")
TEXT = """\
title = "Node"
technology = "chip-180nm"

[input]
minimum = "3.0 V"
nominal = "3.7 V"
maximum = "4.2 V"

[output]
use = "regulated"
held = "1.2 V"

[load]
current = "3 mA"

[search]
ratios = ["1/2", "3/7"]
capacitors = 4
switches = 13

[design]
frequency = "5 MHz"
silicon_area = "0.1 mm2"
capacitor_area = "0.4 mm2"
efficiency = "55 %"
"""


def load_text(folder, text, name="node.toml"):
    path = folder / name
    path.write_text(text)
    return load_brief(path)


def refusal(folder, text):
    with pytest.raises(CapmusterError) as caught:
        load_text(folder, text)
    return str(caught.value).replace(f"{folder}/", "")


# What a brief holds.


def test_every_field_is_read_in_base_units(tmp_path):
    brief = load_text(tmp_path, TEXT)
    assert brief == Brief(
        title="Node",
        technology=load_technology("chip-180nm"),
        input_minimum=3.0,
        input_nominal=3.7,
        input_maximum=4.2,
        use="regulated",
        required=1.2,
        current=3e-3,
        frequency=5e6,
        ratios=(Fraction(1, 2), Fraction(3, 7)),
        most_capacitors=4,
        most_switches=13,
        silicon_area=0.1,
        capacitor_area=0.4,
        efficiency_floor=0.55,
        name="node",
    )
    assert NODE.use == "fixed-ratio"
    assert NODE.ratios is None
    assert (NODE.most_switches, NODE.silicon_area, NODE.capacitor_area) == (None, None, None)


def test_a_byte_order_mark_and_foreign_line_ends_do_no_harm(tmp_path):
    path = tmp_path / "node.toml"
    path.write_bytes(b"\xef\xbb\xbf" + TEXT.replace("\n", "\r\n").encode())
    assert load_brief(path) == load_text(tmp_path, TEXT)


def test_a_technology_beside_the_brief_is_found_from_anywhere(tmp_path, monkeypatch):
    shelf = tmp_path / "shelf"
    shelf.mkdir()
    shipped = catalogs.find("technologies", "chip-180nm").read_text()
    (shelf / "own.toml").write_text(shipped.replace('capacitor = "100 %"', 'capacitor = "90 %"'))
    monkeypatch.chdir(tmp_path)
    for written in ("own.toml", "./own.toml", str(shelf / "own.toml")):
        brief = load_text(shelf, TEXT.replace("chip-180nm", written))
        assert brief.technology.name == "own"
        assert brief.technology.capacitor_derating == 0.9


def test_the_fingerprint_is_of_the_content(tmp_path):
    brief = load_text(tmp_path, TEXT)
    same = TEXT.replace('"3.0 V"', "3").replace('"3 mA"', "0.003").replace('["1/2", "3/7"]', '["2/4", "3/7"]')
    assert load_text(tmp_path, "# a note\n" + same, "other.toml").fingerprint == brief.fingerprint
    changes = [
        replace(brief, title="Other"),
        replace(brief, input_minimum=3.1),
        replace(brief, ratios=None),
        replace(brief, most_switches=None),
        replace(brief, technology=replace(brief.technology, switch_derating=0.9)),
    ]
    assert len({brief.fingerprint, *(one.fingerprint for one in changes)}) == 1 + len(changes)


# What follows from it.


@given(
    low=st.decimals("1", "100", places=3),
    share=st.decimals("0.01", "0.99", places=2),
    ratio=st.fractions(min_value=Fraction(1, 8), max_value=8, max_denominator=8),
    current=st.floats(1e-6, 100),
    sign=st.sampled_from([1, -1]),
)
def test_at_r_max_the_output_is_just_what_is_required(low, share, ratio, current, sign):
    # The model of the trade: V_out = M V_in - I R_out (common practice).
    required = sign * float(low) * float(ratio) * float(share)
    brief = replace(
        NODE, input_minimum=float(low), input_nominal=float(low), input_maximum=float(low), required=required,
        current=current, most_capacitors=12,
    )  # fmt: skip
    r_max = brief.r_max(float(sign * ratio))
    assert r_max > 0
    assert brief.holds(sign * ratio)
    output = abs(float(ratio)) * float(low) - current * r_max
    assert output == pytest.approx(abs(required), rel=1e-9)
    assert brief.r_max(float(-sign * ratio)) < 0
    assert not brief.holds(-sign * ratio)


def test_r_max_keeps_the_shape_and_takes_fractions():
    ratios = [[Fraction(1, 2), Fraction(2, 3)], [Fraction(2, 5), Fraction(1, 3)]]
    r_max = NODE.r_max(ratios)
    assert r_max.shape == (2, 2)
    assert r_max == pytest.approx(np.array([[100.0, 800 / 3], [0.0, -200 / 3]]))
    assert NODE.r_max(0.5).shape == ()


def test_the_least_ratio_is_exact_and_not_enough():
    # 0.4 x 3.0 - 1.2 is 2e-16 in floating point; there is no budget all the same.
    assert NODE.least_ratio == Fraction(2, 5)
    assert not NODE.holds(Fraction(2, 5))
    assert NODE.r_max(0.4) == 0
    assert NODE.holds(Fraction(2, 5) + Fraction(1, 10**15))


def test_an_inverting_output_wants_an_inverting_ratio():
    brief = replace(NODE, required=-1.2)
    assert brief.sign == -1
    assert brief.least_ratio == Fraction(2, 5)
    assert [brief.holds(Fraction(m)) for m in ("-1/2", "1/2", "-2/5", "-1")] == [True, False, False, True]


def test_the_same_voltage_may_be_passed_on():
    # Common practice: M = 1 feeds a rail just below the input.
    brief = replace(NODE, required=2.9, ratios=(Fraction(1),))
    assert brief.r_max(1.0) == pytest.approx(0.1 / 3e-3)


# Bad input.


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        ('minimum = "3.0 V"', 'minimum = "3.0 A"', "input.minimum: value '3.0 A' has the wrong unit 'A';"),
        ('minimum = "3.0 V"', 'minimum = "-3.0 V"', "input.minimum: value '-3.0 V' is negative"),
        ('minimum = "3.0 V"', "minimum = inf", "input.minimum: value inf is not finite"),
        ('minimum = "3.0 V"', "minimum = nan", "input.minimum: value nan is not finite"),
        ('minimum = "3.0 V"', "minimum = 1e99999999999999999999", "input.minimum: value inf is not finite"),
        ('minimum = "3.0 V"', 'minimum = "3.0 MV"', "input.minimum: value '3.0 MV' is too large; accepted:"),
        ('minimum = "3.0 V"', "minimum = true", "input.minimum: value true is not a quantity"),
        ('minimum = "3.0 V"', "minimum = 1979-05-27", "input.minimum: value 1979-05-27 is not a quantity"),
        ('minimum = "3.0 V"', 'minimun = "3.0 V"', "input: unknown field 'minimun'; did you mean 'minimum'?"),
        ('minimum = "3.0 V"', "", "input: missing field 'minimum'; accepted: a voltage such as 3.3 V"),
        ('nominal = "3.7 V"', 'nominal = "5 V"', "input.nominal: value 5 V is outside 3 V to 4.2 V"),
        ('nominal = "3.7 V"', 'nominal = "2.9 V"', "input.nominal: value 2.9 V is outside 3 V to 4.2 V"),
        ('minimum = "3.0 V"', 'minimum = "4.3 V"', "input.minimum: value 4.3 V is above the maximum, 4.2 V"),
        ('held = "1.2 V"', 'held = "0 V"', "output.held: value 0 V is not allowed; accepted: a voltage"),
        ('held = "1.2 V"', 'least = "1.2 V"', "output: missing field 'held', which regulated use needs"),
        ('use = "regulated"', 'use = "regulate"', "output.use: value 'regulate' is unknown (did you mean"),
        ('"3 mA"', '"0 mA"', "load.current: value '0 mA' is zero; accepted: a current"),
        ('"3 mA"', "[3]", "load.current: value a list is not a quantity"),
        ('["1/2", "3/7"]', '["1/2", "0"]', "search.ratios 2: ratio '0' is 0; accepted: output over input"),
        ('["1/2", "3/7"]', '["1/0"]', "search.ratios 1: ratio '1/0' divides by 0"),
        ('["1/2", "3/7"]', '["half"]', "search.ratios 1: ratio 'half' is not a number"),
        ('["1/2", "3/7"]', '"all"', "search.ratios: value 'all' is not allowed; accepted: \"any\", or a"),
        ('["1/2", "3/7"]', "[]", "search.ratios: value a list is not allowed"),
        ('["1/2", "3/7"]', '["1/2", "2/4"]', "search.ratios 2: ratio 1/2 is listed twice"),
        ('["1/2", "3/7"]', '["2/5"]', "search.ratios 1: ratio 2/5 cannot hold 1.2 V from 3 V; accepted:"),
        ('["1/2", "3/7"]', '["-1/2"]', "search.ratios 1: ratio -1/2 cannot hold 1.2 V from 3 V"),
        ("capacitors = 4", "capacitors = 0", "search.capacitors: value 0 is not allowed; accepted: a whole"),
        ("capacitors = 4", "capacitors = 3.5", "search.capacitors: value 3.5 is not allowed"),
        ("capacitors = 4", 'capacitors = "4"', "search.capacitors: value '4' is not allowed"),
        ("switches = 13", "switches = -1", "search.switches: value -1 is not allowed"),
        ('"5 MHz"', '"5 mHz"', "design.frequency: value '5 mHz' is too small; accepted: a frequency such"),
        ('silicon_area = "0.1 mm2"', 'silicon_area = "0.1 mm"', "design.silicon_area: value '0.1 mm' has"),
        ('silicon_area = "0.1 mm2"', 'area = "0.1 mm2"', "design.area: area and capacitor_area are both"),
        ('silicon_area = "0.1 mm2"', "", "design.capacitor_area: capacitor_area is given without its"),
        ('efficiency = "55 %"', "efficiency = 55", "design.efficiency: value 55 is too large; accepted: a"),
        ('efficiency = "55 %"', 'efficiency = "100 %"', "design.efficiency: value 100 % is not allowed;"),
        ('title = "Node"', "title = 3", "title: value 3 is not a name; accepted: one line of text"),
        ('title = "Node"', 'title = "Node"\nfrequency = 5e6', "unknown field 'frequency'; it belongs to"),
        ("[load]", "[[load]]", "load: value a list is not a table; accepted: [load] and its fields"),
        ('technology = "chip-180nm"', 'technology = "chip-180"', "technology: unknown technology"),
        ('technology = "chip-180nm"', 'technology = "none.toml"', "technology: technology 'none.toml'"),
        ('title = "Node"', "title = Node", "not valid TOML: Invalid value"),
        ('title = "Node"', 'title = "Node"\ntitle = "Node"', "not valid TOML: Cannot overwrite a value"),
    ],
)  # fmt: skip
def test_a_bad_field_is_named_with_its_place(tmp_path, old, new, message):
    text = TEXT.replace(old, new, 1)
    line = TEXT[: TEXT.index(old)].count("\n") + 1 + new.count("\n")
    shown = refusal(tmp_path, text)
    if "missing field" in message:
        # What is not there is placed at its table, where it should be written.
        table = re.escape(message.partition(":")[0])
        line = text[: re.search(rf"^\[{table}\]", text, re.MULTILINE).start()].count("\n") + 1
    elif "given without" in message:
        line = text[: text.index("capacitor_area")].count("\n") + 1
    assert f"node.toml:{line}: {message}" in shown
    if new != 'least = "1.2 V"':
        assert "\n" not in shown


def test_all_faults_come_at_once_in_the_order_of_the_file(tmp_path):
    text = (
        TEXT.replace("minimum", "minimun")
        .replace('"3 mA"', '"3 mV"')
        .replace('["1/2", "3/7"]', '["x",\n "0"]')
    )
    lines = refusal(tmp_path, text).split("\n")
    assert [line.partition(": ")[0] for line in lines] == [f"node.toml:{n}" for n in (5, 14, 17, 18)]


def test_a_field_is_placed_however_the_file_is_laid_out(tmp_path):
    text = TEXT.replace(
        '[input]\nminimum = "3.0 V"\nnominal = "3.7 V"\nmaximum = "4.2 V"\n',
        'input = { minimum = "3 V", nominal = "3.7 V", maximum = "4.2 A" } # note\n',
    )
    assert "node.toml:4: input.maximum: value '4.2 A'" in refusal(tmp_path, text)
    text = TEXT.replace('[load]\ncurrent = "3 mA"\n', "").replace(
        "[input]", 'load."current" = "3 V"\n[ "input" ]'
    )
    assert "node.toml:4: load.current: value '3 V'" in refusal(tmp_path, text)
    text = TEXT.replace('["1/2", "3/7"]', '[ # note\n "1/2",\n\n # another\n "7/0" ]')
    assert "node.toml:21: search.ratios 2: ratio '7/0' divides by 0" in refusal(tmp_path, text)


def test_a_file_that_is_no_text_or_no_file(tmp_path):
    path = tmp_path / "node.toml"
    path.write_bytes(b'title = "a"\nb = "\xff"\n')
    with pytest.raises(CapmusterError, match=r"node\.toml:2: not UTF-8 text"):
        load_brief(path)
    with pytest.raises(CapmusterError, match=r"none\.toml' cannot be read: No such file"):
        load_brief(tmp_path / "none.toml")
    with pytest.raises(CapmusterError, match="cannot be read: Is a directory"):
        load_brief(tmp_path)
    assert "too deep" in refusal(tmp_path, "a = " + "[" * 5000 + "]" * 5000)
    assert "too long a number" in refusal(tmp_path, "a = " + "9" * 5000)
    assert refusal(tmp_path, "a = [1,\n\n").startswith("node.toml:3: not valid TOML: ")
    assert refusal(tmp_path, "").startswith("node.toml:1: missing field 'title'")


def test_an_unknown_name_lists_what_is_shipped():
    with pytest.raises(CapmusterError) as caught:
        load_brief("greenhous-node")
    assert str(caught.value) == (
        "unknown brief 'greenhous-node'; did you mean 'greenhouse-node'?; accepted: greenhouse-node, "
        "greenhouse-node-losses, greenhouse-node-regulated, greenhouse-node-regulated-losses, pump-shelf, "
        "pump-shelf-losses, or the path of a .toml file"
    )


def test_a_fault_in_the_technology_is_placed_in_its_own_file(tmp_path):
    shipped = catalogs.find("technologies", "chip-180nm").read_text()
    (tmp_path / "own.toml").write_text(shipped.replace('"6.8 nF/mm2"', '"6.8 nF"'))
    shown = refusal(tmp_path, TEXT.replace("chip-180nm", "own.toml"))
    assert re.match(r"own\.toml:\d+: capacitor 1: density: value '6.8 nF' has the wrong unit", shown)


@pytest.mark.parametrize(
    ("capacitors", "largest"),
    # Makowski and Maksimovic, IEEE PESC 1995: Fibonacci numbers.
    [(1, 2), (2, 3), (3, 5), (4, 8), (5, 13), (6, 21)],
)
def test_an_output_beyond_the_largest_ratio_is_refused(tmp_path, capacitors, largest):
    def text(output):
        kept = TEXT.replace('["1/2", "3/7"]', '"any"').replace("capacitors = 4", f"capacitors = {capacitors}")
        return kept.replace('held = "1.2 V"', f"held = {output}")

    load_text(tmp_path, text(3 * largest - 0.001))
    shown = refusal(tmp_path, text(3 * largest))
    assert shown.startswith(
        f"node.toml:11: output.held: no ratio can hold {3 * largest} V from 3 V: it takes one"
    )
    assert f"{capacitors} capacitors reach {largest} at most" in shown
    # Inverting: P + Q up to the same number (complete enumeration for n <= 5), so the largest is one less.
    inverting = largest - 1 if capacitors <= 5 else largest
    load_text(tmp_path, text(-3 * inverting + 0.001))
    assert "no ratio can hold" in refusal(tmp_path, text(-3 * inverting))


def test_a_floor_that_no_single_ratio_reaches_is_refused(tmp_path):
    # Efficiency ceiling V_out / (M V_in) at 4.2 V with M > V_out / 3.0 V: below 3.0 / 4.2 (common practice).
    load_text(tmp_path, TEXT.replace("55 %", "71.4 %"))
    shown = refusal(tmp_path, TEXT.replace("55 %", "71.5 %"))
    assert (
        "node.toml:25: design.efficiency: no ratio can hold the output at the lowest input and reach 71.5 %"
        in shown
    )
    # In fixed-ratio use the output may follow the input, and the bound does not hold.
    load_text(
        tmp_path, TEXT.replace("55 %", "95 %").replace("held", "least").replace("regulated", "fixed-ratio")
    )


@pytest.mark.parametrize(
    "change",
    [
        {"input_minimum": -3.0},
        {"input_minimum": math.nan},
        {"current": 0.0},
        {"frequency": math.inf},
        {"required": 0.0},
        {"most_capacitors": 0},
        {"area": -1.0},
        {"silicon_area": 1.0},
        {"area": None, "silicon_area": 1.0},
        {"ratios": ()},
        {"ratios": (Fraction(1, 3),)},
        {"input_nominal": 5.0},
        {"efficiency_floor": 1.0},
    ],
)
def test_a_brief_made_by_hand_is_checked_as_well(change):
    with pytest.raises(CapmusterError):
        replace(NODE, **change)


def test_reading_a_brief_is_what_loads_the_validation_library():
    code = (
        "import sys; from capmuster.rank.inputs.brief import load_brief;"
        "print('pydantic' in sys.modules); load_brief('pump-shelf'); print('pydantic' in sys.modules)"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.split() == ["False", "True"]


# Cautions. The limits are common practice; every text that names one leaves the decision to local codes.


def test_a_cell_on_a_chip_needs_no_caution():
    assert cautions(NODE) == []


def test_a_48_volt_bus_near_water_does():
    wet, isolation = cautions(PUMP)
    assert wet.startswith(
        "56 V between terminals is above 30 V d.c., commonly the limit for contact in wet places"
    )
    assert "Local codes decide" in wet
    assert "does not isolate" in isolation


@pytest.mark.parametrize(
    ("change", "text"),
    [
        ({"input_maximum": 60.0}, "above 30 V"),
        ({"input_maximum": 60.1}, "above 60 V"),
        ({"required": -12.0}, "above 60 V"),  # 56 V above ground and at least 15.3 V below it
        ({"required": -12.0, "use": "regulated", "input_maximum": 47.9, "input_nominal": 45.0}, "above 30 V"),
        ({"ratios": (Fraction(2),)}, "112 V between terminals is above 60 V"),
        ({"required": 100.0}, "above 60 V"),
        ({"current": 25.0}, "fuse it near the source"),
        ({"area": 300_000.0}, "discharge them"),
        ({"area": None, "silicon_area": 1.0, "capacitor_area": 300_000.0}, "discharge them"),
    ],
)
def test_what_is_dangerous_is_said(change, text):
    assert any(text in caution for caution in cautions(replace(PUMP, **change)))


def test_a_free_area_says_nothing_of_energy():
    assert not any("discharge" in caution for caution in cautions(replace(PUMP, area=None)))
