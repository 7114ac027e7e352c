"""Exact classes, stacks and switch trees: against brute force, and bounds against what they bound."""

from __future__ import annotations

from collections import Counter
from dataclasses import replace
from itertools import product

import networkx as nx
import numpy as np
import pytest

from capmuster.enumerate.converters import converters
from capmuster.enumerate.wiring import Converter
from capmuster.rank.design.choices import Choice, build, edges_of, start_of
from capmuster.rank.design.exactchoice import exact_choice
from capmuster.rank.design.objectives import size_candidates
from capmuster.rank.design.optioncosts import option_set
from capmuster.rank.design.profile import loss_points
from capmuster.rank.design.trees import trees_of
from capmuster.rank.exact.circuit import circuit_of
from capmuster.rank.exact.impedance import output_impedance
from capmuster.rank.inputs.brief import load_brief
from capmuster.rank.inputs.conditions import LoadPoint
from capmuster.rank.pool import gather
from capmuster.rank.scores.switching import switch_network
from capmuster.rank.shortlist import shortlist

NODE = replace(
    load_brief("greenhouse-node"), objective="least-loss", frequency_minimum=1e6, frequency=5e7,
    output_most=2.2, efficiency_floor=None, most_capacitors=3,
)  # fmt: skip


def few_classes(brief, capacitors, switches):
    technology = brief.technology
    return replace(
        brief,
        technology=replace(
            technology,
            capacitors=tuple(one for one in technology.capacitors if one.name in capacitors),
            switches=tuple(one for one in technology.switches if one.name in switches),
        ),
    )


FEW = few_classes(NODE, {"mos-3v3", "mim-5v"}, {"nmos-1v8", "nmos-6v"})


def every_choice(options):
    """All classes of all elements and all trees, as the definition says."""
    capacitors = product(range(options.slow.shape[1]), repeat=len(options.slow))
    vertices = []
    for vertex, fast in zip(options.vertices, options.fast, strict=True):
        edges = int(np.isfinite(vertex.charges[0]).sum())
        vertices.append(
            [
                (tree, classes)
                for tree in range(len(vertex.charges))
                for classes in product(range(fast.shape[1]), repeat=edges)
            ]
        )
    return [Choice(c, v) for c in capacitors for v in product(*vertices)]


def brute_force(converter, brief):
    network, start = start_of(converter, brief)
    sized = size_candidates(start)
    options = option_set(start, network, loss_points(brief, sized))
    best = np.inf
    choices = every_choice(options)
    for first in range(0, len(choices), 4096):
        found = size_candidates(build(start, network, options, choices[first : first + 4096]))
        best = min(best, np.nanmin(found.merit))
    return best, len(choices)


@pytest.mark.parametrize(
    ("code", "changes"),
    [
        ("O-G/I-O", {}),
        ("O-G/I-O", {"objective": "least-area", "efficiency_floor": 0.75, "area": None}),
        ("O-G/I-O", {"frequency_minimum": None, "frequency": 1e7}),
        ("O-G/I-O", {"profile": (LoadPoint(0.1, 3e-3), LoadPoint(0.3, 1e-3, 4.2), LoadPoint(0.6, 0.0))}),
        ("I-G/a-I I-G/O-a", {"required": 6.0, "output_most": None}),  # series-parallel 1:3
        ("O-G/a-O O-G/I-a", {"required": 0.5, "output_most": None}),
        ("a-G/I-O O-a/I-O", {"objective": "least-area", "efficiency_floor": 0.7, "output_most": None}),
    ],
)
def test_the_exact_choice_is_what_brute_force_finds(code, changes):
    converter, brief = Converter.parse(code), replace(FEW, **changes)
    best, count = brute_force(converter, brief)
    found = exact_choice(converter, brief)
    assert count > 4
    assert found.proven
    assert found.sized.merit[0] == pytest.approx(best, rel=1e-8)
    assert found.least == pytest.approx(best, rel=1e-8)


def test_regulated_use_by_brute_force():
    brief = few_classes(
        replace(
            load_brief("greenhouse-node-regulated"), objective="least-loss", regulation="conductance",
            frequency_minimum=1e6, frequency=5e7, efficiency_floor=None,
        ),
        {"mos-3v3", "mim-5v"}, {"nmos-1v8", "nmos-6v"},
    )  # fmt: skip
    best, _ = brute_force(Converter.parse("O-G/I-O"), brief)
    found = exact_choice(Converter.parse("O-G/I-O"), brief)
    assert found.proven
    assert found.sized.merit[0] == pytest.approx(best, rel=1e-8)


def test_trees_are_all_of_them_and_their_charges_obey_kirchhoff():
    # Cayley: k^(k-2) labelled trees on k vertices; networkx says what is a tree and gives the incidence.
    seen = Counter()
    table = converters(4)
    for row in range(0, len(table), 2500):
        network = switch_network(table.converter(row))
        for vertex in trees_of(network):
            clusters = sorted(set(vertex.pairs.ravel().tolist()))
            k = len(clusters)
            seen[k] += 1
            assert len(vertex.charges) == k ** (k - 2)
            edge_sets = {
                frozenset(map(frozenset, vertex.pairs[np.isfinite(row_)].tolist())) for row_ in vertex.charges
            }
            assert len(edge_sets) == k ** (k - 2)
            for charges in vertex.charges[:: max(1, len(vertex.charges) // 4)]:
                used = np.isfinite(charges)
                graph = nx.Graph(list(map(tuple, vertex.pairs[used].tolist())))
                assert nx.is_tree(graph)
                incidence = nx.incidence_matrix(
                    graph, nodelist=clusters, edgelist=vertex.pairs[used].tolist(), oriented=True
                ).toarray()
                brought = [float(network.clusters[c].charges[vertex.phase - 1]) for c in clusters]
                flow = np.linalg.lstsq(incidence, np.array(brought), rcond=None)[0]
                np.testing.assert_allclose(incidence @ flow, brought, atol=1e-9)
                np.testing.assert_allclose(np.abs(flow), charges[used], atol=1e-9)
    assert max(seen) >= 4


def test_the_chain_is_among_the_trees():
    table = converters(3)
    for row in range(0, len(table), 97):
        network = switch_network(table.converter(row))
        chains = trees_of(network, chains=True)
        moved = [
            charge
            for vertex, chain in zip(trees_of(network), chains, strict=True)
            for charge in vertex.charges[vertex.chain][np.isfinite(vertex.charges[vertex.chain])]
            if chain.charges.shape[0] == 1
        ]
        np.testing.assert_allclose(moved, [float(s.multiplier) for s in network.switches])


@pytest.mark.parametrize("objective", ["least-loss", "least-area"])
def test_no_choice_gets_below_the_bound_of_its_topology(objective):
    brief = replace(NODE, objective=objective, efficiency_floor=0.7 if objective == "least-area" else None)
    pool = gather(brief)
    for place in range(0, len(pool), 3):
        found = exact_choice(pool.converter(place), brief)
        assert pool.evaluation.bound[place] <= found.sized.merit[0] * (1 + 1e-9)
        assert found.least <= found.sized.merit[0] * (1 + 1e-9)
        assert found.sized.merit[0] <= pool.evaluation.merit[place] * (1 + 1e-8)


def test_the_certificate_is_true():
    # Every topology's exact choice, one by one, gives the order that was proven with bounds.
    brief = replace(NODE, most_capacitors=3)
    found = shortlist(brief, top=4)
    assert found.certificate.holds
    assert found.certificate.exact + found.certificate.screened >= len(found.pool)
    everyone = gather(brief)
    exact = sorted(
        float(exact_choice(everyone.converter(k), brief).sized.merit[0]) for k in range(len(everyone))
    )
    np.testing.assert_allclose(found.pool.evaluation.merit[:4], exact[:4], rtol=1e-8)


def test_a_tree_that_is_no_chain_is_still_the_same_converter():
    # Its ideal ratio, and the fast limit of its switches, in the switch-level circuit.
    brief = NODE
    for code in ("O-a/O-a b-O/O-a b-a/a-G b-G/I-O", "a-O/a-b I-a/a-b O-G/a-O I-O/b-G"):
        converter = Converter.parse(code)
        found = exact_choice(converter, brief)
        chain = {(frozenset(s.nodes), s.phase) for s in switch_network(converter).switches}
        trees = {(frozenset(s.nodes), s.phase) for s in found.network.switches}
        assert len(trees) == len(chain)
        ohms = 0.3
        circuit = circuit_of(
            converter, 1e-3, ohms, between=[(*s.nodes, s.phase) for s in found.network.switches]
        )
        z = output_impedance(circuit, 1e9)
        assert z.ratio[0] == pytest.approx(float(converter.ratio), rel=1e-9)
        expected = 2 * ohms * sum(float(s.multiplier) ** 2 for s in found.network.switches)
        assert z.fast[0] == pytest.approx(expected, rel=1e-9)
    assert trees != chain


@pytest.mark.parametrize(
    ("name", "top"),
    [("greenhouse-node-losses", 4), pytest.param("pump-shelf-losses", 4, marks=pytest.mark.long)],
)
def test_the_order_of_shipped_briefs_is_proven(name, top):
    found = shortlist(load_brief(name), top=top)
    assert found.certificate.holds
    assert found.certificate.places == top
    # What is proven also holds for the family member that the best candidate is compared with.
    place = found.best_family_place - 1
    alone = exact_choice(found.pool.converter(place), found.brief)
    assert found.pool.evaluation.merit[place] == pytest.approx(alone.sized.merit[0], rel=1e-9)
    assert found.gain_over_family >= 1.0


def test_a_free_duty_is_never_worse_and_has_no_proof_of_the_order():
    free = shortlist(replace(NODE, duty=None), top=3)
    assert shortlist(NODE, top=3).certificate is not None
    assert free.certificate is None
    assert free.frame["duty_phase_1"].between(0.05, 0.95).all()
    for duty in (0.5, float(free.frame["duty_phase_1"][1]), 0.4):
        fixed = gather(replace(NODE, duty=duty))
        merit = dict(zip(fixed.ids.tolist(), fixed.evaluation.merit.tolist(), strict=True))
        for name, best in zip(
            free.pool.ids[:3].tolist(), free.pool.evaluation.merit[:3].tolist(), strict=True
        ):
            assert best <= merit[name] * (1 + 1e-3)  # the classes of either are local optima


def test_what_the_user_puts_in_is_found_exactly_too():
    converter = gather(NODE).converter(9)
    found = shortlist(NODE, top=2, include=[converter])
    place = found.included[0].place - 1
    alone = exact_choice(converter, NODE)
    assert found.pool.evaluation.merit[place] == pytest.approx(alone.sized.merit[0], rel=1e-9)


def test_rails_leave_fewer_choices_and_brute_force_agrees():
    # With both polarities: every choice whose switches the rails can all drive.
    brief = few_classes(
        replace(NODE, input_minimum=3.7, required=1.3, drive="rails"),
        {"mos-3v3", "mim-5v"}, {"nmos-1v8", "nmos-3v3", "pmos-3v3"},
    )  # fmt: skip
    converter = Converter.parse("O-G/I-O")
    network, start = start_of(converter, brief)
    options = option_set(start, network, loss_points(brief, size_candidates(start)))
    allowed = [
        one
        for one in every_choice(options)
        if all(
            np.isfinite(options.fast[v][p, k])
            for v, (tree, classes) in enumerate(one.vertices)
            for p, k in zip(edges_of(options.vertices[v], tree), classes, strict=True)
        )
    ]
    assert 0 < len(allowed) < len(every_choice(options))
    best = np.nanmin(size_candidates(build(start, network, options, allowed)).merit)
    found = exact_choice(converter, brief)
    assert found.proven
    assert found.sized.merit[0] == pytest.approx(best, rel=1e-8)
    assert shortlist(brief, top=1).frame["floating_drives"][0] == 0
    free = exact_choice(converter, replace(brief, drive="any"))
    assert free.sized.merit[0] <= found.sized.merit[0] * (1 + 1e-9)
