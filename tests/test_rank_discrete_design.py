"""What a converter filled with parts does: losses, impedance, efficiency."""

from __future__ import annotations

from dataclasses import replace

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from parts_cases import BRIEF, cases, posed
from plain_circuit import steady

from capmuster.enumerate.wiring import Converter
from capmuster.rank.discrete.blends import LOOP, QUADRATIC
from capmuster.rank.discrete.design import condition, exact_impedance, fill, holding_frequency
from capmuster.rank.discrete.labels import search
from capmuster.rank.discrete.problem import resolved
from capmuster.rank.exact.circuit import circuit_of
from capmuster.rank.inputs.brief import load_brief


@given(case=cases(), volts=st.floats(44, 56))
@settings(max_examples=60)
def test_losses_are_the_difference_of_input_and_output_power(case, volts):
    converter, brief, request = case
    slots, book, problem = posed(converter, brief, request)
    outcome = search(problem)
    if outcome.selection is None:
        return
    fillings = fill(slots, problem, outcome.selection, book)
    ratio = float(converter.ratio)
    at = condition(
        fillings,
        ratio,
        brief,
        request=request,
        frequency=book.frequency,
        input_voltage=volts,
        blend=QUADRATIC,
    )
    taken = ratio * volts * brief.current + at.losses.load_free
    given_out = at.output_voltage * brief.current
    assert at.losses.total == pytest.approx(taken - given_out, rel=1e-9, abs=1e-12)
    assert at.efficiency == pytest.approx(given_out / taken, rel=1e-12)
    # Part by part at the operating input it is what the search added up.
    held = brief.use == "regulated"
    operating = condition(
        fillings,
        ratio,
        brief,
        request=request,
        frequency=book.frequency,
        input_voltage=brief.input_minimum if held else brief.input_nominal,
        blend=QUADRATIC,
    )
    totals = problem.totals(outcome.selection)
    assert operating.losses.total == pytest.approx(
        problem.offset + problem.conduction(totals) + totals.fixed, rel=1e-9
    )
    if not held:
        # Less bias at the least input: the droop budget, checked at the nominal one, is on the safe side.
        droop = condition(
            fillings,
            ratio,
            brief,
            request=request,
            frequency=book.frequency,
            input_voltage=brief.input_minimum,
            blend=QUADRATIC,
        )
        assert droop.output_voltage >= brief.required * (1 - 1e-9)


@pytest.mark.parametrize("duty", [0.5, 0.4])
@pytest.mark.parametrize("code", ["O-G/a-O O-G/b-a O-G/I-b", "O-G/a-O a-O/O-G a-G/I-a"])
def test_impedance_against_a_circuit_that_is_switched(code, duty):
    # The oracle knows node equations and matrix exponentials only (tests/plain_circuit.py).
    converter, brief = Converter.parse(code), replace(BRIEF, objective="least-loss", duty=duty)
    request = resolved(load_brief("pump-shelf").parts, brief)
    slots, book, problem = posed(converter, brief, request)
    fillings = fill(slots, problem, search(problem).selection, book)
    n = converter.n
    values = [one.value(request, 48.0) for one in fillings]
    esr = [one.part.series_resistance * one.series / one.parallel for one in fillings[:n]]
    circuit = circuit_of(converter, values[:n], values[n:], series_resistances=esr, duty=duty)
    at = condition(
        fillings, 0.25, brief, request=request, frequency=120e3, input_voltage=48.0, blend=QUADRATIC
    )

    def switched(frequency):
        current = steady(circuit, frequency, (48.0, 11.9))["currents"][1]
        return abs(0.1 / current)

    lead = brief.technology.wiring_resistance
    exact = exact_impedance(converter, fillings, brief, request=request, frequency=120e3, input_voltage=48.0)
    assert exact - lead == pytest.approx(switched(120e3), rel=1e-6)
    assert switched(120.0) * 120 == pytest.approx(at.slow * 120e3, rel=1e-3)  # slow-switching limit
    assert switched(120e6) == pytest.approx(at.fast, rel=1e-3)  # fast-switching limit
    # Between the loop blend and the sum of both limits (charge takes the way of least loss).
    assert float(LOOP.value(at.slow, at.fast)) <= (exact - lead) * (1 + 1e-9)
    assert exact - lead <= at.slow + at.fast


@pytest.mark.parametrize("blend", [QUADRATIC, LOOP], ids=["quadratic", "loop"])
def test_frequency_falls_until_the_droop_is_what_holds_the_output(blend):
    converter = Converter.parse("O-G/a-O O-G/b-a O-G/I-b")
    brief = replace(BRIEF, use="regulated", required=10.5)
    request = resolved(load_brief("pump-shelf").parts, brief)
    slots, book, problem = posed(converter, brief, request, blend)
    fillings = fill(slots, problem, search(problem).selection, book)
    common = {"request": request, "blend": blend}
    frequencies = []
    for volts in (44.0, 48.0, 56.0):
        f = holding_frequency(fillings, 0.25, brief, frequency=120e3, input_voltage=volts, **common)
        at = condition(fillings, 0.25, brief, frequency=f, input_voltage=volts, **common)
        assert 0.25 * volts - at.impedance * brief.current == pytest.approx(10.5, rel=1e-9)
        frequencies.append(f)
    assert 120e3 > frequencies[0] > frequencies[1] > frequencies[2]
    for other in (BRIEF, replace(brief, regulation="conductance"), replace(brief, required=10.99)):
        assert (
            holding_frequency(fillings, 0.25, other, frequency=120e3, input_voltage=44.0, **common) == 120e3
        )
