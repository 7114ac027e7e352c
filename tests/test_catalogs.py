"""Shipped data: it loads, and it looks like the trade.

The catalogs are invented. The figures here bound what is plausible; none is a claim about a product.
"""

from __future__ import annotations

import subprocess
import sys
from fractions import Fraction

import pytest

from capmuster import catalogs
from capmuster.rank.inputs.brief import load_brief
from capmuster.rank.inputs.technology import load_technology

CHIP_TECHNOLOGY, BOARD_TECHNOLOGY = load_technology("chip-180nm"), load_technology("board-discrete")
CHIP = {one.name: one for one in (*CHIP_TECHNOLOGY.capacitors, *CHIP_TECHNOLOGY.switches)}
BOARD = {one.name: one for one in (*BOARD_TECHNOLOGY.capacitors, *BOARD_TECHNOLOGY.switches)}


def test_every_shipped_file_loads():
    assert catalogs.names("technologies") == ("board-discrete", "chip-180nm")
    assert catalogs.names("briefs") == (
        "greenhouse-node",
        "greenhouse-node-losses",
        "greenhouse-node-regulated",
        "greenhouse-node-regulated-losses",
        "pump-shelf",
        "pump-shelf-losses",
    )
    for name in catalogs.names("technologies"):
        technology = load_technology(name)
        assert technology.name == name
        assert len(technology.capacitors) >= 3
        assert len(technology.switches) >= 3
    assert {load_technology(name).kind for name in catalogs.names("technologies")} == {"chip", "board"}
    for name in catalogs.names("briefs"):
        assert load_brief(name).name == name


def test_a_name_is_a_name_and_no_path():
    assert catalogs.find("briefs", "../technologies/chip-180nm") is None
    assert catalogs.find("briefs", "chip-180nm") is None
    assert catalogs.find("technologies", "chip-180nm").name == "chip-180nm.toml"


def test_finding_a_file_loads_no_library():
    code = (
        "import sys, capmuster.catalogs as c; c.names('briefs');"
        "heavy = {'capmuster.enumerate', 'capmuster.rank.inputs.technology', 'pydantic', 'numpy'};"
        "print(heavy & set(sys.modules))"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "set()"


# On a chip. R W [kohm um] times Q / W [fC/um] of a transistor does not depend on the layout:
# 1 kohm um x 1 fC/um = 1e-12 ohm C. Half as much again is left for the Miller charge, which the sources omit.
@pytest.mark.parametrize(
    ("name", "resistance_width", "charge_per_width"),
    [
        ("nmos-1v8", 0.66, 2.3),  # simulated from SKY130 open models, typical corner
        ("nmos-3v3", 1.6, 4.5),  # simulated from GF180MCU open models
        ("pmos-3v3", 4.5, 4.5),  # simulated from GF180MCU open models
        ("nmos-6v", 2.2, 8.7),  # simulated from GF180MCU open models, 5 V drive
    ],
)
def test_transistors_are_as_good_as_published_ones(name, resistance_width, charge_per_width):
    one = CHIP[name]
    published = resistance_width * charge_per_width * 1e-12
    assert published <= one.resistance * one.gate_charge <= 1.5 * published
    # What is left is the width that a finger takes in the layout: 0.7 to 3 um (from memory).
    assert 0.7e-3 <= one.resistance / resistance_width <= 3e-3


def test_the_extended_drain_device_is_in_its_published_range():
    # SKY130 open process documentation: NMOS 20 V, 59 to 138 mohm mm2.
    assert 59e-3 <= CHIP["nmos-20v"].resistance <= 138e-3


@pytest.mark.parametrize(
    ("name", "low", "high", "least_plate", "most_plate"),
    [
        # SKY130: 1.8 to 2.2 nF/mm2 at 5 V; bottom plate about 0.7 % in IHP SG13G2.
        ("mim-5v", 1.8e-9, 2.2e-9, 0.005, 0.02),
        # SKY130: 0.55 to 1.05 nF/mm2; 3 to 11 % per plate.
        ("mom-12v", 0.55e-9, 1.05e-9, 0.03, 0.11),
        # GF180MCU open models: 4.0 nF/mm2 (3.3 V oxide), of which the layout takes some; plate from memory.
        ("mos-3v3", 3.0e-9, 4.0e-9, 0.05, 0.10),
        # 2.3 fC/um at 1.8 V over a gate of 0.15 um (SKY130 open models): 8.5 nF/mm2; plate from memory.
        ("mos-1v8", 5.5e-9, 8.5e-9, 0.05, 0.10),
    ],
)
def test_capacitors_on_a_chip_are_in_their_published_ranges(name, low, high, least_plate, most_plate):
    assert low <= CHIP[name].density <= high
    assert least_plate <= CHIP[name].plate_fraction <= most_plate


@pytest.mark.parametrize("name", ["mos-1v8", "mos-3v3"])
def test_a_gate_oxide_cannot_hold_more_than_its_field(name):
    # Parallel plates: density = eps_0 eps_SiO2 / thickness, thickness >= rating / 5 MV/cm (common practice).
    thickness = CHIP[name].rating / 5e8
    assert CHIP[name].density * 1e6 <= 8.854e-12 * 3.9 / thickness


# On a board: a part of the class stands behind each figure, and it has some area that fits a package.
# The area is that of a 3.3 x 3.3 mm package with its driver, or of a large one.
@pytest.mark.parametrize(
    ("name", "part", "areas"),
    [
        ("nmos-40v", (5e-3, 15e-9, 4.5, 30e-9), (15, 35)),  # typical data-sheet class
        ("nmos-60v", (10e-3, 9e-9, 4.5, None), (15, 35)),  # typical data-sheet class
        ("nmos-100v", (2e-3, 118e-9, 10, 335e-9), (100, 200)),  # typical data-sheet class
    ],
)
def test_mosfets_on_a_board_are_parts_on_an_area(name, part, areas):
    one, (resistance, gate_charge, drive, output_charge) = BOARD[name], part
    area = one.resistance / resistance
    assert areas[0] <= area <= areas[1]
    assert one.gate_charge * area == pytest.approx(gate_charge, rel=0.03)
    assert one.drive == drive
    assert one.least_area == pytest.approx(area, rel=0.01)
    if output_charge:
        assert one.output_charge * area == pytest.approx(output_charge, rel=0.03)


def test_ceramics_on_a_board_keep_a_plausible_share_of_their_value():
    # Class II ceramics lose up to 70 % at rated bias (published application notes).
    rated = {"ceramic-16v": 22e-6, "ceramic-25v": 10e-6, "ceramic-50v": 4.7e-6, "ceramic-100v": 2.2e-6}
    for name, value in rated.items():
        share = BOARD[name].density * BOARD[name].least_area / value
        assert 0.3 <= share <= 0.6


@pytest.mark.parametrize("technology", [CHIP_TECHNOLOGY, BOARD_TECHNOLOGY], ids=lambda one: one.name)
def test_what_stands_more_costs_more(technology):
    capacitors = sorted(technology.capacitors, key=lambda one: one.rating)
    switches = sorted(
        (one for one in technology.switches if one.polarity == "nmos"), key=lambda one: one.rating
    )
    densities = [one.density for one in capacitors]
    resistances = [one.resistance for one in switches]
    assert densities == sorted(densities, reverse=True)
    assert resistances == sorted(resistances)


@pytest.mark.parametrize("name", ["greenhouse-node", "greenhouse-node-regulated", "pump-shelf"])
def test_briefs_describe_plausible_jobs(name):
    brief = load_brief(name)
    if name == "pump-shelf":
        # Common practice: a 48 V bus of lead cells runs from 42 to 58 V.
        assert 40 <= brief.input_minimum <= 48 <= brief.input_maximum <= 60
        assert brief.technology.kind == "board"
        assert brief.holds(Fraction(1, 4))
    else:
        # Common practice: a lithium cell is used from 3.0 to 4.2 V.
        assert (brief.input_minimum, brief.input_maximum) == (3.0, 4.2)
        assert brief.required == 1.2
        assert brief.technology.kind == "chip"
    assert brief.most_capacitors == 4
