"""Small problems of parts to test with: stocks, requests, briefs, and how they are posed."""

from __future__ import annotations

import math
from dataclasses import replace

from hypothesis import strategies as st

from capmuster.enumerate.wiring import Converter
from capmuster.rank.discrete.blends import QUADRATIC
from capmuster.rank.discrete.labels import Outcome
from capmuster.rank.discrete.options import OptionBook, Units
from capmuster.rank.discrete.problem import pose, resolved
from capmuster.rank.discrete.slots import slots_of
from capmuster.rank.inputs.brief import load_brief
from capmuster.rank.inputs.parts import CapacitorPart, Stock, SwitchPart
from capmuster.rank.inputs.parts_request import PartsRequest

BRIEF = replace(load_brief("pump-shelf"), efficiency_floor=None, parts=None)
HALVER = Converter.parse("I-O/O-G")
THIRD = Converter.parse("I-a/O-G a-O/O-G")
NOTHING = Outcome(None, None, math.inf, math.inf, proven=False)


def capacitor(name, nominal, rating=50.0, *, footprint=10.0, price=0.1, **others):
    figures = {
        "tolerance": 0.1,
        "bias": ((0.0, 1.0), (rating / 2, 0.7), (rating, 0.4)),
        "series_resistance": 3e-3,
    }
    return CapacitorPart(
        name, "X7R", "1210", nominal, rating=rating, footprint=footprint, price=price, **{**figures, **others}
    )


def transistor(name, resistance, rating=60.0, *, footprint=15.0, price=0.5, **others):
    figures = {"drive": 4.5, "rise": 0.004, "gate_charge": 10e-9, "output_charge": 20e-9}
    return SwitchPart(
        name, "3x3", rating, resistance, footprint=footprint, price=price,
        **{**figures, "output_charge_voltage": 30.0, "output_charge_exponent": 0.5, **others},
    )  # fmt: skip


def posed(converter, brief, request, blend=QUADRATIC, *, pruned=True):
    """Pose a problem at the first frequency of a resolved request."""
    counts = (
        request.footprint is not None or request.least == "footprint",
        request.price is not None or request.least == "price",
    )
    book = OptionBook(request, Units.of(request), request.frequencies[0], counts)
    slots = slots_of(converter, brief)
    return slots, book, pose(slots, converter.ratio, brief, book, blend, pruned=pruned)


def reported(problem, book, value):
    if problem.least == "loss":
        return value + problem.offset
    return value / (book.units.per_mm2 if problem.least == "footprint" else book.units.per_eur)


@st.composite
def stocks(draw):
    whole = st.integers
    ceramics = tuple(
        capacitor(
            f"c{k}",
            draw(whole(2, 120)) * 1e-6,
            draw(st.sampled_from([20.0, 25.0, 35.0, 50.0, 100.0])) if k else 100.0,
            footprint=draw(whole(30, 200)) / 10,
            price=draw(whole(1, 60)) / 100,
            series_resistance=draw(whole(0, 9)) * 1e-3,
            tolerance=draw(st.sampled_from([0.0, 0.05, 0.2])),
        )
        for k in range(draw(whole(1, 3)))
    )
    transistors = tuple(
        transistor(
            f"n{k}",
            draw(whole(1, 30)) * 1e-3,
            draw(st.sampled_from([25.0, 40.0, 60.0, 100.0])) if k else 100.0,
            footprint=draw(whole(50, 400)) / 10,
            price=draw(whole(10, 200)) / 100,
            gate_charge=draw(whole(0, 120)) * 1e-9,
            output_charge=draw(whole(0, 300)) * 1e-9,
        )
        for k in range(draw(whole(1, 2)))
    )
    return Stock(("drawn", "drawn"), ceramics, transistors)


@st.composite
def cases(draw):
    """Draw a converter, its brief and a resolved request whose limits bind now and then."""
    converter = draw(st.sampled_from([HALVER, THIRD]))
    brief = replace(BRIEF, current=draw(st.sampled_from([0.05, 1.0, 8.0, 20.0])))
    if draw(st.booleans()):
        share = draw(st.sampled_from([0.8, 0.9, 0.98]))
        brief = replace(brief, use="regulated", required=share * float(converter.ratio) * brief.input_minimum)
    least = draw(st.sampled_from(["loss", "footprint", "price"]))
    target = {} if least == "loss" else {"efficiency": draw(st.sampled_from([0.5, 0.8, 0.9, 0.96]))}
    request = PartsRequest(
        draw(stocks()),
        least=least,
        footprint=draw(st.sampled_from([95.0, 150.5, 400.0, 1000.0] + [None, None] * (least != "loss"))),
        price=draw(st.sampled_from([None, None, None, 4.0, 9.99])),
        temperature=draw(st.sampled_from([25.0, 110.0])),
        capacitance=draw(st.sampled_from(["least", "nominal"])),
        parallel_capacitors=3 if converter is HALVER else 2,
        parallel_switches=2 if converter is HALVER else 1,
        series=draw(st.sampled_from([1, 2])),
        driver_footprint=draw(st.sampled_from([0.0, 2.5])),
        driver_price=draw(st.sampled_from([0.0, 0.125])),
        frequencies=(draw(st.sampled_from([20e3, 120e3, 1e6])),),
        **target,
    )  # fmt: skip
    return converter, brief, resolved(request, brief)
