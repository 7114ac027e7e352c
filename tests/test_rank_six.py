"""Six capacitors: random ones against the exact path, what lies beyond the published set in a simulator."""

from __future__ import annotations

import subprocess
from fractions import Fraction

import numpy as np
import pytest

from capmuster.enumerate.attainable import BEYOND, fibonacci_bound
from capmuster.enumerate.converters import ratios_of_triple
from capmuster.enumerate.skeletons import skeletons
from capmuster.enumerate.tally import Tally, triple_numbers
from capmuster.enumerate.wiring import Converter
from capmuster.rank.scores.candidates import candidates_of
from capmuster.rank.scores.cellscores import score_cells
from capmuster.rank.scores.switching import switch_network
from capmuster.rank.scores.utilisation import charge_flow

# Found by complete enumeration: one wiring for each triple of port charges above F(7) = 21.
FOUND = {
    Fraction(24, 11): "a-b/a-b I-a/c-I I-a/a-c I-b/O-a b-G/O-b a-G/b-I",
    Fraction(24, 7): "I-a/a-I b-I/b-G b-I/a-b b-a/c-a a-G/c-I O-b/c-G",
    Fraction(24, 5): "I-a/a-I a-G/b-I a-G/c-b b-I/a-G b-a/c-a b-G/O-c",
    Fraction(11, 24): "a-b/a-b O-a/c-b O-a/I-c O-b/b-O b-G/a-O a-G/I-a",
}


@pytest.mark.long
def test_random_cells_of_six_capacitors_agree_with_the_exact_path():
    table, rng, seen = skeletons(6), np.random.default_rng(6), 0
    for first in rng.choice(len(table) - 4, 12, replace=False).tolist():
        part = table.take(slice(first, first + 4))
        for cells in score_cells(part, 0, Tally.empty(6)):
            triples, place = triple_numbers(cells.charge_b, cells.charge_c)
            for number in rng.choice(len(triples), min(3, len(triples)), replace=False).tolist():
                ratio = ratios_of_triple(triples[number])[-1]
                candidates = candidates_of(cells.take(place == number), part, ratio)
                row = int(rng.integers(len(candidates.measures)))
                exact = Converter.parse(candidates.table(np.array([row])).code(0))
                flow, measures = charge_flow(exact), candidates.measures
                assert exact.ratio == ratio
                assert measures.switches[row] == len(flow.network.switches)
                assert measures.clean[row] == flow.network.clean
                assert measures.capacitor_utilisation[row] == float(flow.capacitor_utilisation)
                assert measures.switch_utilisation[row] == float(flow.switch_utilisation)
                assert measures.highest_capacitor_voltage[row] == float(max(flow.voltages))
                seen += 1
    assert seen > 30


@pytest.mark.parametrize("ratio", FOUND, ids=str)
def test_the_exact_path_confirms_what_lies_beyond_the_published_set(ratio):
    # Makowski and Maksimovic, PESC 1995: P, Q up to F(7) = 21 with k = 7 capacitors, the output's included.
    converter = Converter.parse(FOUND[ratio])
    assert converter.n == 6
    assert converter.ratio == ratio
    assert max(ratio.numerator, ratio.denominator) > fibonacci_bound(6) == 21
    assert converter.cell.triple in BEYOND
    flow = charge_flow(converter)
    assert flow.network.clean
    assert len(flow.network.switches) <= 19  # 3 k - 2, the published number


def deck(converter: Converter, cycles: int) -> str:
    """Two phases, everything from zero, an output capacitor, no load; written for this test alone."""
    network = switch_network(converter)
    node = [
        {"G": "0", "I": "in", "O": "out"}[cluster.port] if cluster.port else f"n{k}"
        for k, cluster in enumerate(network.clusters)
    ]
    plate = {place: node[k] for k, cluster in enumerate(network.clusters) for place in cluster.plates}
    period = 10e-6
    lines = [
        "no load",
        "Vin in 0 1",
        f"Vp1 p1 0 PULSE(0 1 0 10n 10n {0.48 * period} {period})",
        f"Vp2 p2 0 PULSE(0 1 {period / 2} 10n 10n {0.48 * period} {period})",
        ".model sw SW(VT=0.5 VH=0.1 RON=0.1 ROFF=1e9)",
        *(f"C{i} {plate[i, 1]} {plate[i, -1]} 1u IC=0" for i in range(converter.n)),
        *(
            f"S{k} {node[s.clusters[0]]} {node[s.clusters[1]]} p{s.phase} 0 sw"
            for k, s in enumerate(network.switches)
        ),
        "Cout out 0 1u IC=0",
        ".options method=gear",
        f".tran {period / 10} {cycles * period} 0 {period / 10} UIC",
        f".meas tran vout AVG v(out) from={(cycles - 1) * period} to={cycles * period}",
        ".end",
    ]
    return "\n".join(lines)


@pytest.mark.parametrize("ratio", FOUND, ids=str)
def test_a_circuit_simulator_confirms_it_from_zero(ngspice, tmp_path, ratio):
    path = tmp_path / "deck.cir"
    path.write_text(deck(Converter.parse(FOUND[ratio]), 250))
    done = subprocess.run(
        [ngspice, "-b", str(path)], capture_output=True, text=True, timeout=300, check=False
    )
    line = next(text for text in done.stdout.splitlines() if text.startswith("vout"))
    assert float(line.split("=")[1].split()[0]) == pytest.approx(float(ratio), rel=2e-3)
