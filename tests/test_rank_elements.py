"""The parts list of one sized candidate."""

from __future__ import annotations

from dataclasses import replace

import pytest
from hypothesis import given
from strategies import census_converters, family_converters

from capmuster.enumerate.converters import table_of
from capmuster.enumerate.wiring import Converter
from capmuster.rank.elements import elements_of
from capmuster.rank.inputs.brief import load_brief
from capmuster.rank.scores.detail import detail
from capmuster.rank.scores.networktable import network_table
from capmuster.rank.scores.switchtable import score, switch_table

BRIEF = load_brief("pump-shelf")


def sized(converter, capacitor_area=100.0, switching_area=50.0):
    return elements_of(converter, BRIEF, capacitor_area, switching_area)


@given(census_converters() | family_converters(most=10))
def test_names_nodes_phases_and_multipliers_are_those_of_show(converter):
    shown = detail(converter).rows()
    for row, element in zip(shown, sized(converter), strict=True):
        name, kind, plus, minus, phase, multiplier, _ = row
        assert (element.name, element.kind, element.nodes) == (name, kind, (plus, minus))
        assert str(element.phase or "") == phase
        numerator, _, denominator = multiplier.partition("/")
        assert element.multiplier == pytest.approx(int(numerator) / int(denominator or 1), rel=1e-12)


@given(census_converters() | family_converters(most=10))
def test_areas_are_shared_in_proportion_to_charge_and_root_of_cost(converter):
    """Seeman and Sanders 2008: area proportional to a_c / sqrt(d), and to a_r sqrt(rho)."""
    found = [e for e in sized(converter) if e.multiplier > 0]
    technology = BRIEF.technology
    density = {one.name: one.density for one in technology.capacitors}
    resistance = {one.name: one.resistance for one in technology.switches}
    weights = {
        "capacitor": lambda e: e.multiplier * e.series / density[e.device] ** 0.5,
        "switch": lambda e: e.multiplier * e.series * resistance[e.device] ** 0.5,
    }
    for kind, total in (("capacitor", 100.0), ("switch", 50.0)):
        mine = [e for e in found if e.kind == kind]
        whole = sum(weights[kind](e) for e in mine)
        for e in mine:
            assert e.area == pytest.approx(total * weights[kind](e) / whole, rel=1e-9)
            if kind == "capacitor":
                assert e.value == pytest.approx(e.area * density[e.device] / e.series**2, rel=1e-12)
            else:
                assert e.value == pytest.approx(resistance[e.device] * e.series**2 / e.area, rel=1e-12)


@given(census_converters() | family_converters(most=10))
def test_every_element_stands_its_voltage_with_the_fewest_in_series(converter):
    technology = BRIEF.technology
    limit = {one.name: one.rating * technology.capacitor_derating for one in technology.capacitors}
    limit |= {one.name: one.rating * technology.switch_derating for one in technology.switches}
    for e in sized(converter):
        assert e.rating == pytest.approx(e.series * limit[e.device], rel=1e-12)
        assert e.voltage <= e.rating * (1 + 1e-9)
        assert e.stress == e.voltage / e.rating
        if e.series > 1:
            assert (e.series - 1) * limit[e.device] < e.voltage


@given(census_converters())
def test_the_exact_switches_have_the_sums_of_the_batch_where_all_are_clean(converter):
    """Where no chain is open, the batch and the exact network have the same charges and voltages."""
    table = table_of([converter])
    if not score(table).clean[0]:
        return
    exact, batch = network_table(table, detail(converter).flow.network), switch_table(table)
    count = int(exact.count[0])
    assert count == batch.count[0]

    def all_of(switches):
        columns = (switches.phase, switches.vertex, switches.charges, switches.blocking)
        return sorted(zip(*(column[0, :count].tolist() for column in columns), strict=True))

    assert all_of(exact) == all_of(batch)


def test_a_doubler_by_hand():
    """One capacitor at V_in with the output charge, four switches that each pass it once and block V_in."""
    brief = replace(BRIEF, required=80.0, efficiency_floor=None, area=None)
    found = elements_of(Converter.parse("I-G/O-I"), brief, 10.0, 4.0)
    assert [e.kind for e in found] == ["capacitor"] + ["switch"] * 4
    assert {e.voltage for e in found} == {56.0}
    assert {e.multiplier for e in found} == {1.0}
    assert [e.area for e in found] == pytest.approx([10.0, 1.0, 1.0, 1.0, 1.0])
    assert sorted(e.phase for e in found[1:]) == [1, 1, 2, 2]
