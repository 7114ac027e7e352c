"""Gate drive: source potentials, needed levels, and whether the rails reach them."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
import pytest

from capmuster.enumerate.converters import converters, table_of
from capmuster.enumerate.wiring import Converter
from capmuster.rank.design.gatedrive import gates, rail_driven
from capmuster.rank.elements import elements_of, network_table
from capmuster.rank.inputs.brief import load_brief
from capmuster.rank.pool import gather
from capmuster.rank.scores.switching import switch_network
from capmuster.rank.scores.switchtable import switch_table

if TYPE_CHECKING:
    from capmuster.rank.inputs.technology import Technology

NODE = replace(load_brief("greenhouse-node"), efficiency_floor=None)


def with_classes(*names):
    switches = tuple(one for one in NODE.technology.switches if one.name in names)
    assert len(switches) == len(names)
    return replace(NODE.technology, switches=switches)


def drives_of(code, technology: Technology, **changes):
    brief = replace(NODE, technology=technology, **changes)
    switches = [e for e in elements_of(Converter.parse(code), brief, 1.0, 1.0) if e.kind == "switch"]
    return {frozenset((*e.nodes, e.phase)): e for e in switches}


def find(drives, *nodes):
    (found,) = [e for key, e in drives.items() if set(nodes) <= key]
    return found


def test_a_halver_with_n_channel_devices_by_hand():
    # The switch from C1- to ground has its source at ground; the one from the input to C1+ has it at the
    # input while it conducts, and needs a gate above all rails (common practice: bootstrap).
    drives = drives_of("O-G/I-O", with_classes("nmos-3v3"))
    low = find(drives, "C1-", "G")
    assert (low.source, low.gate, low.supply) == (
        (0.0, 0.0),
        (3.3, 0.0),
        "floating",
    )  # 3.3 V drive from 3.0 V
    high = find(drives, "I", "C1+")
    assert high.source == pytest.approx((3.7, 1.85))
    assert high.gate == pytest.approx((7.0, 1.85))
    assert high.supply == "floating"
    assert all(e.polarity == "nmos" for e in drives.values())


def test_the_lowest_input_decides():
    higher = {"input_minimum": 3.4, "required": 1.3}
    low = find(drives_of("O-G/I-O", with_classes("nmos-3v3"), **higher), "C1-", "G")
    assert low.supply == "rails"


def test_a_p_channel_device_serves_at_the_input():
    # Its source is at the input in both phases; the gate goes down by the drive voltage.
    higher = {"input_minimum": 3.4, "required": 1.3}
    drives = drives_of("O-G/I-O", with_classes("pmos-3v3"), **higher)
    high = find(drives, "I", "C1+")
    assert high.source == pytest.approx((3.7, 3.7))
    assert high.gate == pytest.approx((0.4, 3.7))
    assert high.supply == "rails"
    # At ground it would need a gate below ground.
    assert find(drives, "C1-", "G").supply == "floating"


def test_both_polarities_together_drive_a_halver_from_the_rails():
    technology = with_classes("nmos-1v8", "nmos-3v3", "pmos-3v3")
    brief = {"input_minimum": 3.7, "required": 1.3, "drive": "rails"}
    drives = drives_of("O-G/I-O", technology, **brief)
    assert find(drives, "C1-", "G").polarity == "nmos"
    assert find(drives, "I", "C1+").polarity == "pmos"
    # Source at 1.85 V: 1.85 V + 1.8 V stays below 3.7 V.
    assert find(drives, "C1+", "O").supply == "rails"
    assert {e.supply for e in drives.values()} == {"rails"}


def test_the_ends_of_a_closed_switch_are_one_vertex():
    # Plain and batch paths agree, and a switch's blocking voltage is the difference of its ends.
    for n in (1, 2, 3):
        table = converters(n)
        switches = switch_table(table)
        at = gates(table, switches)
        present = switches.phase > 0
        blocked = switches.blocking / table.scale[:, None]
        np.testing.assert_allclose((at.high - at.low)[present], blocked[present], atol=1e-12)
    for code in ("O-G/I-O", "G-a/a-G O-G/b-O I-O/b-a O-a/I-a"):
        converter = Converter.parse(code)
        network = switch_network(converter)
        table = table_of([converter])
        at = gates(table, network_table(table, network))
        for j, switch in enumerate(network.switches):
            ends = [network.clusters[k].potentials for k in switch.clusters]
            assert ends[0][switch.phase - 1] == ends[1][switch.phase - 1]
            assert at.closed[0, j] == pytest.approx(float(ends[0][switch.phase - 1]))
            assert at.high[0, j] == pytest.approx(float(ends[0][2 - switch.phase]))
            assert at.low[0, j] == pytest.approx(float(ends[1][2 - switch.phase]))


def test_a_step_up_output_is_a_rail_too():
    # Doubler: the output is at 2 V_in, enough for an n-channel switch with its source at the input.
    converter = Converter.parse("I-G/O-I")
    table = table_of([converter])
    network = switch_network(converter)
    brief = replace(NODE, required=6.0, input_minimum=3.4)
    able = rail_driven(table, network_table(table, network), brief)[0]
    nmos = next(k for k, one in enumerate(NODE.technology.switches) if one.name == "nmos-3v3")
    (at_input,) = [j for j, s in enumerate(network.switches) if set(s.nodes) == {"I", "C1+"}]
    assert able[at_input, nmos]
    (at_output,) = [j for j, s in enumerate(network.switches) if set(s.nodes) == {"O", "C1+"}]
    assert not able[at_output, nmos]


def test_the_filter_leaves_out_what_no_rail_can_drive():
    technology = with_classes("nmos-3v3", "pmos-3v3", "nmos-1v8")
    brief = replace(
        NODE, technology=technology, most_capacitors=3, area=None, input_minimum=3.7, required=1.3
    )
    free, driven = gather(brief), gather(replace(brief, drive="rails"))
    assert 0 < len(driven) < len(free)
    assert driven.evaluation.floating_drives.max() == 0
    assert driven.left_out["no rail can drive a gate"] == len(free) - len(driven)
    assert set(driven.ids.tolist()) < set(free.ids.tolist())
    losses = {"objective": "least-loss", "frequency_minimum": 2e5, "frequency": 5e7, "area": 1.0}
    counted = gather(replace(brief, drive="rails", **losses))
    assert set(counted.ids.tolist()) == set(driven.ids.tolist())
    assert counted.evaluation.floating_drives.max() == 0
    # Less choice is never better.
    loose = gather(replace(brief, **losses))
    merit = dict(zip(loose.ids.tolist(), loose.evaluation.merit.tolist(), strict=True))
    for one, there in zip(counted.ids.tolist(), counted.evaluation.merit.tolist(), strict=True):
        assert there >= merit[one] * (1 - 1e-9)
