"""The class that stands a voltage at least cost, and files of technologies that are refused."""

from __future__ import annotations

import itertools
import math
import re
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra.numpy import array_shapes, arrays

from capmuster import catalogs
from capmuster.enumerate.errors import CapmusterError
from capmuster.rank.inputs.technology import CapacitorClass, SwitchClass, Technology, load_technology

CHIP = load_technology("chip-180nm")
BOARD = load_technology("board-discrete")

sizes = st.floats(1e-4, 1e4)


@st.composite
def technologies(draw):
    """Technologies of a few classes with figures from anywhere."""
    derating = st.floats(0.3, 1.0)
    return replace(
        CHIP,
        capacitor_derating=draw(derating),
        switch_derating=draw(derating),
        capacitors=tuple(
            replace(CHIP.capacitors[0], name=str(k), rating=draw(st.floats(0.5, 50)), density=draw(sizes))
            for k in range(draw(st.integers(1, 5)))
        ),
        switches=tuple(
            replace(
                CHIP.switches[0],
                name=str(k),
                rating=draw(st.floats(0.5, 50)),
                resistance=draw(sizes),
                least_area=draw(sizes),
            )
            for k in range(draw(st.integers(1, 5)))
        ),
    )


def plain_choice(voltage, limits, costs, power):
    """One element, by the definition: every class with the fewest in series that stand the voltage."""
    options = []
    for index, (limit, cost) in enumerate(zip(limits, costs, strict=True)):
        series = next(s for s in itertools.count(1) if s * limit * (1 + 1e-9) >= voltage)
        options.append((series**power * cost, series, index))
    least = min(options)[0]
    cost, series, index = min(
        (option for option in options if math.isclose(option[0], least, rel_tol=1e-12)),
        key=lambda o: (o[1], o[2]),
    )
    return index, series, cost


@given(technology=technologies(), voltages=arrays(float, array_shapes(min_side=0), elements=st.floats(0, 60)))
def test_the_choice_is_the_least_cost_of_all_classes(technology, voltages):
    capacitors = [one.rating * technology.capacitor_derating for one in technology.capacitors]
    switches = [one.rating * technology.switch_derating for one in technology.switches]
    cases = [
        (technology.capacitor_choice, capacitors, [1 / one.density for one in technology.capacitors], 2),
        (technology.switch_choice, switches, [one.resistance for one in technology.switches], 2),
        (technology.smallest_switch, switches, [one.least_area for one in technology.switches], 1),
    ]
    for choose, limits, costs, power in cases:
        choice = choose(voltages)
        assert choice.index.shape == choice.series.shape == choice.cost.shape == voltages.shape
        assert choice.index.dtype == choice.series.dtype == np.int64
        for place, voltage in np.ndenumerate(voltages):
            index, series, cost = plain_choice(voltage, limits, costs, power)
            assert (choice.index[place], choice.series[place]) == (index, series)
            assert choice.cost[place] == pytest.approx(cost, rel=1e-12)


@given(technology=technologies(), voltages=arrays(float, 40, elements=st.floats(0, 60)))
def test_many_elements_are_chosen_as_one_by_one(technology, voltages):
    # Many elements go through a table of steps, one element does not: two routes to one result.
    many = technology.switch_choice(np.tile(voltages, 50))
    for position, voltage in enumerate(voltages):
        one = technology.switch_choice(voltage)
        assert one.index.shape == ()
        assert many.index[position] == one.index
        assert many.series[position] == one.series
        assert many.cost[position] == one.cost


def test_a_chain_of_equal_devices_costs_the_square():
    # Resistances in series add and each has a share of the area: s (rho / (A/s)); capacitances: (d A/s) / s.
    class_ = replace(CHIP.switches[0], rating=1.0)
    technology = replace(CHIP, switches=(class_,), capacitors=(replace(CHIP.capacitors[0], rating=1.0),))
    area, s = 2.0, 3
    switch, capacitor = technology.switch_choice(2.5), technology.capacitor_choice(2.5)
    assert switch.series == capacitor.series == s
    assert switch.cost / area == pytest.approx(sum([class_.resistance / (area / s)] * s))
    elastance = sum([1 / (technology.capacitors[0].density * area / s)] * s)
    assert capacitor.cost / area == pytest.approx(elastance)


@pytest.mark.parametrize("s", [1, 2, 3, 7])
def test_exactly_rated_is_not_one_more(s):
    # 0.8 x 16 V = 12.8 V is no binary number; a voltage computed another way may be a rounding above it.
    technology = replace(BOARD, capacitors=BOARD.capacitors[:1], switches=BOARD.switches[:1])
    for limit, choose in ((12.8, technology.capacitor_choice), (20.0, technology.switch_choice)):
        assert choose(s * limit).series == s
        assert choose(s * limit * (1 + 1e-12)).series == s
        assert choose(s * limit * (1 + 1e-6)).series == s + 1
        assert np.all(choose(np.full(1000, s * limit)).series == s)


def test_equal_costs_go_to_fewer_in_series_and_then_to_the_earlier():
    low = replace(CHIP.switches[0], name="low", rating=1.0, resistance=1.0)
    high = replace(low, name="high", rating=2.0, resistance=4.0)
    same = replace(high, name="same")
    for order in itertools.permutations([low, high, same]):
        technology = replace(CHIP, switches=order)
        choice = technology.switch_choice([0.5, 1.5])
        assert order[choice.index[0]] is low
        assert order[choice.index[1]] is next(one for one in order if one is not low)
        assert choice.series.tolist() == [1, 1]


def test_no_voltage_takes_the_cheapest_class():
    assert CHIP.switch_choice(0.0).series == 1
    assert CHIP.switches[int(CHIP.switch_choice(0.0).index)].name == "nmos-1v8"
    assert CHIP.capacitors[int(CHIP.capacitor_choice(0.0).index)].name == "mos-1v8"


def test_derating_moves_the_step():
    # 14 V on a 16 V ceramic is within its rating but not within four fifths of it.
    assert BOARD.capacitors[int(BOARD.capacitor_choice(14.0).index)].name == "ceramic-25v"
    full = replace(BOARD, capacitor_derating=1.0)
    assert full.capacitors[int(full.capacitor_choice(14.0).index)].name == "ceramic-16v"


@pytest.mark.parametrize("voltage", [-1.0, math.nan, math.inf])
def test_a_voltage_that_is_none_is_refused(voltage):
    with pytest.raises(ValueError, match="finite"):
        CHIP.switch_choice([1.0, voltage])


def test_columns_hold_the_classes():
    capacitors, switches = BOARD.capacitor_columns(), BOARD.switch_columns()
    assert capacitors.density.tolist() == [one.density for one in BOARD.capacitors]
    assert capacitors.limit.tolist() == pytest.approx([12.8, 20.0, 40.0, 80.0])
    assert switches.gate_charge.tolist() == [one.gate_charge for one in BOARD.switches]
    assert switches.limit.tolist() == pytest.approx([20.0, 32.0, 48.0, 80.0])


@pytest.mark.parametrize("one", CHIP.switches + BOARD.switches, ids=lambda one: one.name)
def test_output_charge_follows_its_law(one):
    reference = one.output_charge_voltage
    assert one.output_charge_at(reference) == pytest.approx(one.output_charge)
    assert one.output_charge_at(0.0) == 0
    values = one.output_charge_at(np.array([[1.0, 2.0], [4.0, 8.0]]) * reference)
    assert values.shape == (2, 2)
    # An abrupt junction's charge grows with the root of the voltage, a plain capacitor's in proportion.
    assert math.sqrt(2) <= values[0, 1] / values[0, 0] <= 2
    assert values[1, 1] / values[1, 0] == pytest.approx(values[0, 1] / values[0, 0])


# Files.

TEXT = catalogs.find("technologies", "chip-180nm").read_text()


def load_text(folder, text, name="t.toml"):
    path = folder / name
    path.write_text(text)
    return load_technology(path)


def test_the_fingerprint_is_of_the_content(tmp_path):
    bare = "\n".join(line for line in TEXT.splitlines() if not line.startswith("#"))
    respelt = bare.replace('"0.69 mohm mm2"', '"690 ohm um2"').replace('"1.8 V"', "1.80")
    assert respelt.count("1.80") > 3
    for name, text in (("a.toml", bare), ("b.toml", respelt), ("c.toml", TEXT.replace("\n", "\r\n"))):
        technology = load_text(tmp_path, text, name)
        assert technology.fingerprint == CHIP.fingerprint
        assert technology.name == name[0]
    assert re.fullmatch("[0-9a-f]{12}", CHIP.fingerprint)
    others = {
        replace(CHIP, switch_derating=0.9).fingerprint,
        replace(CHIP, switches=CHIP.switches[::-1]).fingerprint,
    }
    assert len(others | {CHIP.fingerprint}) == 3


def test_overhead_may_be_left_out(tmp_path):
    start, end = TEXT.index("[overhead]"), TEXT.index("# Thin-oxide MOS capacitor")
    technology = load_text(tmp_path, TEXT[:start] + TEXT[end:])
    assert technology.controller_power == technology.wiring_resistance == 0
    assert CHIP.controller_power == pytest.approx(2e-6)
    assert CHIP.wiring_resistance == pytest.approx(0.3)


def line_of(text, part):
    return text[: text.index(part)].count("\n") + 1


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        ('"6.8 nF/mm2"', '"6.8 nF"', "capacitor 1: density: value '6.8 nF' has the wrong unit 'nF';"),
        ('"6.8 nF/mm2"', '"-6.8 nF/mm2"', "capacitor 1: density: value '-6.8 nF/mm2' is negative"),
        ('"6.8 nF/mm2"', "nan", "capacitor 1: density: value nan is not finite"),
        ('"6.8 nF/mm2"', "0.0", "capacitor 1: density: value 0.0 is zero"),
        ('"6.8 nF/mm2"', "{}", "capacitor 1: density: value a table is not a quantity"),
        ('"100 %"', '"120 %"', "derating.capacitor: value '120 %' is too large"),
        ('"6.6 %"', '"-1 %"', "capacitor 1: plate_fraction: value '-1 %' is negative"),
        ('plate = "minus"', 'plate = "bottom"', "capacitor 1: plate: value 'bottom' is unknown; accepted:"),
        ('"pmos"', '"pmosx"', "switch 3: polarity: value 'pmosx' is unknown (did you mean 'pmos'?);"),
        ('kind = "chip"', 'kind = "wafer"', "kind: value 'wafer' is unknown; accepted: 'chip' or 'board'"),
        ('name = "mos-3v3"', 'name = "mos-1v8"', "capacitor 2: name: value 'mos-1v8' is taken by a class"),
        ('name = "nmos-6v"', 'name = "nmos-1v8"', "switch 4: name: value 'nmos-1v8' is taken by a class"),
        ('name = "mos-3v3"', 'name = ""', "capacitor 2: name: value '' is not a name; accepted: one line"),
        ('name = "mos-3v3"', 'name = "a\\nb"', "capacitor 2: name: value 'a\\nb' is not a name"),
        ("gate_charge = ", "gatecharge = ", "switch 1: unknown field 'gatecharge'; did you mean"),
        ("controller_power = ", "controler_power = ", "overhead: unknown field 'controler_power'; did you"),
        ('kind = "chip"', 'kind = "chip"\ncolour = 3', "unknown field 'colour'; accepted: title, kind,"),
        ('kind = "chip"', 'kind = "chip"\ndensity = 3', "unknown field 'density'; it belongs to [capacitor]"),
    ],
)  # fmt: skip
def test_a_bad_field_is_named_with_its_place(tmp_path, old, new, message):
    text = TEXT.replace(old, new, 1)
    assert text != TEXT
    with pytest.raises(CapmusterError) as caught:
        load_text(tmp_path, text)
    line = line_of(TEXT, old) + new.count("\n")
    assert str(caught.value).startswith(f"{tmp_path / 't.toml'}:{line}: {message}")
    assert "\n" not in str(caught.value)


def test_all_faults_come_at_once_in_the_order_of_the_file(tmp_path):
    text = TEXT.replace('"6.8 nF/mm2"', '"6.8 nF"').replace('"pmos"', '"p"').replace('title = "', 'titel = "')
    with pytest.raises(CapmusterError) as caught:
        load_text(tmp_path, text)
    lines = str(caught.value).split("\n")
    numbers = [int(re.match(r".*?t\.toml:(\d+): ", line)[1]) for line in lines]
    assert numbers == [line_of(text, part) for part in ('titel = "', '"6.8 nF"', '"p"')]


def test_missing_parts_are_named(tmp_path):
    without = TEXT.replace('rating = "3.3 V"\n', "", 1)
    with pytest.raises(
        CapmusterError, match=r"t\.toml:\d+: capacitor 2: missing field 'rating'; accepted: a voltage"
    ):
        load_text(tmp_path, without)
    no_switches = TEXT[: TEXT.index("[[switch]]")]
    with pytest.raises(CapmusterError, match=r"t\.toml:1: missing field 'switch'; accepted: \[\[switch\]\]"):
        load_text(tmp_path, no_switches)
    for empty in ("switch = []", "switch = 3"):
        with pytest.raises(
            CapmusterError, match=r"t\.toml:1: switch: needs one table or more; accepted: \[\[switch"
        ):
            load_text(tmp_path, f"{empty}\n{no_switches}")


def test_an_unknown_name_lists_what_is_shipped():
    with pytest.raises(CapmusterError) as caught:
        load_technology("chip-180")
    message = str(caught.value)
    assert message.startswith("unknown technology 'chip-180'; did you mean 'chip-180nm'?; accepted: ")
    assert "board-discrete, chip-180nm" in message


def test_technologies_are_values():
    assert isinstance(CHIP, Technology)
    assert isinstance(CHIP.capacitors[0], CapacitorClass)
    assert isinstance(CHIP.switches[0], SwitchClass)
    assert load_technology("chip-180nm") == CHIP
    assert hash(CHIP) == hash(load_technology("chip-180nm"))
    with pytest.raises(AttributeError):
        CHIP.title = "other"
