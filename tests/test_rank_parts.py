"""Catalogs of parts: how they are read, what they say, and that they look like the trade."""

from __future__ import annotations

from dataclasses import fields, replace
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.interpolate import make_interp_spline

from capmuster import catalogs
from capmuster.enumerate.errors import CapmusterError
from capmuster.rank.inputs.brief import load_brief
from capmuster.rank.inputs.parts import CapacitorPart, SwitchPart, load_stock
from capmuster.rank.inputs.parts_file import read_capacitors, read_switches
from capmuster.rank.inputs.parts_request import PartsRequest

STOCK = load_stock()
CAPACITORS = {one.name: one for one in STOCK.capacitors}
SWITCHES = {one.name: one for one in STOCK.switches}
CLASS_TWO = [one for one in STOCK.capacitors if one.dielectric != "C0G"]

CAPACITOR_HEADER = (
    "part,dielectric,case,nominal [uF],tolerance [%],rating [V],bias curve [V:%],series resistance [mohm],"
    "footprint [mm2],price [EUR]"
)
SWITCH_HEADER = (
    "part,case,rating [V],on-resistance [mohm],drive [V],resistance rise [%/K],gate charge [nC],"
    "output charge [nC],output charge voltage [V],output charge exponent [1],footprint [mm2],price [EUR]"
)
ROW = "c1,X7R,1206,10,10,25,0:100 12.5:80 25:50,3.5,9.6,0.09"
SWITCH_ROW = "n1,2x2,25,7,4.5,0.34,5.4,5,12,0.5,6.8,0.19"


def write(folder, *lines):
    path = folder / "some.csv"
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")
    return path


# What a file says.


def test_units_come_from_the_header(tmp_path):
    (one,) = read_capacitors(write(tmp_path, "# a note", "", CAPACITOR_HEADER, ROW))
    assert one == CapacitorPart(
        name="c1",
        dielectric="X7R",
        case="1206",
        nominal=10e-6,
        tolerance=0.1,
        rating=25.0,
        bias=((0.0, 1.0), (12.5, 0.8), (25.0, 0.5)),
        series_resistance=3.5e-3,
        footprint=9.6,
        price=0.09,
    )
    other = (
        CAPACITOR_HEADER.replace("[uF]", "[nF]")
        .replace("[mohm]", "[ohm]")
        .replace("tolerance [%]", "tolerance [1]")
    )
    row = "c1,X7R,1206,10000,0.1,25,0:100 12.5:80 25:50,0.0035,9.6,0.09"
    assert read_capacitors(write(tmp_path, other, row)) == (one,)


def test_columns_come_in_any_order(tmp_path):
    (one,) = read_switches(write(tmp_path, SWITCH_HEADER, SWITCH_ROW))
    columns = list(zip(SWITCH_HEADER.split(","), SWITCH_ROW.split(","), strict=True))[::-1]
    turned = [",".join(cells) for cells in zip(*columns, strict=True)]
    assert read_switches(write(tmp_path, *turned)) == (one,)
    assert one.rise == pytest.approx(0.0034, rel=1e-15)
    assert one.gate_charge == 5.4e-9


@pytest.mark.parametrize(
    ("old", "new", "line", "problem", "accepted"),
    [
        (ROW, "", 1, "no part follows the header", "a line for each part"),
        ("[uF]", "[V]", 1, "nominal: unit 'V'", "uF or nF"),
        (" [uF]", "", 1, "nominal: unit ''", "uF or nF"),
        ("[V:%]", "[%]", 1, "bias curve: unit '%'", "V:%"),
        ("nominal", "nominale", 1, "did you mean 'nominal'", "rating"),
        (",price [EUR]", "", 1, "missing column 'price'", "price"),
        (",price [EUR]", ",price [EUR],price [EUR]", 1, "'price' comes twice", "once"),
        (ROW, f"{ROW},1", 2, "11 cells in a row of 10 columns", ""),
        (",10,10,", ",10 uF,10,", 2, "nominal: value '10 uF' is not a number", "plain number"),
        (",10,10,", ",-10,10,", 2, "nominal: value '-10 uF' is negative", "above 0"),
        (",10,10,", ",nan,10,", 2, "nominal: value 'nan' is not a number", "plain number"),
        (",10,10,", ",10,95,", 2, "tolerance: value '95 %' is too large", "90 %"),
        ("25:50", "25:90", 2, "is no bias curve", "0:100"),
        ("25:50", "12:50", 2, "is no bias curve", "0:100"),
        ("0:100", "0:99", 2, "is no bias curve", "0:100"),
        ("25:50", "25-50", 2, "point '25-50'", "0:100"),
        ("25:50", "24:50", 2, "below the rating of 25 V", "up to the rating"),
        (ROW, f"{ROW}\n# no part\n{ROW}", 4, "'c1' stands in line 2 already", "once"),
        ("c1,", ",", 2, "part: value '' is not a name", "word"),
        ("c1,", '"c1,', 2, "not valid CSV", "cells"),
    ],
)
def test_what_is_wrong_is_named_with_its_line(tmp_path, old, new, *, line, problem, accepted):
    text = f"{CAPACITOR_HEADER}\n{ROW}"
    assert old in text
    path = write(tmp_path, text.replace(old, new))
    with pytest.raises(CapmusterError) as caught:
        read_capacitors(path)
    assert str(caught.value).startswith(f"{path}:{line}: ")
    assert problem in caught.value.problem
    assert accepted in (caught.value.accepted or "")
    assert "\n" not in str(caught.value)


def test_all_faults_of_a_file_come_at_once_in_order(tmp_path):
    bad = SWITCH_ROW.replace(",7,", ",0,"), SWITCH_ROW.replace("0.34", "x").replace("n1", "n2"), "n3"
    path = write(tmp_path, SWITCH_HEADER, *bad)
    with pytest.raises(CapmusterError) as caught:
        read_switches(path)
    lines = str(caught.value).splitlines()
    assert [line.split(": ")[0] for line in lines] == [f"{path}:{k}" for k in (2, 3, 4)]


def test_a_file_that_is_not_there_or_not_text_is_refused(tmp_path):
    with pytest.raises(CapmusterError, match="cannot be read"):
        read_capacitors(tmp_path / "none.csv")
    (tmp_path / "some.csv").write_bytes(b"part\xff\xfe")
    with pytest.raises(CapmusterError, match="not UTF-8"):
        read_capacitors(tmp_path / "some.csv")
    with pytest.raises(CapmusterError, match="holds no header"):
        read_capacitors(write(tmp_path, "# nothing else"))
    with pytest.raises(CapmusterError, match="did you mean 'board-ceramics'") as caught:
        load_stock("board-ceramic")
    assert "board-mosfets" in caught.value.accepted


# What a part does.


@given(volts=st.floats(0, 120), least=st.booleans(), part=st.sampled_from(STOCK.capacitors))
def test_bias_is_read_on_straight_lines_between_points(volts, least, part):
    # scipy's spline of degree 1 is an independent reading of the same points.
    known, shares = np.array(part.bias).T
    line = make_interp_spline(known, shares, k=1)
    expected = part.nominal * (1 - part.tolerance * least) * line(min(volts, known[-1]))
    assert part.capacitance(volts, least=least) == pytest.approx(float(expected), rel=1e-12)


@given(part=st.sampled_from(STOCK.capacitors), low=st.floats(0, 100), high=st.floats(0, 100))
def test_more_bias_never_leaves_more_capacitance(part, low, high):
    low, high = sorted((low, high))
    assert part.capacitance(low) >= part.capacitance(high) > 0


def test_a_switch_warms_up_and_its_output_charge_grows():
    part = SwitchPart("n", "2x2", 40, 0.01, 4.5, 0.004, 5e-9, 20e-9, 20, 0.5, 7, 0.2)
    assert part.resistance_at(25) == 0.01
    assert part.resistance_at(125) == pytest.approx(0.014)
    # An abrupt junction: charge grows with the root of the voltage (textbook physics).
    assert part.output_charge_at([20, 5, 0]) == pytest.approx([20e-9, 10e-9, 0])


# The shipped parts look like the trade.


def test_the_shelf_is_found_by_name_and_is_large_enough():
    assert catalogs.names("parts") == ("board-ceramics", "board-mosfets")
    assert catalogs.find("parts", "board-ceramics").suffix == ".csv"
    assert catalogs.find("parts", "pump-shelf") is None
    assert 20 <= len(STOCK.capacitors) <= 40
    assert 20 <= len(STOCK.switches) <= 40


@pytest.mark.parametrize("part", CLASS_TWO, ids=lambda one: one.name)
def test_class_two_ceramics_lose_up_to_seventy_percent_at_rated_bias(part):
    # Published application notes: up to 70 % at rated DC bias.
    assert 0.3 <= part.bias[-1][1] <= 0.7
    assert part.bias[-1][0] == pytest.approx(part.rating)


def test_a_smaller_case_of_the_same_value_and_rating_loses_more():
    # Published application notes. Shares at half the rating, so that it is no matter of one point.
    sizes = ("0603", "0805", "1206", "1210", "2220")
    compared = 0
    for one in CLASS_TWO:
        for other in CLASS_TWO:
            same = (one.nominal, one.rating, one.dielectric) == (
                other.nominal,
                other.rating,
                other.dielectric,
            )
            if same and sizes.index(one.case) < sizes.index(other.case):
                half = one.rating / 2
                assert one.capacitance(half) < other.capacitance(half)
                compared += 1
    assert compared >= 5


def test_class_one_ceramics_keep_their_value_and_hold_little():
    # Common practice: C0G has no bias effect and far lower permittivity.
    class_one = [one for one in STOCK.capacitors if one.dielectric == "C0G"]
    assert class_one
    for part in class_one:
        assert part.capacitance(part.rating, least=False) == part.nominal
        assert part.nominal / part.footprint < min(one.nominal / one.footprint for one in CLASS_TWO)


@pytest.mark.parametrize(
    ("name", "figures", "output_charge"),
    [
        ("n40-5m-t33", (40, 5e-3, 4.5, 15e-9), 30e-9),  # typical data-sheet class
        ("n60-10m-t33", (60, 10e-3, 4.5, 9e-9), None),  # typical data-sheet class
        ("n100-2m-s10", (100, 2e-3, 10, 118e-9), 335e-9),  # typical data-sheet class
    ],
)
def test_mosfets_are_of_the_published_classes(name, figures, output_charge):
    one = SWITCHES[name]
    assert (one.rating, one.resistance, one.drive, one.gate_charge) == figures
    if output_charge:
        assert one.output_charge == output_charge


def test_what_blocks_more_is_worse_at_the_same_resistance():
    # Common practice: the figures of merit R x Q_gate and R x Q_oss grow with the rating at equal drive.
    merit = {}
    for one in STOCK.switches:
        best = merit.setdefault((one.drive, one.rating), [np.inf, np.inf])
        best[0] = min(best[0], one.resistance * one.gate_charge)
        best[1] = min(best[1], one.resistance * one.output_charge)
    for drive in (4.5, 10):
        merits = [merit[key] for key in sorted(merit) if key[0] == drive]
        for low, high in pairwise(merits):
            assert low[0] < high[0] * 1.1
            assert low[1] < high[1] * 1.1


def test_mosfets_warm_up_as_silicon_does():
    # From memory: 1.3 to 1.8 times the resistance at 125 degC, the more the higher the rating.
    for one in STOCK.switches:
        assert 1.3 <= one.resistance_at(125) / one.resistance <= 1.8


# What a brief may ask.


def brief_with(tmp_path, parts):
    text = catalogs.find("briefs", "pump-shelf").read_text(encoding="utf-8")
    path = tmp_path / "brief.toml"
    path.write_text(text[: text.index("[parts]")] + parts, encoding="utf-8")
    return path


def test_the_shipped_board_brief_asks_for_parts():
    request = load_brief("pump-shelf").parts
    assert request.stock.names == ("board-ceramics", "board-mosfets")
    assert request.least == "loss"
    assert request.footprint <= load_brief("pump-shelf").area
    assert load_brief("greenhouse-node").parts is None


def test_a_brief_names_catalogs_of_its_own_beside_it(tmp_path):
    write(tmp_path, CAPACITOR_HEADER, ROW)
    request = load_brief(
        brief_with(tmp_path, '[parts]\ncapacitors = "some.csv"\nfrequencies = ["60 kHz", 2e5]\n')
    ).parts
    assert [one.name for one in request.stock.capacitors] == ["c1"]
    assert request.frequencies == (60e3, 200e3)
    assert load_brief(brief_with(tmp_path, "")).parts is None


def test_every_setting_changes_the_fingerprint_of_a_brief():
    brief = replace(load_brief("pump-shelf"), parts=PartsRequest(STOCK, least="price"))
    changes = {
        "least": "footprint", "footprint": 1.0, "price": 1.0, "efficiency": 0.5, "loss": 0.5,
        "capacitor_derating": 0.5, "switch_derating": 0.5, "temperature": 0.0, "drive": 5.0,
        "capacitance": "nominal", "parallel_capacitors": 2, "parallel_switches": 2, "series": 2,
        "driver_footprint": 1.0, "driver_price": 1.0, "frequencies": (1e5,),
        "stock": replace(STOCK, capacitors=STOCK.capacitors[:1]),
    }  # fmt: skip
    assert set(changes) == {field.name for field in fields(PartsRequest)}
    prints = {replace(brief, parts=replace(brief.parts, **{k: v})).fingerprint for k, v in changes.items()}
    assert len(prints | {brief.fingerprint}) == len(changes) + 1


@pytest.mark.parametrize(
    ("line", "problem"),
    [
        ('capacitors = "board-ceramic"', "parts.capacitors: unknown catalog of parts"),
        ('least = "cost"', "parts.least: value 'cost' is unknown"),
        ('footprint = "-3 mm2"', "parts.footprint: value '-3 mm2' is negative"),
        ('temperature = "85 C"', "parts.temperature: value '85 C' has the wrong unit"),
        ('temperature = "300 degC"', "parts.temperature: value '300 degC' is too large"),
        ('price = "12 mm2"', "parts.price: value '12 mm2' has the wrong unit"),
        ("parallel_switches = 0", "parts.parallel_switches: value 0 is not allowed"),
        ('efficiency = "100 %"', "parts.efficiency: value 1 is not allowed"),
        ('efficiency = "90 %"\nloss = "2 W"', "parts.loss: loss and efficiency are both given"),
        ('efficiency = "90 %"', "parts.efficiency: is a target, and loss is made least"),
        ('frequencies = ["1 V"]', "parts.frequencies 1: value '1 V' has the wrong unit"),
        ('foot_print = "3 mm2"', "parts: unknown field 'foot_print'; did you mean 'footprint'?"),
    ],
)
def test_a_bad_setting_is_named_with_its_line(tmp_path, line, problem):
    path = brief_with(tmp_path, f"[parts]\n{line}\n")
    with pytest.raises(CapmusterError) as caught:
        load_brief(path)
    assert problem in caught.value.problem
    start, _, rest = str(caught.value).partition(": ")
    assert start.rpartition(":")[0] == str(path)
    lines = path.read_text(encoding="utf-8").splitlines()
    assert lines[int(start.rpartition(":")[2]) - 1].partition(" ")[0] in line
    assert rest


@pytest.mark.parametrize(
    ("name", "value"),
    [
        ("footprint", 0.0),
        ("price", float("inf")),
        ("efficiency", 1.0),
        ("switch_derating", 1.5),
        ("series", 0),
    ],
)
def test_a_request_by_hand_is_checked_as_well(name, value):
    with pytest.raises(CapmusterError, match=f"parts.{name}: value"):
        PartsRequest(STOCK, **{name: value})
