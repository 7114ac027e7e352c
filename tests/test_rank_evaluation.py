"""Sizes and figures of whole candidates against a solver that shares no formula with them."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from plain_candidate import least_area, parts_of
from strategies import census_converters, family_converters

from capmuster.enumerate.converters import converters, table_of
from capmuster.enumerate.wiring import Converter
from capmuster.rank.elements import elements_of
from capmuster.rank.evaluation import evaluate, output_evenness
from capmuster.rank.inputs.brief import load_brief
from capmuster.rank.inputs.technology import load_technology
from capmuster.rank.scores.switchtable import score
from capmuster.rank.scores.utilisation import charge_flow

BASE = load_brief("greenhouse-node")
TECHNOLOGIES = (load_technology("chip-180nm"), load_technology("board-discrete"))


@st.composite
def jobs(draw):
    """Draw a converter, clean or not, and a brief that it can hold."""
    converter = draw(census_converters() | family_converters(most=10))
    ratio = float(converter.ratio)
    board = draw(st.integers(0, 1))
    low = draw(st.floats(2.0, 60.0 if board else 12.0))
    brief = replace(
        BASE,
        technology=TECHNOLOGIES[board],
        input_minimum=low,
        input_nominal=low,
        input_maximum=low * draw(st.floats(1.0, 2.0)),
        required=ratio * low * draw(st.floats(0.5, 0.97)),
        current=10 ** draw(st.floats(-4.0, 1.0)),
        frequency=10 ** draw(st.floats(4.0, 8.0)),
        area=None,
        efficiency_floor=None,
        most_capacitors=40,
    )
    return converter, brief


@settings(max_examples=60)
@given(jobs())
def test_areas_are_the_least_that_meet_the_droop(job):
    converter, brief = job
    figures = evaluate(table_of([converter]), brief)
    limit = (abs(float(converter.ratio)) * brief.input_minimum - abs(brief.required)) / brief.current
    assert figures.impedance[0] == pytest.approx(limit, rel=1e-9)
    wanted = least_area(parts_of(converter, brief), brief.frequency, limit)
    assert figures.area[0] == pytest.approx(wanted, rel=1e-6)
    assert figures.merit[0] == pytest.approx(figures.area[0], rel=1e-12)


@settings(max_examples=40)
@given(jobs(), st.floats(0.3, 3.0), st.floats(1.01, 3.0))
def test_separate_budgets_are_kept_at_the_least_area(job, lean, room):
    """Budgets along the curve of constant impedance: either binds, or neither."""
    converter, brief = job
    free = evaluate(table_of([converter]), brief)
    capacitor, silicon = float(free.capacitor_area[0]) * lean, np.inf
    limit = float(free.impedance[0])
    slow = float(free.slow[0]) / capacitor
    if slow >= limit * 0.999:
        return
    silicon = float(free.fast[0]) / np.sqrt(limit**2 - slow**2) * room + float(free.idle_area[0])
    bound = replace(brief, capacitor_area=capacitor, silicon_area=silicon)
    found = evaluate(table_of([converter]), bound)
    assert found.capacitor_area[0] <= capacitor * (1 + 1e-12)
    assert found.silicon_area[0] <= silicon * (1 + 1e-12)
    wanted = least_area(parts_of(converter, bound), brief.frequency, limit, capacitor, silicon)
    assert found.area[0] == pytest.approx(wanted, rel=1e-5)


@given(jobs())
def test_budgets_that_cannot_be_met_give_no_area(job):
    converter, brief = job
    free = evaluate(table_of([converter]), brief)
    tight = float(free.slow[0]) / float(free.impedance[0]) * 0.99  # R_SSL alone is above the droop budget
    found = evaluate(table_of([converter]), replace(brief, capacitor_area=tight, silicon_area=1e9))
    assert np.isnan(found.area[0])
    assert np.isinf(found.impedance[0])


def cost_of(element, technology):
    """Return what the class and the stack of an element cost, as `plain_candidate` counts it."""
    if element.kind == "capacitor":
        device = next(one for one in technology.capacitors if one.name == element.device)
        return element.series**2 / device.density
    device = next(one for one in technology.switches if one.name == element.device)
    if element.multiplier == 0:
        return element.series * device.least_area
    return element.series**2 * device.resistance


@settings(max_examples=60)
@given(jobs())
def test_elements_have_the_class_of_least_cost_and_add_up(job):
    converter, brief = job
    figures = evaluate(table_of([converter]), brief)
    found = elements_of(converter, brief, float(figures.capacitor_area[0]), float(figures.switching_area[0]))
    for element, part in zip(found, parts_of(converter, brief), strict=True):
        assert element.kind == part.kind
        assert cost_of(element, brief.technology) == pytest.approx(part.cost, rel=1e-12)
        assert element.multiplier == pytest.approx(part.multiplier, rel=1e-12)
        assert element.stress <= 1 + 1e-9
    areas = {kind: sum(e.area for e in found if e.kind == kind) for kind in ("capacitor", "switch")}
    assert areas["capacitor"] == pytest.approx(figures.capacitor_area[0], rel=1e-12)
    assert areas["switch"] == pytest.approx(figures.silicon_area[0], rel=1e-12)
    # Seeman and Sanders 2008, both limits from the values of the elements, and their blend.
    slow = sum(e.multiplier**2 / (brief.frequency * e.value) for e in found if e.kind == "capacitor")
    fast = sum(2 * e.value * e.multiplier**2 for e in found if e.kind == "switch")
    assert np.hypot(slow, fast) == pytest.approx(figures.impedance[0], rel=1e-9)
    assert figures.slow[0] / figures.capacitor_area[0] == pytest.approx(slow, rel=1e-9)
    assert figures.fast[0] / figures.switching_area[0] == pytest.approx(fast, rel=1e-9)


def with_an_idle_switch():
    table = converters(3)
    scores = score(table)
    for row in np.flatnonzero(~scores.clean).tolist():
        converter = table.converter(row)
        if any(s.multiplier == 0 for s in charge_flow(converter).network.switches):
            return converter
    raise AssertionError("no converter of three capacitors has an idle switch")


def test_an_idle_switch_gets_the_smallest_device():
    converter = with_an_idle_switch()
    brief = replace(
        BASE, required=float(converter.ratio) * 2.7, area=None, efficiency_floor=None, most_capacitors=3
    )
    figures = evaluate(table_of([converter]), brief)
    found = elements_of(converter, brief, float(figures.capacitor_area[0]), float(figures.switching_area[0]))
    idle = [e for e in found if e.kind == "switch" and e.multiplier == 0]
    technology = brief.technology
    assert idle
    for one in idle:
        limits = [s.rating * technology.switch_derating for s in technology.switches]
        least = min(
            max(1, np.ceil(one.voltage / limit * (1 - 1e-9))) * s.least_area
            for s, limit in zip(technology.switches, limits, strict=True)
        )
        assert one.area == pytest.approx(least, rel=1e-12)
    assert figures.idle_area[0] == pytest.approx(sum(one.area for one in idle), rel=1e-12)
    assert not figures.clean[0]


@given(census_converters() | family_converters(most=12))
def test_output_evenness_is_twice_the_lesser_share(converter):
    shares = [float(q) for q in charge_flow(converter).output_charges]
    assert sum(shares) == pytest.approx(1.0)
    wanted = min(max(2 * min(shares), 0.0), 1.0)
    assert output_evenness(table_of([converter]))[0] == pytest.approx(wanted, abs=1e-12)


def test_a_stack_is_taken_where_it_is_cheaper():
    """By hand: s^2 rho of two small devices against one large one."""
    technology = TECHNOLOGIES[0]
    small = replace(technology.switches[0], name="small", rating=2.0, resistance=0.01)
    large = replace(technology.switches[0], name="large", rating=4.0, resistance=0.05)
    stacking = replace(technology, switches=(small, large), switch_derating=1.0)
    brief = replace(BASE, technology=stacking, input_maximum=4.0, input_nominal=3.7, efficiency_floor=None)
    # The series-parallel halver in reverse: switches block at most the input.
    doubler = Converter.parse("I-G/O-I")
    job = replace(brief, required=1.8 * brief.input_minimum)
    figures = evaluate(table_of([doubler]), job)
    found = elements_of(doubler, job, float(figures.capacitor_area[0]), float(figures.switching_area[0]))
    # 4 V: 2^2 x 0.01 = 0.04 is less than 0.05.
    assert {(e.device, e.series) for e in found if e.kind == "switch"} == {("small", 2)}
    dearer = replace(job, technology=replace(stacking, switches=(replace(small, resistance=0.013), large)))
    figures = evaluate(table_of([doubler]), dearer)
    found = elements_of(doubler, dearer, float(figures.capacitor_area[0]), float(figures.switching_area[0]))
    assert {(e.device, e.series) for e in found if e.kind == "switch"} == {("large", 1)}
