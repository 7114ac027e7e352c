"""The choice of discrete parts against trying everything, and against limits known by hand."""

from __future__ import annotations

import math
from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from parts_cases import BRIEF, HALVER, NOTHING, capacitor, cases, posed, reported, transistor
from plain_parts import all_choices

from capmuster.enumerate.errors import CapmusterError
from capmuster.enumerate.wiring import Converter
from capmuster.rank.discrete.blends import LOOP, QUADRATIC
from capmuster.rank.discrete.certify import certify
from capmuster.rank.discrete.design import fill
from capmuster.rank.discrete.labels import search
from capmuster.rank.discrete.options import NoPartError
from capmuster.rank.discrete.problem import resolved
from capmuster.rank.discrete.relaxed import relax
from capmuster.rank.inputs.brief import load_brief
from capmuster.rank.inputs.parts import Stock
from capmuster.rank.inputs.parts_request import PartsRequest

# Everything against trying everything.


@given(case=cases(), blend=st.sampled_from([QUADRATIC, LOOP]))
@settings(max_examples=150)
def test_searches_and_bounds_agree_with_trying_everything(case, blend):
    converter, brief, request = case
    expected = all_choices(converter, brief, request).best(
        blend.value, brief, request, float(converter.ratio)
    )
    _, book, problem = posed(converter, brief, request, blend)

    relaxed = relax(problem)
    by_labels = search(problem, relaxed)
    by_solver = certify(problem, NOTHING)
    with_hint = certify(problem, by_labels)
    assert by_labels.proven
    assert by_solver.proven
    assert with_hint.proven
    for found in (by_labels, by_solver, with_hint):
        if expected == math.inf:
            assert found.selection is None
            assert found.bound == math.inf
        else:
            assert reported(problem, book, found.objective) == pytest.approx(expected, rel=1e-9)
            assert reported(problem, book, found.bound) == pytest.approx(expected, rel=2e-7)
            assert reported(problem, book, found.bound) <= expected * (1 + 1e-9)
            assert problem.fits(problem.totals(found.selection))
    if expected < math.inf:
        assert reported(problem, book, relaxed.bound) <= expected * (1 + 1e-9)


@given(case=cases())
@settings(max_examples=60)
def test_options_that_are_left_out_are_never_needed(case):
    converter, brief, request = case
    (*_, few), (*_, all_of_them) = (
        posed(converter, brief, request),
        posed(converter, brief, request, pruned=False),
    )
    assert search(few).objective == pytest.approx(search(all_of_them).objective, rel=1e-9)
    for group, whole in zip(few.groups, all_of_them.groups, strict=True):
        assert len(group.options) <= len(whole.options)


@given(case=cases(), least=st.sampled_from([1, 2, 5]))
@settings(max_examples=40)
def test_a_search_without_room_says_so_and_its_bound_holds(case, least):
    converter, brief, request = case
    *_, problem = posed(converter, brief, request)
    full, short = search(problem), search(problem, widest=least)
    assert short.bound <= full.objective * (1 + 1e-9)
    if short.proven:
        assert short.objective == pytest.approx(full.objective, rel=1e-9)
    elif short.selection is not None:
        assert problem.fits(problem.totals(short.selection))
        assert short.objective >= full.objective * (1 - 1e-9)


@pytest.mark.parametrize("loss", [1.65, 1.75, 2.2])
def test_the_solver_goes_on_while_its_choice_breaks_a_limit(loss):
    # Between the tangents that it starts with the blend is above all of them: here the first choice breaks
    # the loss target, or at 2.2 W the limit on the impedance, and nothing is proven before there are more.
    parts = replace(load_brief("pump-shelf").parts, least="price", footprint=None, loss=loss)
    *_, problem = posed(Converter.parse("O-G/a-O O-G/b-a O-G/I-b"), BRIEF, resolved(parts, BRIEF))
    by_labels, by_solver = search(problem), certify(problem, NOTHING)
    assert by_labels.proven
    assert by_solver.proven
    assert by_solver.objective == by_solver.bound == by_labels.objective
    first = certify(problem, NOTHING, rounds=1)
    assert (first.selection, first.proven) == (None, False)
    assert first.bound < by_labels.objective


def test_the_solver_gives_the_same_result_each_time():
    request = resolved(replace(load_brief("pump-shelf").parts, footprint=450.0), BRIEF)
    *_, problem = posed(Converter.parse("O-G/a-O O-G/b-a O-G/I-b"), BRIEF, request)
    known = search(problem)
    one = certify(problem, known)
    assert certify(problem, known) == one
    assert certify(problem, known, seed=7).objective == pytest.approx(one.objective, rel=1e-9)


# Blends.


@pytest.mark.parametrize("blend", [QUADRATIC, LOOP], ids=["quadratic", "loop"])
@given(
    one=st.tuples(st.floats(1e-4, 10), st.floats(1e-4, 10)),
    other=st.tuples(st.floats(1e-4, 10), st.floats(1e-4, 10)),
    factor=st.floats(0.01, 100),
)
def test_a_blend_lies_above_its_tangents_and_they_meet_it(blend, one, other, factor):
    (x, y), (u, w) = one, other
    by_slow, by_fast = (float(slope) for slope in blend.slopes(u, w))
    value = float(blend.value(x, y))
    assert by_slow >= 0
    assert by_fast >= 0
    assert by_slow * x + by_fast * y <= value * (1 + 1e-9)
    assert by_slow * u + by_fast * w == pytest.approx(float(blend.value(u, w)), rel=1e-9)  # Euler's theorem
    assert float(blend.value(factor * x, factor * y)) == pytest.approx(factor * value, rel=1e-9)


# Limits by hand.


def halver_request(**changes):
    stock = Stock(("", ""), (capacitor("c", 10e-6),), (transistor("n", 5e-3),))
    request = PartsRequest(
        stock,
        footprint=1e4,
        temperature=25.0,
        parallel_capacitors=1,
        parallel_switches=1,
        frequencies=(100e3,),
    )
    return resolved(replace(request, **changes), BRIEF)


def test_a_halver_with_one_part_of_each_kind_by_hand():
    # 24 V is on the line from (0, 100 %) to (25 V, 70 %): 71.2 %, times 0.9 for the tolerance: 6.408 uF.
    # R_SSL = (1/2)^2 / (100 kHz x 6.408 uF) = 0.39014 ohm; R_FSL = 4 switches x 2 x (1/2)^2 x 5 mohm
    # + 4 x (1/2)^2 x 3 mohm = 13 mohm. Gate: 4 x 10 nC x 4.5 V x 100 kHz = 18 mW. Output charge:
    # 20 nC x sqrt(24/30) = 17.889 nC, x 24 V x 100 kHz x 4 = 171.7 mW.
    slots, book, problem = posed(HALVER, BRIEF, halver_request())
    totals = problem.totals(search(problem).selection)
    assert totals.slow == pytest.approx(0.25 / (1e5 * 10e-6 * 0.9 * 0.712))
    assert totals.fast == pytest.approx(13e-3)
    assert totals.fixed == pytest.approx(18e-3 + 4 * 20e-9 * math.sqrt(0.8) * 24 * 1e5)
    assert [slot.voltage for slot in slots] == [28.0] * 5
    assert reported(problem, book, search(problem).objective) == pytest.approx(
        64 * (math.hypot(totals.slow, totals.fast) + 1.5e-3) + totals.fixed + 40e-3
    )


def test_without_load_free_loss_and_without_budget_everything_is_as_large_as_allowed():
    stock = Stock(
        ("", ""),
        (capacitor("small", 4.7e-6), capacitor("large", 10e-6)),
        tuple(
            transistor(name, resistance, gate_charge=0.0, output_charge=0.0)
            for name, resistance in (("poor", 9e-3), ("good", 2e-3))
        ),
    )
    request = halver_request(stock=stock, footprint=1e6, parallel_capacitors=5, parallel_switches=3)
    slots, book, problem = posed(HALVER, BRIEF, request)
    fillings = fill(slots, problem, search(problem).selection, book)
    assert {(one.part.name, one.parallel) for one in fillings} == {("large", 5), ("good", 3)}


def test_at_light_load_the_least_charge_wins():
    stock = Stock(
        ("", ""),
        (capacitor("c", 10e-6),),
        (
            transistor("light", 50e-3, gate_charge=1e-9, output_charge=2e-9),
            transistor("heavy", 1e-3, gate_charge=50e-9),
        ),
    )
    brief = replace(BRIEF, current=1e-3)
    slots, book, problem = posed(HALVER, brief, halver_request(stock=stock, parallel_switches=3))
    fillings = fill(slots, problem, search(problem).selection, book)
    assert {(one.part.name, one.parallel) for one in fillings if one.slot.kind == "switch"} == {("light", 1)}


def test_an_element_at_its_derated_rating_is_allowed_and_above_it_not():
    # 28 V at the highest input; 35 V derated to 80 % stands exactly that.
    for rating, stands in ((35.0, True), (34.99, False)):
        stock = Stock(("", ""), (capacitor("c", 10e-6, rating),), (transistor("n", 5e-3),))
        request = halver_request(stock=stock, capacitor_derating=0.8)
        if stands:
            slots, book, problem = posed(HALVER, BRIEF, request)
            (one, *_) = fill(slots, problem, search(problem).selection, book)
            assert one.stress == pytest.approx(1.0)
        else:
            with pytest.raises(NoPartError, match="no capacitor of the stock stands 28 V"):
                posed(HALVER, BRIEF, request)


def test_two_in_series_share_the_voltage_and_its_bias():
    stock = Stock(("", ""), (capacitor("c", 10e-6, 25.0),), (transistor("n", 5e-3, 25.0),))
    request = halver_request(stock=stock, series=2, parallel_capacitors=2, parallel_switches=1)
    slots, book, problem = posed(HALVER, BRIEF, request)
    c, *switches = fill(slots, problem, search(problem).selection, book)
    assert (c.series, c.parallel, c.number) == (2, 2, 4)
    # 12 V of 25 V each: 100 % - 30 % x 12 / 12.5 = 71.2 %
    assert c.value(request, 48.0) == pytest.approx(10e-6 * 0.9 * 0.712 * 2 / 2)
    assert all(one.series == 2 and one.value(request, 48.0) == pytest.approx(10e-3) for one in switches)
    assert c.rating == pytest.approx(40.0)


def test_a_drive_that_is_not_there_rules_a_part_out():
    stock = Stock(
        ("", ""),
        (capacitor("c", 10e-6),),
        (transistor("ten", 1e-3, drive=10.0, gate_charge=1e-9), transistor("n", 5e-3)),
    )
    for drive, name in ((None, "ten"), (5.0, "n")):
        slots, book, problem = posed(HALVER, BRIEF, halver_request(stock=stock, drive=drive))
        fillings = fill(slots, problem, search(problem).selection, book)
        assert {one.part.name for one in fillings[1:]} == {name}
    with pytest.raises(NoPartError, match="no switch of the stock"):
        posed(HALVER, BRIEF, halver_request(stock=stock, drive=3.0))


def test_a_budget_is_met_to_the_last_tenth():
    # One capacitor of 10.1 mm2 and four switches of 15.3 mm2: 71.3 mm2, which no float holds exactly.
    stock = Stock(
        ("", ""), (capacitor("c", 10e-6, footprint=10.1),), (transistor("n", 5e-3, footprint=15.3),)
    )
    for footprint, found in ((71.3, True), (71.29, False)):
        *_, problem = posed(HALVER, BRIEF, halver_request(stock=stock, footprint=footprint))
        assert (search(problem).selection is not None) == found
        assert (certify(problem, NOTHING).selection is not None) == found


@pytest.mark.parametrize(
    ("changes", "problem"),
    [
        ({"footprint": None}, "least loss without a budget"),
        ({"footprint": None, "least": "price"}, "least price without a target"),
    ],
)
def test_a_request_without_end_is_refused(changes, problem):
    brief = replace(BRIEF, area=None)
    with pytest.raises(CapmusterError, match=problem):
        resolved(replace(halver_request(), **changes), brief)


def test_the_brief_fills_in_what_a_request_leaves_open():
    request = PartsRequest(halver_request().stock)
    assert resolved(request, BRIEF).footprint == BRIEF.area
    assert resolved(request, BRIEF).frequencies == (BRIEF.frequency,)
    assert resolved(request, BRIEF).switch_derating == BRIEF.technology.switch_derating
    floor = resolved(replace(request, least="price"), replace(BRIEF, efficiency_floor=0.7))
    assert (floor.efficiency, floor.footprint) == (0.7, None)
    ranged = resolved(request, replace(BRIEF, objective="least-loss", frequency_minimum=30e3)).frequencies
    assert ranged == pytest.approx([30e3, 42.4e3, 60e3, 84.9e3, 120e3], rel=2e-3)
    with pytest.raises(CapmusterError, match="3 interleaved copies"):
        resolved(request, replace(BRIEF, copies=3))


def test_alike_elements_are_one_group_and_all_get_parts():
    request = resolved(load_brief("pump-shelf").parts, BRIEF)
    slots, book, problem = posed(Converter.parse("O-G/a-O O-G/b-a O-G/I-b"), BRIEF, request)
    assert sorted(name for g in problem.groups for name in g.names) == sorted(slot.name for slot in slots)
    assert len(problem.groups) < len(slots)
    fillings = fill(slots, problem, search(problem).selection, book)
    assert [one.slot for one in fillings] == list(slots)
    assert math.fsum(one.footprint for one in fillings) <= request.footprint
    assert sum(slot.multiplier for slot in slots if slot.kind == "capacitor") == Fraction(3, 4)
    assert np.isfinite([one.value(request, 48.0) for one in fillings]).all()
