"""Surveys: the same as listing everything, however the work is split, interrupted or harmed."""

from __future__ import annotations

import json
import os
import signal
from fractions import Fraction
from importlib import resources
from itertools import pairwise

import numpy as np
import pytest
from command import PACKAGE, run
from joblib import parallel_config

from capmuster.enumerate.errors import CapmusterError
from capmuster.enumerate.wiring import Converter
from capmuster.rank.frontier import frontier
from capmuster.rank.scores import shards
from capmuster.rank.scores.candidates import census_candidates
from capmuster.rank.scores.listing import find_converters
from capmuster.rank.scores.scoredcensus import silent
from capmuster.rank.scores.shards import spread
from capmuster.rank.scores.survey import survey
from capmuster.rank.scores.surveytable import COLUMNS, best_per_ratio, kept_converters, survey_table
from capmuster.rank.scores.utilisation import charge_flow


@pytest.fixture
def fresh(monkeypatch, tmp_path):
    """Work in an empty cache folder, with small shards."""
    monkeypatch.setattr(shards, "_SKELETONS_PER_SHARD", 8)
    monkeypatch.setenv("CAPMUSTER_CACHE", str(tmp_path))
    return tmp_path


def result(folder, n=4):
    return (folder / f"survey-n{n}-product-10.json").read_bytes()


@pytest.mark.usefixtures("fresh")
@pytest.mark.parametrize("n", [1, 2, 3, 4])
def test_a_survey_says_what_the_whole_list_says(n):
    found = survey(n)
    assert found.certificate.holds
    for ratio in found.ratios:
        listing = find_converters(ratio, n, include_unclean=True)
        of_size = [row for row in listing.converters if row.flying_capacitors == n]
        clean = [row for row in of_size if row.clean]
        assert found.counts(ratio) == (len(clean), len(of_size))
        products = [round(row.capacitor_utilisation * row.switch_utilisation, 12) for row in clean]
        kept = kept_converters(found, ratio, "best")
        assert [round(r.capacitor_utilisation * r.switch_utilisation, 12) for r in kept][:10] == products[:10]
        assert len(kept) >= min(10, len(clean))
        if clean:
            measures = census_candidates(n, ratio, clean_only=True).measures
            costs = np.stack(
                [
                    measures.switches,
                    -measures.capacitor_utilisation,
                    -measures.switch_utilisation,
                    measures.highest_blocking_voltage,
                ],
                axis=1,
            )
            rows = np.flatnonzero(frontier(costs))
            expected = census_candidates(n, ratio, clean_only=True).table(rows).ids()
            assert sorted(row.id for row in kept_converters(found, ratio, "frontier")) == sorted(expected)
    assert found.counts(Fraction(97, 89)) == (0, 0)
    assert kept_converters(found, Fraction(97, 89), "frontier") == ()


def test_the_split_and_the_backend_leave_no_trace(fresh, monkeypatch):
    outcomes = set()
    for number, (size, backend, jobs) in enumerate(
        [(8, "sequential", 1), (3, "threading", 2), (47, "sequential", 1), (16, "loky", 2)]
    ):
        monkeypatch.setattr(shards, "_SKELETONS_PER_SHARD", size)
        monkeypatch.setenv("CAPMUSTER_CACHE", str(fresh / str(number)))
        with parallel_config(backend=backend):
            survey(4, jobs=jobs)
        outcomes.add(result(fresh / str(number)))
    assert len(outcomes) == 1


class _StopError(Exception):
    pass


def interrupted_after(shards_done):
    def say(note):
        if note.total and note.done == shards_done:
            raise _StopError

    return say


def test_an_interrupted_survey_goes_on_where_it_stopped(fresh, monkeypatch):
    with pytest.raises(_StopError):
        survey(4, jobs=1, say=interrupted_after(3))
    filed = sorted(path.name for path in (fresh / "survey-n4-product-10").glob("*.json"))
    assert filed == ["0000.json", "0001.json"]  # the third was interrupted before it was filed
    begun = []
    survey(4, jobs=1, say=lambda note: begun.append(note.done))
    assert begun == [2, 3, 4, 5, 6]
    assert not (fresh / "survey-n4-product-10").exists()
    whole = result(fresh)
    monkeypatch.setenv("CAPMUSTER_CACHE", str(fresh / "other"))
    survey(4, jobs=1)
    assert result(fresh / "other") == whole
    # and a finished one answers without passing over anything
    survey(4, say=interrupted_after(0))


@pytest.mark.parametrize("harm", [b"", b"nonsense", b'{"version": 1}'])
def test_harmed_files_are_done_again(fresh, harm):
    survey(4, jobs=1)
    whole = result(fresh)
    (fresh / "survey-n4-product-10.json").write_bytes(harm)
    with pytest.raises(_StopError):
        survey(4, jobs=1, say=interrupted_after(3))
    (fresh / "survey-n4-product-10" / "0001.json").write_bytes(harm)
    begun = []
    survey(4, jobs=1, say=lambda note: begun.append(note.done))
    assert begun == [1, 2, 3, 4, 5, 6]
    assert result(fresh) == whole


def test_a_folder_that_cannot_be_written_is_no_obstacle(fresh, monkeypatch):
    survey(3, jobs=1)
    kept = kept_converters(survey(3), Fraction(2, 5), "best")
    blocked = fresh / "file"
    blocked.write_text("in the way")
    monkeypatch.setenv("CAPMUSTER_CACHE", str(blocked))
    said = []
    again = survey(3, jobs=1, say=lambda note: said.append(note.text))
    assert kept_converters(again, Fraction(2, 5), "best") == kept
    assert any("nothing can be kept" in text for text in said)


@pytest.mark.usefixtures("fresh")
@pytest.mark.parametrize("by", ["product", "capacitor", "switch"])
def test_the_best_are_best_in_what_was_asked(by):
    found = survey(3, keep=4, by=by, jobs=1)
    measure = {
        "product": lambda row: row.capacitor_utilisation * row.switch_utilisation,
        "capacitor": lambda row: row.capacitor_utilisation,
        "switch": lambda row: row.switch_utilisation,
    }[by]
    for ratio in (Fraction(2, 3), Fraction(4), Fraction(-2, 3)):
        every = [measure(r) for r in find_converters(ratio, 3).converters if r.flying_capacitors == 3]
        kept = [measure(row) for row in kept_converters(found, ratio, "best")]
        assert sorted(kept, reverse=True) == pytest.approx(sorted(every, reverse=True)[: len(kept)])
        assert len(kept) == min(4, len(every))


@pytest.mark.parametrize(
    ("options", "names"), [({"keep": -1}, "keep: -1"), ({"by": "x"}, "by: 'x'"), ({"n": 7}, "7")]
)
def test_bad_options_are_one_clear_line(fresh, options, names):
    with pytest.raises(CapmusterError, match=names):
        survey(**{"n": 3, **options})
    assert not list(fresh.iterdir())


@pytest.mark.usefixtures("fresh")
def test_a_line_per_ratio():
    found = survey(4, jobs=1)
    rows = best_per_ratio(found)
    frame = survey_table(found)
    assert list(frame.columns) == list(COLUMNS) == list(frame.attrs["units"])
    assert [row.ratio for row in rows] == sorted(row.ratio for row in rows)
    for row, exact in zip(rows, frame.itertuples(index=False), strict=True):
        measures = census_candidates(4, row.ratio, clean_only=True).measures
        assert row.best_capacitor_utilisation == measures.capacitor_utilisation.max()
        assert row.best_switch_utilisation == measures.switch_utilisation.max()
        product = measures.capacitor_utilisation * measures.switch_utilisation
        best = row.best.capacitor_utilisation * row.best.switch_utilisation
        assert best == pytest.approx(product.max(), rel=1e-11)
        assert (str(row.ratio), row.best.id) == (exact.ratio, exact.id)


@pytest.mark.usefixtures("fresh")
def test_the_command_in_its_formats():
    content = json.loads(run("survey", "3", "--format", "json").stdout)
    assert [entry["ratio"] for entry in content["ratios"]] == [str(ratio) for ratio in survey(3).ratios]
    one = json.loads(run("survey", "3", "--ratio", "2/5", "--format", "json").stdout)["ratios"]
    assert one == [entry for entry in content["ratios"] if entry["ratio"] == "2/5"]
    lines = run("survey", "3", "--format", "csv").stdout.splitlines()
    assert lines[0] == ",".join(COLUMNS)
    table = run("survey", "3", "--ratio", "2/5").stdout
    assert all(row["id"] in table for row in one[0]["best"] + one[0]["frontier"])
    nothing = run("survey", "3", "--ratio", "9").stdout
    assert nothing.startswith("Ratio 9, exactly 3 flying capacitors: 0 converters")
    assert run("survey", "9").returncode == 2


@pytest.mark.usefixtures("fresh")
def test_a_scheduler_that_does_not_answer_is_one_clear_line(monkeypatch):
    pytest.importorskip("distributed", reason="needs the extra: pip install 'capmuster[cluster]'")
    monkeypatch.setattr(shards, "_PATIENCE", 0.5)
    with pytest.raises(CapmusterError, match="nothing answers at 'tcp"), spread("tcp://127.0.0.1:9"):
        pass
    with pytest.raises(CapmusterError, match="scheduler"), spread("no address at all"):
        pass


@pytest.mark.long
def test_a_cluster_gives_the_same_bytes_though_a_worker_is_killed(fresh, monkeypatch):
    distributed = pytest.importorskip(
        "distributed", reason="needs the extra: pip install 'capmuster[cluster]'"
    )
    monkeypatch.setenv("PYTHONPATH", str(PACKAGE))
    monkeypatch.setattr(shards, "_SKELETONS_PER_SHARD", 40)
    survey(5, jobs=1)
    alone = result(fresh, 5)
    two = {"n_workers": 2, "threads_per_worker": 1, "processes": True, "dashboard_address": None}
    with distributed.LocalCluster(**two) as cluster:
        killed = []

        def kill_one(note):
            if note.done == 4 and not killed:
                with distributed.Client(cluster) as client:
                    pids = client.run(os.getpid)
                    assert len(set(pids.values())) == 2
                    killed.append(next(iter(pids.values())))
                os.kill(killed[0], signal.SIGKILL)

        for number, say in enumerate([silent, kill_one]):
            monkeypatch.setenv("CAPMUSTER_CACHE", str(fresh / f"cluster{number}"))
            with spread(cluster.scheduler_address):
                survey(5, say=say)
            assert result(fresh / f"cluster{number}", 5) == alone
        assert killed


@pytest.mark.usefixtures("fresh")
@pytest.mark.long
def test_the_published_table_is_what_the_surveys_say():
    text = resources.files("capmuster.catalogs").joinpath("census", "utilisations.csv").read_text()
    header, *lines = text.splitlines()
    assert header == ",".join(COLUMNS)
    sizes = [int(line.split(",")[1]) for line in lines]
    assert all(a <= b for a, b in pairwise(sizes))
    for n in range(1, 6):
        expected = [",".join(row.exact()) for row in best_per_ratio(survey(n, jobs=1))]
        assert [line for line, size in zip(lines, sizes, strict=True) if size == n] == expected
    # Six capacitors take minutes: their converters are held against the exact path instead.
    six = [line.split(",") for line, size in zip(lines, sizes, strict=True) if size == 6]
    assert len(six) > 400
    for cells in six[::9]:
        converter = Converter.parse(cells[-1])
        flow = charge_flow(converter)
        assert (str(converter.ratio), converter.id) == (cells[0], cells[-2])
        assert float(cells[6]) == float(flow.capacitor_utilisation)
        assert float(cells[7]) == float(flow.switch_utilisation)
        assert flow.network.clean
