"""The fast census against the plain enumerator, cell by cell and converter by converter.

The plain enumerator shares nothing with the census: it works with pairs of phase graphs, fractions, and the
isomorphism test of networkx.
"""

from __future__ import annotations

import pytest
from plain_converter import GraphIndex, Phase, unmatched, wiring_graph
from plain_enumerator import PORTS, PlainCell, plain_census

from capmuster.enumerate.census import census
from capmuster.enumerate.converters import converters
from capmuster.enumerate.wiring import vertex_name


def listed(n: int) -> list[PlainCell]:
    """Cells of the plain enumerator that meet all ports; the others are degenerate unity cells."""
    met, unmet = [], []
    for cell in plain_census(n)[0]:
        vertices = {vertex for phase in (cell.phase1, cell.phase2) for place in phase for vertex in place}
        (met if vertices.issuperset(PORTS) else unmet).append(cell)
    assert all(cell.degenerate and cell.unity for cell in unmet)
    return met


def phase(word_columns: list[list[int]]) -> Phase:
    """Name the vertices of one phase of the census."""
    return tuple((vertex_name(plus, PORTS), vertex_name(minus, PORTS)) for plus, minus in word_columns)


@pytest.mark.parametrize(
    "n", [1, 2, pytest.param(3, marks=pytest.mark.long), pytest.param(4, marks=pytest.mark.long)]
)
def test_cells_one_by_one(n: int) -> None:
    plain, fast = listed(n), census(n)
    index = GraphIndex()
    for cell in plain:
        assert index.find(wiring_graph(cell.phase1, cell.phase2, PORTS), add=True) is None
    partners = []
    for row in range(len(fast)):
        words = fast.words[row]
        graph = wiring_graph(phase(words[:, :2].tolist()), phase(words[:, 2:].tolist()), PORTS)
        partner = index.find(graph)
        assert partner is not None
        partners.append(partner)
    assert sorted(partners) == list(range(len(plain)))
    matched = [plain[k] for k in partners]
    assert [tuple(triple) for triple in fast.triples.tolist()] == [cell.triple for cell in matched]
    assert fast.degenerate.tolist() == [cell.degenerate for cell in matched]
    assert fast.unity.tolist() == [cell.unity for cell in matched]
    assert fast.stabiliser.tolist() == [cell.symmetries for cell in matched]


@pytest.mark.parametrize("n", [1, 2, pytest.param(3, marks=pytest.mark.long)])
def test_converters_one_by_one(n: int) -> None:
    fast = converters(n)
    codes = [fast.code(row) for row in range(len(fast))]
    plain = {c.wiring: c.ratio for cell in plain_census(n)[0] for c in cell.converters}
    assert unmatched(codes, list(plain)) == ([], [])
    assert sorted(fast.ratio(row) for row in range(len(fast))) == sorted(plain.values())
