"""Finalists on the exact impedance: what they hold, what they stand, what start-up does to them."""

from dataclasses import replace

import numpy as np
import plain_circuit
import pytest

from capmuster.rank.exact.finalist import finalist, finalists
from capmuster.rank.exact.finaltable import COLUMNS, finalist_frame
from capmuster.rank.exact.impedance import output_impedance
from capmuster.rank.exact.resizing import element_circuit
from capmuster.rank.inputs.brief import load_brief
from capmuster.rank.lookup import find_converter
from capmuster.rank.shortlist import shortlist


@pytest.fixture(scope="module")
def briefs():
    """Shortlists of a chip in fixed-ratio use, of one in regulated use, and of a board."""
    names = ("greenhouse-node", "greenhouse-node-regulated", "pump-shelf")
    return {name: shortlist(load_brief(name), top=4) for name in names}


@pytest.fixture(scope="module")
def best(briefs):
    return {name: finalists(found) for name, found in briefs.items()}


@pytest.mark.parametrize("name", ["greenhouse-node", "greenhouse-node-regulated", "pump-shelf"])
def test_lowest_input_holds_the_output_by_the_matrix_exponential(best, name):
    """`scipy.linalg.expm` on the final circuit: at the required output the load current flows."""
    for one in best[name][:2]:
        brief = one.brief
        assert one.holds
        expected = plain_circuit.steady(one.circuit, one.frequency, (brief.input_minimum, brief.required))
        assert -expected["currents"][1] == pytest.approx(brief.current, rel=1e-6)


@pytest.mark.parametrize("name", ["greenhouse-node", "greenhouse-node-regulated", "pump-shelf"])
def test_classes_stand_what_the_elements_see_in_use(best, name):
    for one in best[name]:
        assert [o for o in one.overstressed if o.when == "steady state"] == []
        stands = np.array([element.rating for element in one.elements])
        assert (one.steady_peaks <= stands * (1 + 1e-9)).all()
        # A class is there for its voltage: one that stands half as much would not do with as few in series.
        assert all(element.area > 0 for element in one.elements)


def test_all_areas_times_t_divide_the_impedance_by_t(best):
    """Dimensions: time constants stay, so the exact impedance and nothing else changes."""
    one = best["greenhouse-node"][0]
    sides = [
        "plus" if plate.node == c.plus else "minus"
        for plate, c in zip(one.circuit.plates, one.circuit.capacitors, strict=True)
    ]
    doubled = tuple(
        replace(e, area=2 * e.area, value=e.value * (2 if e.kind == "capacitor" else 0.5))
        for e in one.elements
    )
    circuit = element_circuit(one.converter, doubled, one.brief.technology, sides)
    found = output_impedance(circuit, one.frequency)
    assert found.resistance[0] == pytest.approx(one.exact / 2, rel=1e-12)
    assert found.ratio[0] == pytest.approx(float(one.impedance.ratio[0]), rel=1e-12)


def test_plates_shift_the_ratio_and_the_area_pays_for_it(best):
    """A halver's plate k C charged from the output node pulls its ratio down to 1/(2 + k/...): never up."""
    halver = next(one for one in best["greenhouse-node"] if one.converter == find_converter("I-O/O-G"))
    assert halver.ratio_shift < 0
    technology = halver.brief.technology
    bare = replace(
        halver.brief,
        technology=replace(
            technology,
            capacitors=tuple(
                replace(c, plate_fraction=0.0, series_resistance=0.0) for c in technology.capacitors
            ),
        ),
    )
    without = finalist(halver.converter, halver.elements, bare)
    assert without.ratio_shift == pytest.approx(0.0, abs=1e-9)
    assert without.area < halver.area
    # One loop per phase, almost equal: the blend is a little high, x coth(x/y) almost exact (closed form).
    assert 1.0 < without.blended / without.exact < 1.089
    assert without.loop_blended == pytest.approx(without.exact, rel=0.01)


def test_start_up_puts_the_whole_input_on_a_halver(best):
    """Common practice: while the output is at 0 the flying capacitor sees the whole input."""
    halver = next(one for one in best["greenhouse-node"] if one.converter == find_converter("I-O/O-G"))
    volts = halver.brief.input_maximum
    assert halver.start_up_peaks[0] == pytest.approx(volts, rel=0.01)
    assert halver.steady_peaks[0] < 0.6 * volts
    assert any(o.name == "C1" and o.when == "start-up" for o in halver.overstressed)
    # An empty capacitor behind two on-resistances: no more than V / R (Ohm's law).
    loop = min(sum(s.resistance for s in halver.circuit.switches if s.phase == phase) for phase in (1, 2))
    assert 0 < halver.inrush <= 2 * volts / loop


def test_held_by_conductance_and_by_frequency_swing_differently(briefs):
    """Held by its switches a converter keeps its frequency, so its capacitors swing less."""
    found = briefs["greenhouse-node-regulated"]
    converter, elements = found.pool.converter(0), found.elements(0)
    by_frequency = finalist(converter, elements, found.brief)
    by_switches = finalist(converter, elements, replace(found.brief, regulation="conductance"))
    assert max(p.ripple.max() for p in by_switches.points) < max(p.ripple.max() for p in by_frequency.points)
    for one in (by_frequency, by_switches):
        assert all(point.output_voltage == pytest.approx(found.brief.required) for point in one.points)
    loads = [point.output_current / found.brief.current for point in by_switches.points]
    np.testing.assert_allclose(loads, [1.0, 0.5, 0.2, 0.05], rtol=1e-6)


def test_finalists_follow_the_shortlist(briefs, best):
    found = briefs["pump-shelf"]
    assert [one.converter for one in best["pump-shelf"]] == [found.pool.converter(k) for k in range(4)]
    assert len(finalists(found, top=2)) == 2


def test_table_sets_blend_and_exact_side_by_side(best):
    for one in best.values():
        frame = finalist_frame(one)
        assert list(frame.columns) == [column.name for column in COLUMNS]
        assert frame.attrs["units"]["exact_ohm"] == "ohm"
        np.testing.assert_allclose(frame.correction, frame.exact_ohm / frame.blend_ohm)
        assert sorted(frame.exact_place) == [1, 2, 3, 4]
        np.testing.assert_array_equal(
            frame.sort_values("exact_area_mm2").exact_place.to_numpy(), [1, 2, 3, 4]
        )
        # What start-up takes beyond its class is named with the voltage, and nothing else is.
        for row, finalist_ in zip(frame.itertuples(), one, strict=True):
            assert (row.start_up_stress > 1) == bool(row.overstressed)
            assert row.overstressed.count(" V") == len(finalist_.overstressed)
