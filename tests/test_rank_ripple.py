"""Ripple: against a plain simulation of the charge balance, and known cases."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from capmuster.enumerate.converters import converters, table_of
from capmuster.enumerate.wiring import Converter
from capmuster.rank.design.ripple import capacitor_for, excursion, phase_shares
from capmuster.rank.inputs.brief import load_brief
from capmuster.rank.scores.utilisation import charge_flow
from capmuster.rank.shortlist import shortlist


def simulated(shares, duty, copies, *, spread):
    """Movement of the charge on the capacitor, step by step; portions at once or spread over their phases."""
    steps = 24000
    t = (np.arange(steps) + 0.5) / steps
    flow = np.zeros(steps)
    for copy in range(copies):
        for share, start, length in ((shares[0], 0.0, duty), (shares[1], duty, 1.0 - duty)):
            begin = (start + copy / copies) % 1.0
            if spread:
                inside = (t - begin) % 1.0 < length
                flow[inside] += share / copies / np.count_nonzero(inside)
            else:
                flow[round(begin * steps) % steps] += share / copies
    moved = np.cumsum(flow - 1.0 / steps)
    return moved.max() - min(moved.min(), (moved - flow).min() if not spread else moved.min())


@given(
    share=st.floats(-0.5, 1.5),
    duty=st.sampled_from([0.25, 0.5, 0.625]),
    copies=st.integers(1, 4),
)
def test_movement_is_that_of_a_simulation(share, duty, copies):
    shares = (share, 1.0 - share)
    found = float(excursion([shares], duty, copies)[0])
    assert found == pytest.approx(simulated(shares, duty, copies, spread=False), abs=3e-4)
    # Portions that are spread over their phases never move the voltage further.
    assert simulated(shares, duty, copies, spread=True) <= found + 3e-4


def test_known_cases():
    # One phase feeds the output, at once: the whole charge arrives in one portion. Both alike: half of it.
    assert excursion([[1.0, 0.0]])[0] == pytest.approx(1.0)
    assert excursion([[0.5, 0.5]])[0] == pytest.approx(0.5)
    # Copies divide it (common practice): N copies of one-phase converters move 1/N; of even ones 1/(2N) if
    # their portions fall apart, which takes an odd N at 50 % duty, else 1/N.
    for copies in (2, 3, 4, 5):
        assert excursion([[1.0, 0.0]], 0.5, copies)[0] == pytest.approx(1 / copies)
        even = 1 / (2 * copies) if copies % 2 else 1 / copies
        assert excursion([[0.5, 0.5]], 0.5, copies)[0] == pytest.approx(even)
    # C = Q / dU (textbook): 3 mA at 1 MHz is 3 nC per period.
    assert capacitor_for(np.array([1.0]), np.array([3e-3]), np.array([1e6]), 0.03)[0] == pytest.approx(1e-7)


def test_shares_are_those_of_the_exact_charge_flow():
    table = converters(3)
    for port, name in ((1, "input_charges"), (2, "output_charges")):
        shares = phase_shares(table, port)
        np.testing.assert_allclose(shares.sum(axis=1), 1.0)
        for row in range(0, len(table), 91):
            exact = getattr(charge_flow(table.converter(row)), name)
            total = sum(exact)
            np.testing.assert_allclose(shares[row], [float(q / total) for q in exact], atol=1e-12)
    halver = table_of([Converter.parse("O-G/I-O")])
    assert phase_shares(halver, 2)[0].tolist() == [0.5, 0.5]
    assert halver.ratio(0) == Fraction(1, 2)


def test_the_table_shows_the_capacitors_around():
    brief = replace(load_brief("greenhouse-node"), output_ripple=0.02, input_ripple=0.05, most_capacitors=2)
    found = shortlist(brief, top=3)
    flow = charge_flow(found.pool.converter(0))
    worst = float(max(flow.output_charges) / sum(flow.output_charges))
    assert worst == 0.5  # the halver feeds the output in both phases
    # 3 mA at 10 MHz: 0.3 nC per period, half of it at once on 20 mV.
    assert found.frame["output_capacitor_F"][0] == pytest.approx(0.5 * 0.3e-9 / 0.02)
    assert found.frame["input_capacitor_F"][0] == pytest.approx(1.0 * 0.15e-9 / 0.05)
    doubled = shortlist(replace(brief, copies=2), top=3)
    assert doubled.frame["input_capacitor_F"][0] == pytest.approx(0.5 * 0.15e-9 / 0.05)
    assert "output_capacitor_F" not in shortlist(replace(brief, output_ripple=None), top=1).frame
