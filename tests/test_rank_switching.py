"""Switches of a converter: they rebuild its vertices, carry its charges, and no other tree costs less."""

from __future__ import annotations

from fractions import Fraction
from itertools import permutations

import networkx as nx
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from plain_converter import (
    ROLES,
    brute_balance,
    brute_clean,
    brute_utilisation,
    clusters_by_vertex,
    least_tree_cost,
    read_code,
)
from strategies import census_converters, family_converters, wandered_converters, with_renaming

from capmuster.enumerate.converters import converters
from capmuster.enumerate.families import dickson, doubler_chain, fibonacci, ladder, series_parallel
from capmuster.enumerate.wiring import CONVERTER_PORTS, Converter, vertex_name
from capmuster.rank.scores.switching import _MOST_ORDERED, _least_carrying, switch_network

ANY = census_converters() | family_converters() | wandered_converters()


def terminals(converter):
    """Every plate and port with the vertices that it sits on, phase by phase, read from the wiring alone."""
    found = {port: (number, number) for number, port in enumerate(CONVERTER_PORTS)}
    for i, (plus1, minus1, plus2, minus2) in enumerate(converter.words, start=1):
        found[f"C{i}+"] = (plus1, plus2)
        found[f"C{i}-"] = (minus1, minus2)
    return found


@given(ANY)
@settings(max_examples=80)
def test_closing_the_switches_of_a_phase_rebuilds_its_vertices(converter):
    network = switch_network(converter)
    places = terminals(converter)
    sides = {1: "+", -1: "-"}
    wired = {
        cluster.name: [f"C{i + 1}{sides[sign]}" for i, sign in cluster.plates]
        + ([cluster.port] if cluster.port else [])
        for cluster in network.clusters
    }
    assert sorted(t for group in wired.values() for t in group) == sorted(places)
    for phase in (1, 2):
        union = nx.utils.UnionFind(places)
        for group in wired.values():
            union.union(*group)
        for switch in network.switches:
            if switch.phase == phase:
                ends = [wired[name][0] for name in switch.nodes]
                assert union[ends[0]] != union[ends[1]]  # a tree: no switch closes a loop
                union.union(*ends)
        rebuilt = {frozenset(group) for group in union.to_sets()}
        vertices = {}
        for terminal, place in places.items():
            vertices.setdefault(place[phase - 1], set()).add(terminal)
        assert rebuilt == {frozenset(group) for group in vertices.values()}


@given(ANY)
@settings(max_examples=80)
def test_number_and_names(converter):
    network = switch_network(converter)
    K = len(set(terminals(converter).values()))
    assert len(network.clusters) == K
    # Theory: each vertex of k clusters takes k - 1 switches, and there are n + 5 vertices in both phases.
    assert len(network.switches) == 2 * K - converter.n - 5 <= 3 * converter.n + 1
    assert [switch.name for switch in network.switches] == [f"S{k + 1}" for k in range(len(network.switches))]
    assert len({cluster.name for cluster in network.clusters}) == K
    assert [cluster.port for cluster in network.clusters[:3]] == list(CONVERTER_PORTS)
    for cluster in network.clusters:
        on_a_port = cluster.vertices[0] == cluster.vertices[1] < len(CONVERTER_PORTS)
        assert (cluster.port is not None) == on_a_port
        assert terminals(converter)[cluster.name] == cluster.vertices
    for switch in network.switches:
        assert switch.nodes == tuple(network.clusters[i].name for i in switch.clusters)


@given(ANY)
@settings(max_examples=60)
def test_blocking_voltage_and_polarity(converter):
    """By the plain solver: while it is open the first node is the higher one, while closed both are equal."""
    plain = brute_balance(converter.code)
    places = terminals(converter)
    for switch in switch_network(converter).switches:
        levels = [
            [plain.potentials[phase][vertex_name(places[node][phase])] for node in switch.nodes]
            for phase in (0, 1)
        ]
        closed, opened = levels if switch.phase == 1 else levels[::-1]
        assert closed[0] == closed[1]
        assert opened[0] - opened[1] == switch.blocking_voltage >= 0


@given(ANY)
@settings(max_examples=60)
def test_charges_against_kirchhoff_and_least_squares(converter):
    """What flows in a tree follows from what enters at its nodes: numpy, on the incidence of networkx."""
    network = switch_network(converter)
    plain = brute_balance(converter.code)
    places = terminals(converter)
    output = abs(plain.port_charges[2])
    for phase in (1, 2):
        graph = nx.MultiDiGraph()
        graph.add_nodes_from(cluster.name for cluster in network.clusters)
        closed = [switch for switch in network.switches if switch.phase == phase]
        edges = [(*switch.nodes, graph.add_edge(*switch.nodes)) for switch in closed]
        wanted = {cluster.name: 0.0 for cluster in network.clusters}
        for k, q in enumerate(plain.charges, start=1):
            for side, sign in (("+", 1), ("-", -1)):
                taken = float(Fraction(sign * q * (1 if phase == 1 else -1), output))
                cluster = next(c for c in network.clusters if c.vertices == places[f"C{k}{side}"])
                wanted[cluster.name] += taken
        for cluster in network.clusters:
            if cluster.port:  # a port delivers what its vertex takes as a whole
                vertex = cluster.vertices[phase - 1]
                others = [c for c in network.clusters if c.vertices[phase - 1] == vertex and c is not cluster]
                wanted[cluster.name] = -sum(wanted[c.name] for c in others)
        matrix = nx.incidence_matrix(graph, edgelist=edges, oriented=True).toarray()
        demand = np.array([wanted[name] for name in graph])
        flow = np.linalg.lstsq(matrix, demand, rcond=None)[0] if edges else np.zeros(0)
        assert np.allclose(matrix @ flow, demand, atol=1e-6 * max(1, np.abs(demand).max()))
        theirs = [float(switch.multiplier) for switch in closed]
        assert np.allclose(np.abs(flow), theirs, atol=1e-6 * max(1, np.abs(demand).max()))


@given(census_converters(most=3) | family_converters(most=4))
@settings(max_examples=60)
def test_the_chain_against_all_trees(converter):
    """Vertex by vertex: no spanning tree has a smaller sum of |charge x blocking voltage|."""
    network = switch_network(converter)
    solved = brute_balance(converter.code)
    output = abs(solved.port_charges[2])
    groups = clusters_by_vertex(*read_code(converter.code), ROLES, solved)
    least = sum(least_tree_cost(group) for group in groups) / output
    assert sum(s.multiplier * s.blocking_voltage for s in network.switches) == least


@given(census_converters(least=4, most=4))
@settings(max_examples=25)
def test_the_chain_against_all_trees_of_four_capacitors(converter):
    network = switch_network(converter)
    cost = sum(s.multiplier * s.blocking_voltage for s in network.switches)
    M = converter.ratio
    if M == 1:
        return
    lifted = M - 1 if M > 1 else M * (1 - M) if M > 0 else -M
    assert 4 * lifted / cost == brute_utilisation(converter.code)[1]


@given(ANY)
@settings(max_examples=60)
def test_clean_as_the_plain_converter_says(converter):
    network = switch_network(converter)
    assert network.clean == brute_clean(converter.code)


@given(with_renaming(census_converters()))
@settings(max_examples=30)
def test_the_network_belongs_to_the_converter_and_not_to_its_spelling(drawn):
    converter, words = drawn
    assert switch_network(Converter(words)) == switch_network(converter)


CHARGE = st.fractions(min_value=-5, max_value=5, max_denominator=6)


@given(st.lists(CHARGE, min_size=1, max_size=5), CHARGE)
@settings(max_examples=150)
def test_order_of_ties(charges, carried):
    """Least sum of |charge| over all orders, and of those the first by name."""
    tied = list(enumerate(charges))

    def load(order):
        sums = np.add.accumulate([carried, *(charges[i] for i in order)])
        return sum(abs(x) for x in sums[1:])

    found = _least_carrying(tied, carried)
    orders = list(permutations(range(len(charges))))
    least = min(map(load, orders))
    assert tuple(found) == min(order for order in orders if load(order) == least)


def test_order_of_many_ties():
    # Above the exact size: every cluster once, the same each time, and here not worse than the order by name.
    charges = [Fraction((-1) ** k * (k + 1)) for k in range(_MOST_ORDERED + 4)]
    found = _least_carrying(list(enumerate(charges)), Fraction(0))
    assert sorted(found) == list(range(len(charges)))
    assert found == _least_carrying(list(enumerate(charges)), Fraction(0))
    totals = [abs(sum(charges[i] for i in found[: k + 1])) for k in range(len(found))]
    assert sum(totals) <= sum(abs(sum(charges[: k + 1])) for k in range(len(charges)))


def test_the_doubler_by_hand():
    # Charging: top to I, bottom to G; discharging: top to O, bottom to I. Each carries the output charge once
    # and blocks the input voltage.
    network = switch_network(Converter.parse("I-G/O-I"))
    assert [cluster.name for cluster in network.clusters] == ["G", "I", "O", "C1+", "C1-"]
    assert {(frozenset(s.nodes), s.phase, s.multiplier, s.blocking_voltage) for s in network.switches} == {
        (frozenset({"C1+", "I"}), 1, 1, 1),
        (frozenset({"C1-", "G"}), 1, 1, 1),
        (frozenset({"C1+", "O"}), 2, 1, 1),
        (frozenset({"C1-", "I"}), 2, 1, 1),
    }
    # Polarity, by hand: with C1 discharging (O = 2, I = 1) its top is above I and its bottom above G; with C1
    # charging its top (1) is below O, and its bottom (0) below I.
    assert {s.nodes for s in network.switches} == {("C1+", "I"), ("C1-", "G"), ("O", "C1+"), ("I", "C1-")}
    assert network.clean


def test_hard_wired_plates_are_one_cluster():
    # The rail capacitor of a doubler chain has its bottom on ground in both phases, so no switch is there.
    network = switch_network(doubler_chain(2))
    ground = network.clusters[0]
    assert ground.name == "G"
    assert len(ground.plates) == 1
    # Dickson: tops of neighbours meet in one phase only, all bottoms of one parity share one cluster.
    network = switch_network(dickson(7))
    assert sorted(len(c.plates) for c in network.clusters) == [0, 0, 0, *[1] * 6, 3, 3]
    assert len(network.switches) == 7 + 4  # seven in the row, and two half bridges for the bottoms


@pytest.mark.parametrize(
    ("converter", "count"),
    [
        # Common practice, as the networks are drawn. Series-parallel: three per capacitor and one more;
        # ladder: two per step; Dickson: one per step and two half bridges; Fibonacci: three per stage and one
        # more; doublers in a row: four per stage.
        *((series_parallel(n), 3 * (n - 1) + 1) for n in (2, 3, 5, 9)),
        *((ladder(n), 2 * n) for n in (2, 3, 5, 9)),
        *((dickson(n), n + 4) for n in (3, 5, 9)),
        *((fibonacci(k), 3 * k + 1) for k in (1, 2, 3, 6)),
        *((doubler_chain(k), 4 * k) for k in (1, 2, 3, 6)),
        *((doubler_chain(k, alternate=True), 4 * k) for k in (2, 3, 6)),
    ],
)
def test_number_of_switches_in_common_practice(converter, count):
    assert all(len(switch_network(member).switches) == count for member in converter.cell.converters)


def test_an_idle_and_an_equipotential_switch():
    # Found by their definition in the two-capacitor census; a bypass leaves both kinds.
    table = converters(2)
    networks = [switch_network(table.converter(row)) for row in range(len(table))]
    idle = [n for n in networks if any(not s.multiplier for s in n.switches)]
    equal = [n for n in networks if any(not s.blocking_voltage for s in n.switches)]
    assert idle
    assert equal
    assert all(not n.clean for n in (*idle, *equal))
    assert sum(n.clean for n in networks) == len([n for n in networks if n not in idle and n not in equal])
