"""How fast and how large the census is, against general-purpose references in the same run, as ratios.

Run with ``pytest -m benchmark tests/benchmarks -s`` on a machine that does nothing else.
"""

from __future__ import annotations

import os
import resource
import subprocess
import sys
import time

import networkx as nx
import numpy as np
import pytest
from command import START, environment
from plain_converter import ROLES, read_code, wiring_graph
from plain_enumerator import plain_census

from capmuster.enumerate.attached import tally_cells
from capmuster.enumerate.certificate import labelled_cells
from capmuster.enumerate.skeletoncount import labelled_skeletons
from capmuster.enumerate.skeletons import skeletons
from capmuster.enumerate.tally import Tally
from capmuster.enumerate.threads import one_thread
from capmuster.rank.scores.candidates import census_candidates, census_ratios
from capmuster.rank.scores.cellscores import score_cells

pytestmark = pytest.mark.benchmark


def timed(work, repeats=1):
    """Least wall time of several runs [s]."""
    times = []
    for _ in range(repeats):
        start = time.perf_counter()
        work()
        times.append(time.perf_counter() - start)
    return min(times)


def scored(n):
    tally = Tally.empty(n)
    with one_thread():
        count = sum(len(cells) for cells in score_cells(skeletons(n), 0, tally))
    return count, int(tally.held.sum() + tally.degenerate.sum())


def report(text):
    print(f"\n{text}")  # noqa: T201 -- a benchmark is read


def test_cells_per_second_against_hashes_of_a_graph_library():
    """All scores of five capacitors; a graph library only hashes the same cells' wiring graphs."""
    seconds = timed(lambda: scored(5), 3)
    kept, listed = scored(5)
    rng = np.random.default_rng(1)
    codes = []
    for ratio in census_ratios(5)[::20]:
        candidates = census_candidates(5, ratio)
        codes += candidates.table(rng.choice(len(candidates.measures), 20)).codes()
    graphs = [wiring_graph(*read_code(code), ROLES) for code in codes]
    hashing = timed(
        lambda: [nx.weisfeiler_lehman_graph_hash(graph, node_attr="colour") for graph in graphs], 3
    )
    ratio = (kept / seconds) / (len(graphs) / hashing)
    report(
        f"{kept / seconds:.3g} non-degenerate cells/s with all scores ({listed / seconds:.3g} listed/s) "
        f"on one core; {ratio:.0f} times as many as a graph library hashes"
    )
    assert ratio > 100


def test_against_the_plain_enumerator():
    """Two capacitors: everything that the plain enumerator knows."""
    plain_census.cache_clear()
    plain = timed(lambda: plain_census(2))
    fast = timed(lambda: scored(2), 10)
    report(f"two capacitors: {plain / fast:.0f} times as fast as the plain enumerator")
    assert plain / fast > 5


def test_count_only_is_faster_than_scoring():
    table = skeletons(5)
    counting = timed(lambda: tally_cells(table, Tally.empty(5)), 3)
    scoring = timed(lambda: scored(5), 3)
    report(f"count only: {counting:.2f} s, all scores: {scoring:.2f} s, {scoring / counting:.1f} times")
    assert counting < scoring


def test_the_convolution_of_six_capacitors_takes_less_than_a_minute():
    skeletons.cache_clear()
    listing = timed(lambda: skeletons(6))
    convolution = timed(lambda: labelled_cells(skeletons(6)))
    separate = timed(lambda: labelled_skeletons(6))
    report(
        f"six capacitors: skeletons {listing:.1f} s, convolution {convolution:.1f} s, "
        f"separate count {separate:.1f} s"
    )
    assert listing + convolution + separate < 60


def command(arguments, cache):
    """Wall time [s] and peak memory [MB] of the command in a process of its own."""
    surroundings = {**environment(), "CAPMUSTER_CACHE": str(cache)}
    surroundings.pop("OMP_NUM_THREADS")
    code = (
        "import resource, subprocess, sys; "
        "subprocess.run(sys.argv[1:], capture_output=True, check=True); "
        "print(resource.getrusage(resource.RUSAGE_CHILDREN).ru_maxrss // 1024)"
    )
    start = time.perf_counter()
    whole = [sys.executable, "-c", code, *START, *arguments]
    done = subprocess.run(whole, env=surroundings, capture_output=True, text=True, check=True)
    return time.perf_counter() - start, int(done.stdout)


def test_five_capacitors_cold_and_warm(tmp_path):
    """The whole process: build, certify and list; then list any ratio from the file."""
    cold, memory = command(("list", "--ratio", "2/5", "--capacitors", "5"), tmp_path)
    counted, _ = command(("count", "5"), tmp_path)
    start = timed(lambda: subprocess.run([sys.executable, "-c", "import numpy"], check=True), 3)
    warm = {
        ratio: min(command(("list", "--ratio", ratio, "--capacitors", "5"), tmp_path)[0] for _ in range(3))
        for ratio in ("2/5", "1/2", "2/3", "1", "13")
    }
    report(
        f"five capacitors cold: list {cold:.2f} s ({memory} MB), "
        f"count with certificate {counted:.2f} s; warm: "
        + ", ".join(f"{ratio} {seconds:.2f} s" for ratio, seconds in warm.items())
        + f"; importing numpy alone takes {start:.2f} s"
    )
    assert cold < 4
    assert counted < 4
    assert memory < 1500
    assert max(warm.values()) < 1


@pytest.mark.long
def test_six_capacitors_in_a_quarter_of_an_hour(tmp_path):
    seconds, memory = command(("survey", "6", "--jobs", str(min(2, os.cpu_count() or 1))), tmp_path)
    again, _ = command(("survey", "6"), tmp_path)
    report(f"six capacitors surveyed in {seconds:.0f} s ({memory} MB at most); again in {again:.1f} s")
    assert seconds < 900
    assert resource.getrusage(resource.RUSAGE_CHILDREN).ru_maxrss < 1_500_000
