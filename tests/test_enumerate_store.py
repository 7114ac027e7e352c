"""Census files: what is written is read back, and whatever is wrong with a file is noticed and put right."""

from __future__ import annotations

import os
import stat
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from command import PACKAGE, environment

from capmuster.enumerate import store
from capmuster.enumerate.skeletons import skeletons
from capmuster.enumerate.store import StoreError, open_census, write_census
from capmuster.enumerate.tally import Tally
from capmuster.rank.scores import scoredcensus
from capmuster.rank.scores.cellscores import concatenate, score_cells
from capmuster.rank.scores.scoredcensus import ScoredCensus, census_path, scored_census, write_scored_census


@pytest.fixture
def said():
    """Collect what a census has to say."""
    return []


@pytest.fixture
def small(monkeypatch, tmp_path):
    """Treat three capacitors as if they were too many to ship, so that they go through the cache."""
    monkeypatch.setattr(scoredcensus, "SHIPPED_REACH", 2)
    monkeypatch.setenv("CAPMUSTER_CACHE", str(tmp_path / "cache"))
    return tmp_path / "cache" / "n3.census"


def told(said):
    return lambda note: said.append(note.text)


def contents(census):
    """All cells of a census, triple by triple."""
    return {
        triple: [
            getattr(census.cells(triple), name).tolist() for name in ("skeleton", "attachment", "switch_sum")
        ]
        for triple in census.triples
    }


def test_what_is_written_is_read_back(tmp_path):
    rng = np.random.default_rng(3)
    columns = {
        "a": rng.integers(0, 255, 50),
        "b": rng.integers(-128, 127, 50),
        "c": rng.integers(0, 70_000, 50),
        "d": rng.integers(-40_000, 40_000, 50),
    }
    groups = [((0, 1, 1), np.arange(20)[::-1].copy(), 4), ((1, 1, 2), np.arange(20, 50), 0)]
    path = tmp_path / "new" / "folder" / "x.census"
    write_census(path, skeletons(4), columns, groups, {"program": "test"})
    file = open_census(path)
    assert file.n == 4
    assert dict(file.columns) == {"a": "|u1", "b": "|i1", "c": "<u4", "d": "<i4"}
    assert np.array_equal(file.skeletons.words, skeletons(4).words)
    assert np.array_equal(file.skeletons.charges, skeletons(4).charges)
    for triple, rows, first in groups:
        found = file.read(file.blocks[triple])
        assert all(found[name].tolist() == column[rows].tolist() for name, column in columns.items())
        front = file.read(file.blocks[triple], first_only=True)
        assert all(front[name].tolist() == column[rows][:first].tolist() for name, column in columns.items())
    again = tmp_path / "again.census"
    write_census(again, skeletons(4), columns, groups, {"program": "test"})
    assert again.read_bytes() == path.read_bytes()


@pytest.mark.parametrize("n", [1, 2, 3, 4])
def test_shipped_files_are_what_would_be_built(n, tmp_path):
    write_scored_census(n, tmp_path / "x.census")
    assert (tmp_path / "x.census").read_bytes() == census_path(n).read_bytes()


@pytest.mark.parametrize("n", [1, 2, 3, 4])
def test_the_file_holds_every_cell_once(n):
    census = scored_census(n)
    parts = concatenate([census.cells(triple) for triple in census.triples])
    whole = concatenate(list(score_cells(skeletons(n), 0, Tally.empty(n))))
    for name in whole.__slots__:
        rows = np.lexsort((parts.attachment, parts.skeleton))
        assert np.array_equal(
            getattr(parts, name)[rows], getattr(whole, name)[np.lexsort((whole.attachment, whole.skeleton))]
        )
    for triple in census.triples:
        cells = census.cells(triple)
        front = census.cells(triple, clean_only=True)
        assert cells.clean[: len(front)].all()
        assert not cells.clean[len(front) :].any()


def test_it_is_built_once_and_says_so(small, said):
    first = ScoredCensus(3, told(said))
    assert set(said) == {"listing and scoring all cells of 3 flying capacitors"}
    said.clear()
    assert contents(ScoredCensus(3, told(said))) == contents(first)
    assert said == []
    assert [path.name for path in small.parent.iterdir() if not path.name.endswith(".lock")] == ["n3.census"]


def flipped(data, place):
    """Change one bit."""
    return data[:place] + bytes([data[place] ^ (1 << place % 8)]) + data[place + 1 :]


HARMS = {
    "truncated": lambda data: data[: len(data) // 2],
    "longer": lambda data: data + b"x",
    "empty": lambda _: b"",
    "foreign": lambda data: b"PK\x03\x04" + data[4:],
    "older": lambda data: data[:16] + (0).to_bytes(4, "little") + data[20:],
    "header": lambda data: flipped(data, 60),
    "length": lambda data: data[:20] + b"\xff\xff\xff\xff" + data[24:],
    "skeletons": lambda data: flipped(data, data.index(skeletons(3).words.tobytes())),
    "block": lambda data: flipped(data, len(data) - 3),
    "another": lambda _: census_path(2).read_bytes(),
}


def read_all(path):
    """Open a file and read every block."""
    file = open_census(path)
    for block in file.blocks.values():
        file.read(block)


@pytest.mark.parametrize("how", HARMS)
def test_a_harmed_file_is_noticed_and_built_again(small, said, how):
    good = contents(ScoredCensus(3, told([])))
    bytes_before = small.read_bytes()
    small.write_bytes(HARMS[how](bytes_before))
    assert small.read_bytes() != bytes_before
    census = ScoredCensus(3, told(said))
    assert contents(census) == good
    assert any("is not used" in line for line in said)
    assert small.read_bytes() == bytes_before


@pytest.mark.parametrize("how", [how for how in HARMS if how != "another"])
def test_a_harmed_file_is_never_read_as_if_it_were_whole(tmp_path, how):
    path = tmp_path / "x.census"
    write_scored_census(3, path)
    read_all(path)
    path.write_bytes(HARMS[how](path.read_bytes()))
    with pytest.raises(StoreError):
        read_all(path)


def test_every_single_flipped_bit_is_noticed(tmp_path):
    path = tmp_path / "x.census"
    write_scored_census(2, path)
    data = path.read_bytes()
    for place in range(len(data)):
        path.write_bytes(flipped(data, place))
        with pytest.raises(StoreError):
            read_all(path)


def test_a_harmed_shipped_file_is_not_touched_and_not_used(monkeypatch, tmp_path, said):
    path = tmp_path / "n3.census"
    path.write_bytes(b"nonsense")
    monkeypatch.setattr(scoredcensus, "census_path", lambda _: path)
    assert contents(ScoredCensus(3, told(said))) == contents(scored_census(3))
    assert path.read_bytes() == b"nonsense"


def test_a_folder_that_cannot_be_written_is_no_obstacle(small, said, monkeypatch):
    def full(*_args, **_kwargs):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(scoredcensus, "write_census", full)
    census = ScoredCensus(3, told(said))
    assert contents(census) == contents(scored_census(3))
    assert any("cannot be kept: No space left on device" in line for line in said)
    assert not small.exists()


def test_a_cache_folder_that_is_a_file_is_no_obstacle(small, said):
    small.parent.write_text("in the way")
    assert contents(ScoredCensus(3, told(said)))
    assert any("cannot be kept" in line for line in said)


def test_nothing_half_written_is_left(tmp_path, monkeypatch):
    path = tmp_path / "x.census"
    path.write_text("before")

    def fails(*_args):
        raise KeyboardInterrupt

    monkeypatch.setattr(os, "fsync", fails)
    with pytest.raises(KeyboardInterrupt):
        store.write_whole(path, [b"after"])
    assert path.read_text() == "before"
    assert [one.name for one in tmp_path.iterdir()] == ["x.census"]


def test_a_written_file_has_the_usual_permissions(tmp_path):
    store.write_whole(tmp_path / "x", [b"x"])
    (tmp_path / "y").write_bytes(b"y")
    modes = [stat.S_IMODE((tmp_path / name).stat().st_mode) for name in "xy"]
    assert modes[0] == modes[1]


BUILD = """
from capmuster.rank.scores import scoredcensus
scoredcensus.SHIPPED_REACH = 2
said = []
census = scoredcensus.ScoredCensus(4, lambda note: said.append(note.text))
print(len(said) > 0, sum(len(census.cells(t)) for t in census.triples))
"""


def test_processes_that_want_it_at_once_build_it_once(tmp_path):
    surroundings = {**environment(), "CAPMUSTER_CACHE": str(tmp_path)}
    started = [
        subprocess.Popen([sys.executable, "-c", BUILD], env=surroundings, stdout=subprocess.PIPE, text=True)
        for _ in range(3)
    ]
    answers = sorted(process.communicate(timeout=120)[0].split() for process in started)
    assert [answer[1] for answer in answers] == ["21250"] * 3
    assert [answer[0] for answer in answers] == ["False", "False", "True"]
    assert Path(PACKAGE).is_dir()
