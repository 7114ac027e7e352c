"""Bad input, as a user gives it: one clear line, exit status 2, nothing written."""

from __future__ import annotations

import contextlib
import io
import re
from pathlib import Path

import pytest
from command import run
from hypothesis import given, settings
from hypothesis import strategies as st

from capmuster.rank.cli import main

BRIEF = (Path(__file__).parents[1] / "catalogs" / "briefs" / "greenhouse-node.toml").read_text(
    encoding="utf-8"
)

# Arguments, and what the one line must say.
FAULTS = [
    (("list", "--ratio", "0", "--capacitors", "3"), "ratio '0' is 0"),
    (("list", "--ratio", "1/0", "--capacitors", "3"), "divides by 0"),
    (("list", "--ratio", "half", "--capacitors", "3"), "ratio 'half' is not a number"),
    (("list", "--ratio", "nan", "--capacitors", "3"), "ratio 'nan'"),
    (("list", "--ratio", "inf", "--capacitors", "3"), "ratio 'inf'"),
    (("list", "--ratio", "", "--capacitors", "3"), "ratio ''"),
    (("list", "--ratio", "1/2", "--capacitors", "0"), "capacitors: 0 is out of range"),
    (("list", "--ratio", "1/2", "--capacitors", "-1"), "capacitors: -1"),
    (("list", "--ratio", "1/2", "--capacitors", "three"), "'three' is not a valid integer"),
    (("list", "--ratio", "1/2", "--capacitors", "99999999"), "accepted: 1 to"),
    (("list", "--ratio", "1/2"), "--capacitors"),
    (("list", "--ratio", "1/2", "--capacitors", "3", "--limit", "-3"), "limit: -3"),
    (("list", "--ratio", "1/2", "--capacitors", "3", "--family", "cascade"), "cascade"),
    (("list", "--ratio", "1/2", "--capacitors", "3", "--format", "yaml"), "'yaml' is not one of"),
    (("show", ""), "no capacitor"),
    (("show", "I-G/O-I/O-G"), "capacitor 1 'I-G/O-I/O-G' is malformed"),
    (("show", "X-G/O-I"), "unknown vertex 'X'"),
    (("show", "I-I/O-G"), "both plates on one vertex in phase 1"),
    (("show", "I-G/O-I I-G/O-I"), "C1 and C2 are redundant"),
    (("show", "a-b/O-I"), "reaches no port in phase 1"),
    (("show", "I-G/I-G"), "no port delivers charge"),
    (("show", "nonsense"), "neither a wiring code nor an id"),
    (("show", "1-zz"), "id '1-zz' is unknown"),
    (("show", "9-zzz"), "id '9-zzz'"),
    (("show", "77777777777777777777-0"), "77777777777777777777-0"),
    (("show",), "WIRING_OR_ID"),
    (("show", "1-0h", "1-0v"), "unexpected extra argument"),
    (("count", "0"), "capacitors: 0 is beyond the census"),
    (("count", "12"), "capacitors: 12 is beyond the census; accepted: 1 to"),
    (("count", "two"), "'two' is not a valid integer"),
    (("rank", "greenhouse"), "unknown brief 'greenhouse'"),
    (("rank", "missing.toml"), "brief 'missing.toml' cannot be read"),
    (("rank", "greenhouse-node", "--top", "0"), "top: 0 is too small"),
    (("rank", "greenhouse-node", "--columns", "place,area"), "unknown column 'area'; accepted: place, id"),
    (("rank", "greenhouse-node", "--columns", ""), "unknown column ''"),
    (("rank", "greenhouse-node", "--columns", "id,id"), "'id' is named twice"),
    (("rank", "greenhouse-node", "--columns", "id", "--format", "json"), "columns: JSON holds them all"),
    (("rank", "greenhouse-node", "--include", "I-G/I-G"), "include: wiring: no port delivers charge"),
    (("export", "greenhouse-node"), "--to"),
    (("export", "greenhouse-node", "--to", "list.doc"), "unknown suffix '.doc'; accepted: .csv"),
    (("export", "greenhouse-node", "--to", "list"), "'list' has no suffix"),
    (("export", "greenhouse-node", "--to", "a.csv", "--to", "./a.csv"), "named twice"),
    (("export", "greenhouse-node", "--to", "a.csv", "--to", "no/b.csv"), "folder 'no' does not exist"),
    (("export", "nowhere", "--to", "a.csv"), "unknown brief 'nowhere'"),
    (("export", "greenhouse-node", "--to", "a.csv", "--include", "zz"), "include: 'zz'"),
    (("frobnicate",), "No such command 'frobnicate'"),
    (("--frobnicate",), "No such option '--frobnicate'"),
]


@pytest.mark.parametrize(
    ("arguments", "says"), FAULTS, ids=lambda value: value if isinstance(value, str) else "-".join(value)
)
def test_one_line_and_exit_status_2(arguments, says, tmp_path, monkeypatch, capsys):
    monkeypatch.chdir(tmp_path)
    with pytest.raises(SystemExit) as stopped:
        main(list(arguments))
    out, err = capsys.readouterr()
    assert stopped.value.code == 2
    assert out == ""
    assert err.startswith("capmuster: ")
    assert err.endswith("\n")
    assert err.count("\n") == 1
    assert says in err
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize(
    ("arguments", "says"), [FAULTS[0], FAULTS[16], FAULTS[27], FAULTS[30], FAULTS[-5]], ids=str
)
def test_the_same_in_a_process_of_its_own(arguments, says, tmp_path):
    ended = run(*arguments, cwd=tmp_path)
    assert ended.returncode == 2
    assert ended.stdout == ""
    assert ended.stderr.count("\n") == 1
    assert says in ended.stderr
    assert list(tmp_path.iterdir()) == []


# Text in the shipped brief, what takes its place, and what the line about it must say.
BRIEF_FAULTS = [
    ('current = "3 mA"', "", "load: missing field 'current'"),
    ('current = "3 mA"', 'current = "-3 mA"', "load.current: value '-3 mA'"),
    ('current = "3 mA"', 'current = "0 A"', "load.current: value '0 A'"),
    ('current = "3 mA"', 'current = "3 mV"', "load.current: "),
    ('current = "3 mA"', "current = inf", "load.current: "),
    ('current = "3 mA"', "current = nan", "load.current: "),
    ('current = "3 mA"', 'current = "lots"', "load.current: "),
    ('current = "3 mA"', 'curent = "3 mA"', "load: unknown field 'curent'; did you mean 'current'?"),
    ('area = "1 mm2"', 'area = "1 mm"', "design.area: "),
    ('frequency = "10 MHz"', "frequency = true", "design.frequency: "),
    ('least = "1.2 V"', 'least = "60 V"', "output.least: no ratio can hold"),
    ('least = "1.2 V"', 'least = "0 V"', "output.least: "),
    ('minimum = "3.0 V"', 'minimum = "5.0 V"', "input.minimum: "),
    ('technology = "chip-180nm"', 'technology = "chip-90nm"', "technology: unknown technology 'chip-90nm'"),
    ('ratios = "any"', 'ratios = ["1/0"]', "search.ratios"),
    ('ratios = "any"', 'ratios = ["1/3"]', "ratio 1/3 cannot hold"),
    ("capacitors = 4", "capacitors = 400", "search.capacitors: "),
    ("capacitors = 4", 'capacitors = "four"', "search.capacitors: "),
    ('use = "fixed-ratio"', 'use = "variable"', "output.use: "),
    ("[load]", "[load", ""),
]


@pytest.mark.parametrize(("old", "new", "says"), BRIEF_FAULTS, ids=lambda text: str(text)[:40])
def test_a_fault_in_a_brief_names_file_line_and_field(old, new, says, tmp_path, capsys):
    assert old in BRIEF
    path = tmp_path / "rail.toml"
    path.write_text(BRIEF.replace(old, new), encoding="utf-8")
    with pytest.raises(SystemExit) as stopped:
        main(["export", str(path), "--to", str(tmp_path / "shortlist.csv")])
    out, err = capsys.readouterr()
    assert stopped.value.code == 2
    assert out == ""
    assert err.count("\n") == 1
    assert says in err
    assert re.search(r"rail\.toml:\d+", err)
    assert [one.name for one in tmp_path.iterdir()] == ["rail.toml"]


def test_each_fault_of_a_brief_has_a_line(tmp_path, capsys):
    path = tmp_path / "rail.toml"
    path.write_text(
        BRIEF.replace('"3 mA"', '"-3 mA"')
        .replace('"10 MHz"', '"10 V"')
        .replace("capacitors = 4", "caps = 4"),
        encoding="utf-8",
    )
    with pytest.raises(SystemExit) as stopped:
        main(["rank", str(path)])
    lines = capsys.readouterr().err.splitlines()
    assert stopped.value.code == 2
    says = ("load.current: value", "missing field 'capacitors'", "unknown field 'caps'", "design.frequency")
    for what, line in zip(says, lines, strict=True):
        assert what in line
        assert f"{path}:" in line


@pytest.mark.parametrize("content", [b"", b"\xff\xfe\x00", b"title = 1\n", b"\x00" * 10, b"=" * 5000])
def test_a_file_that_is_no_brief(content, tmp_path, capsys):
    path = tmp_path / "rail.toml"
    path.write_bytes(content)
    with pytest.raises(SystemExit) as stopped:
        main(["rank", str(path)])
    out, err = capsys.readouterr()
    assert stopped.value.code == 2
    assert out == ""
    for line in err.splitlines():
        assert "rail.toml" in line
        assert len(line) < 400


def test_a_folder_and_a_protected_file_are_no_targets(tmp_path, capsys, monkeypatch):
    folder = tmp_path / "list.csv"
    folder.mkdir()
    with pytest.raises(SystemExit) as stopped:
        main(["export", "greenhouse-node", "--to", str(folder)])
    assert stopped.value.code == 2
    assert "is a folder" in capsys.readouterr().err
    monkeypatch.setattr("os.access", lambda path, _: "kept" not in str(path))
    kept = tmp_path / "kept.csv"
    kept.write_text("mine", encoding="utf-8")
    with pytest.raises(SystemExit):
        main(["export", "greenhouse-node", "--to", str(kept)])
    assert "write-protected" in capsys.readouterr().err
    assert kept.read_text(encoding="utf-8") == "mine"


WORDS = ["list", "show", "rank", "count", "--ratio", "--capacitors", "--to", "--format", "--top"]
VALUES = [
    "1/2",
    "-1",
    "0",
    "2",
    "csv",
    "json",
    "I-G/O-I",
    "1-0h",
    "nan",
    "",
    "\x00",
    "é",
    "x.csv/",
    "--",
    "'",
]


def called(arguments):
    """Run the command here; return exit status, output and errors."""
    out, err = io.StringIO(), io.StringIO()
    with (
        contextlib.redirect_stdout(out),
        contextlib.redirect_stderr(err),
        pytest.raises(SystemExit) as stopped,
    ):
        main(arguments)
    return stopped.value.code, out.getvalue(), err.getvalue()


@settings(max_examples=150)
@given(st.lists(st.sampled_from(WORDS + VALUES) | st.text(max_size=8), max_size=5))
def test_any_arguments_end_in_an_answer_or_in_one_line(arguments):
    status, out, err = called([one for one in arguments if one != "export"])
    assert status in (0, 2)
    if status == 2:
        assert out == ""
        assert err.startswith("capmuster: ")
        assert err.count("\n") == 1


@pytest.mark.parametrize("command", [["rank", "greenhouse-node"], ["parts", "pump-shelf"]])
def test_a_degenerate_wiring_is_not_ranked(command):
    done = run(*command, "--include", "O-a/I-O a-G/O-G")
    assert done.returncode == 2
    assert done.stdout == ""
    assert done.stderr.count("\n") == 1
    assert "C1 would hold no voltage" in done.stderr
