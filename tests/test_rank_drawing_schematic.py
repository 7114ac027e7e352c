"""Switch-level schematics: read back from the geometry, they are the network, every element once."""

from __future__ import annotations

from random import Random
from typing import TYPE_CHECKING

import pytest
from drawn_wires import Joined, terminals
from hypothesis import given, settings
from strategies import census_converters

from capmuster.enumerate.converters import converters
from capmuster.enumerate.families import dickson, fibonacci, ladder, members, series_parallel
from capmuster.rank.drawing.schematic import schematic
from capmuster.rank.drawing.shapes import Drawing, Line
from capmuster.rank.drawing.sheet import converter_sheet
from capmuster.rank.scores.switching import switch_network

if TYPE_CHECKING:
    from capmuster.enumerate.wiring import Converter


def _nets_at_ends(drawing: Drawing) -> tuple[dict[str, tuple[int, int]], dict[int, str]]:
    """Nets at the upper and lower end of each element, and ports by net."""
    joined = Joined(drawing)
    elements, ports = {}, {}
    for symbol in drawing.symbols:
        if symbol.name[0] in "CS":
            assert symbol.name not in elements, f"{symbol.name} is drawn twice"
            upper, lower = terminals(symbol)
            elements[symbol.name] = joined.net_at(upper), joined.net_at(lower)
        else:
            bar = next(mark for mark in symbol.marks if isinstance(mark, Line))
            (x1, y), (x2, _) = bar.points
            net = joined.net_at((0.5 * (x1 + x2), y))
            ports[net] = "G" if symbol.name == "ground" else symbol.name.removeprefix("flag ")
    return elements, ports


def _check_network(converter: Converter) -> None:
    drawing = schematic(converter)
    network = switch_network(converter)
    elements, ports = _nets_at_ends(drawing)
    wanted = {f"C{i + 1}" for i in range(converter.n)} | {switch.name for switch in network.switches}
    assert set(elements) == wanted

    # One drawn net (or all flags of one port) for each cluster, and the other way round.
    def name(net: int) -> str:
        return ports.get(net, f"net {net}")

    cluster_of: dict[str, int] = {}
    plates = {plate: k for k, cluster in enumerate(network.clusters) for plate in cluster.plates}
    expected = {f"C{i + 1}": (plates[i, 1], plates[i, -1]) for i in range(converter.n)}
    expected |= {switch.name: switch.clusters for switch in network.switches}
    pending = dict(elements)
    for port_name in ("G", "I", "O"):
        cluster_of[port_name] = next(k for k, c in enumerate(network.clusters) if c.port == port_name)
    for element, nets in pending.items():
        ends, clusters = [name(net) for net in nets], list(expected[element])
        if element.startswith("C"):  # the plus sign says which end is which
            if not _plus_is_up(drawing, element):
                ends.reverse()
            for end, cluster in zip(ends, clusters, strict=True):
                assert cluster_of.setdefault(end, cluster) == cluster, element
    for element, nets in pending.items():
        if element.startswith("S"):
            # A node without a plate does not exist, so capacitors and ports have named every net.
            assert sorted(cluster_of[name(net)] for net in nets) == sorted(expected[element]), element
    assert len(set(cluster_of.values())) == len(cluster_of) == len(network.clusters)


def _plus_is_up(drawing: Drawing, name: str) -> bool:
    symbol = next(symbol for symbol in drawing.symbols if symbol.name == name)
    middle = 0.5 * (symbol.box.top + symbol.box.bottom)
    near = [
        label
        for label in drawing.labels
        if label.text == "+" and abs(label.x - symbol.box.left) < 3 and abs(label.y - middle) < 20
    ]
    assert len(near) == 1
    return 0.5 * (near[0].box.top + near[0].box.bottom) < middle


@settings(max_examples=30)
@given(census_converters())
def test_the_schematic_read_back_is_the_network(converter):
    _check_network(converter)


@pytest.mark.parametrize(
    "converter",
    [fibonacci(5), series_parallel(6), dickson(6), ladder(4, 1)],
    ids=["Fibonacci", "series-parallel", "Dickson", "ladder"],
)
def test_the_schematic_of_five_capacitors_read_back_is_the_network(converter):
    _check_network(converter)


@settings(max_examples=30)
@given(census_converters(most=3))
def test_badges_say_the_phase_of_each_switch(converter):
    drawing = schematic(converter)
    for switch in switch_network(converter).switches:
        label = next(label for label in drawing.labels if label.text == switch.name)
        below = [
            badge
            for badge in drawing.labels
            if badge.badge and abs(badge.x - label.x) < 8 and 0 < badge.y - label.y < 20
        ]
        assert len(below) == 1
        assert below[0].text == str(switch.phase)
        # Told apart without colour: solid for phase 1, outlined for phase 2.
        assert below[0].badge == ("solid" if switch.phase == 1 else "outline")


@pytest.mark.parametrize(
    "sizes",
    [
        pytest.param((2, 3, 3, 4, 4), id="few"),
        pytest.param((2, 3, 3, 4, 4, 4, 4, 4, 4, 4), id="more", marks=pytest.mark.long),
    ],
)
def test_no_two_labels_or_symbols_overlap(sizes):
    for member in members(3):
        assert not schematic(member.converter).collisions(), member
    random = Random(2)  # noqa: S311 -- a sample, the same on every run
    for n in sizes:
        table = converters(n)
        converter = table.converter(random.randrange(len(table)))
        assert not schematic(converter).collisions(), converter.code


@pytest.mark.long
def test_no_two_labels_or_symbols_overlap_up_to_five_capacitors_in_families():
    for member in members(5):
        assert not schematic(member.converter).collisions(), member


def test_well_known_circuits_are_drawn_without_a_crossing():
    # Common practice: doubler, series-parallel, ladder and Dickson circuits are planar.
    for converter in (dickson(2), series_parallel(4), ladder(3, 1), ladder(4, 1), dickson(5)):
        leads = [
            wire for wire in schematic(converter).wires if isinstance(wire, Line) and wire.stroke == "lead"
        ]
        assert all(len(lead.points) == 2 for lead in leads)  # a bow would have more points


def test_the_same_schematic_every_time():
    assert schematic(fibonacci(4)) == schematic(fibonacci(4))


def test_above_five_capacitors_there_is_no_schematic():
    texts = {label.text for label in converter_sheet(dickson(7)).labels}
    assert "Phase 1" in texts
    assert "Switch-level schematic" not in texts
    assert "Switch-level schematic" in {label.text for label in converter_sheet(dickson(6)).labels}
