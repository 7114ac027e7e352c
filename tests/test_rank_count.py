"""The command ``count``: the numbers, their certificate, and what happens when it fails."""

from __future__ import annotations

import json

import pytest
from command import run
from plain_enumerator import plain_census

from capmuster.enumerate import certificate as certificates
from capmuster.enumerate.census import census
from capmuster.rank import cli
from capmuster.rank.scores.counting import census_counts, count_census
from capmuster.rank.scores.switchtable import score


@pytest.mark.parametrize("n", [1, 2, pytest.param(3, marks=pytest.mark.long)])
def test_against_the_plain_enumerator(n):
    plain = [cell for cell in plain_census(n)[0] if not cell.unity]
    counted = count_census(n)
    assert counted.cells == len(plain)
    assert counted.degenerate == sum(cell.degenerate for cell in plain)
    assert counted.clean == sum(cell.clean for cell in plain)
    assert counted.unity == sum(cell.unity and not cell.degenerate for cell in plain_census(n)[0])
    assert counted.labelled_listed == sum(cell.labelled for cell in plain)
    assert counted.certificate.holds


@pytest.mark.parametrize("n", [3, 4])
def test_against_the_table_of_cells(n):
    table, counted = census(n), count_census(n)
    three = ~table.unity
    assert counted.cells == int(three.sum())
    assert counted.degenerate == int((three & table.degenerate).sum())
    assert counted.unity == int((~three & ~table.degenerate).sum())
    assert counted.clean == int(score(table.take(three & ~table.degenerate)).clean.sum())


def test_five_capacitors_are_certified():
    counted = count_census(5)
    assert counted.certificate.holds
    assert counted.cells == sum(counted.certificate.cells.values())
    assert counted.labelled_listed == counted.labelled_counted
    assert 0 < counted.clean < counted.cells - counted.degenerate


@pytest.mark.long
def test_six_capacitors_are_certified():
    counted = count_census(6, jobs=-1)
    assert counted.certificate.holds
    # theory, section 2: the labelled skeletons from the separate generator
    assert counted.certificate.skeletons_listed == counted.certificate.skeletons_counted


def test_the_data_frame_is_the_table():
    frame = census_counts(3)
    assert frame["triple"].tolist() == ["1,1,2", "1,2,3", "1,3,4", "1,4,5", "2,3,5"]
    assert int(frame["cells"].sum()) == count_census(3).cells
    assert frame["labelled_listed"].tolist() == frame["labelled_counted"].tolist()


def test_the_command_prints_both_numbers_of_every_triple():
    done = run("count", "3")
    assert done.returncode == 0
    assert done.stderr == ""
    lines = {
        line.split()[0]: line.split()[1:] for line in done.stdout.splitlines() if "," in line.split(" ")[0]
    }
    for triple, cells in json.loads(run("count", "3", "--format", "json").stdout)["triples"].items():
        assert lines[triple][0] == str(cells)
        assert lines[triple][1] == lines[triple][2]
    assert "240 listed, 240 by the separate generator" in done.stdout
    assert "Certified" in done.stdout


def test_a_difference_is_loud(monkeypatch, capsys):
    monkeypatch.setattr(certificates, "labelled_skeletons", lambda _: 239)
    with pytest.raises(SystemExit) as stopped:
        cli.main(["count", "3"])
    assert stopped.value.code == 1
    out, err = capsys.readouterr()
    assert "NOT certified" in out
    assert "240 listed, 239 counted" in err


@pytest.mark.parametrize("n", ["0", "7", "-3", "many"])
def test_beyond_reach_is_one_clear_line(n):
    done = run("count", "--", n)
    assert done.returncode == 2
    assert done.stdout == ""
    assert len(done.stderr.splitlines()) == 1
    assert n in done.stderr
