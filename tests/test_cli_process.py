"""The command as a process: interruptions, closed pipes, what it imports."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest
from command import START, environment, run

COMMANDS = ("list", "show", "rank", "export", "count")
# Common practice: a shell reports a process that was ended from the keyboard as 128 + SIGINT.
INTERRUPTED = 128 + signal.SIGINT


def begun(*arguments, cwd=None):
    return subprocess.Popen(
        [*START, *arguments],
        cwd=cwd,
        env=environment(),
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        encoding="utf-8",
        start_new_session=True,
    )


def test_help_of_the_whole_names_every_command():
    ended = run("--help")
    assert ended.returncode == 0
    assert ended.stderr == ""
    for name in COMMANDS:
        assert f"\n  {name} " in ended.stdout
    assert run().stdout == ended.stdout
    assert run("--version").stdout.startswith("capmuster, version ")


@pytest.mark.parametrize("name", COMMANDS)
def test_help_of_a_command_has_an_example_that_is_its_own(name):
    ended = run(name, "--help")
    assert ended.returncode == 0
    assert f"capmuster {name} " in ended.stdout.partition("Example")[2]


HEAVY = ("numpy", "pandas", "scipy", "networkx", "ortools", "pydantic", "xlsxwriter", "pyarrow", "matplotlib")
PROBE = """
import sys
from capmuster.rank.cli import main
try:
    main(sys.argv[1:])
except SystemExit:
    print("\\nLOADED", *sorted({name.partition(".")[0] for name in sys.modules}))
"""


@pytest.mark.parametrize("arguments", [["--help"], *([name, "--help"] for name in COMMANDS), ["frob"]])
def test_help_loads_nothing_heavy(arguments):
    ended = subprocess.run(
        [sys.executable, "-c", PROBE, *arguments],
        env=environment(),
        capture_output=True,
        encoding="utf-8",
        check=True,
    )
    loaded = set(ended.stdout.partition("LOADED")[2].split())
    assert "click" in loaded
    assert not loaded & set(HEAVY)


def test_an_interrupt_leaves_no_trace(tmp_path):
    kept = tmp_path / "shortlist.csv"
    kept.write_text("from last week\n", encoding="utf-8")
    running = begun("export", "greenhouse-node", "--to", "shortlist.csv", "--to", "b.json", cwd=tmp_path)
    time.sleep(0.5)  # past the start of Python, into its work
    running.send_signal(signal.SIGINT)
    out, err = running.communicate(timeout=30)
    assert running.returncode in (INTERRUPTED, 0)
    if running.returncode == INTERRUPTED:  # a fast machine may have been done
        assert err.strip() == "capmuster: interrupted"
        assert out == ""
        assert [one.name for one in tmp_path.iterdir()] == ["shortlist.csv"]
        assert kept.read_text(encoding="utf-8") == "from last week\n"


def test_an_interrupt_during_the_work_ends_with_130(tmp_path):
    shipped = (Path(__file__).parents[1] / "catalogs" / "briefs" / "greenhouse-node.toml").read_text("utf-8")
    brief = tmp_path / "large.toml"
    brief.write_text(shipped.replace("capacitors = 4", "capacitors = 5"), encoding="utf-8")
    running = begun("rank", str(brief))  # takes seconds
    time.sleep(0.7)
    os.killpg(running.pid, signal.SIGINT)  # as a terminal does: to the command and all that it started
    out, err = running.communicate(timeout=30)
    assert running.returncode == INTERRUPTED
    assert out == ""
    assert err.strip() == "capmuster: interrupted"


def test_a_closed_pipe_is_quiet():
    with begun("list", "--ratio", "1/2", "--capacitors", "4", "--format", "csv") as running:
        assert running.stdout.readline().startswith("id,")
        running.stdout.close()
        assert running.stderr.read() == ""
    assert running.returncode in (0, 1)


def test_a_terminal_without_greek_letters_is_no_obstacle():
    for encoding in ("cp1252", "latin-1"):
        ended = subprocess.run(
            [*START, "rank", "pump-shelf", "--top", "1"],
            env={**environment(), "PYTHONIOENCODING": encoding},
            capture_output=True,
            encoding=encoding,
            check=False,
        )
        assert ended.returncode == 0
        assert "\nplace  id" in ended.stdout


@pytest.mark.skipif(not os.path.exists("/dev/full"), reason="needs the device that is always full")  # noqa: PTH110
def test_a_full_disk_is_one_line():
    with open("/dev/full", "w", encoding="utf-8") as full:  # noqa: PTH123
        ended = subprocess.run(
            [*START, "show", "I-G/O-I"],
            env=environment(),
            stdout=full,
            stderr=subprocess.PIPE,
            encoding="utf-8",
            check=False,
        )
    assert ended.returncode not in (0, None)
    assert ended.stderr.count("\n") == 1
    assert "Traceback" not in ended.stderr
