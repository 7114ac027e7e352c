"""The commands deck and verify, with ngspice and without."""

import csv
import io
import json
import subprocess

import pytest
from click.testing import CliRunner

from capmuster.enumerate.errors import CapmusterError
from capmuster.rank.commands import deck, verify
from capmuster.rank.exact import simulate as simulating
from capmuster.rank.exact import verification
from capmuster.rank.exact.subject import UNEQUAL, Values, subjects
from capmuster.rank.exact.verification import Comparison

TRIPLER = "I-G/a-I I-G/O-a"


def run(module, *arguments):
    done = CliRunner().invoke(module.command, arguments)
    if done.exception is not None and not isinstance(done.exception, SystemExit):
        raise done.exception
    return done


def test_deck_runs_unchanged_in_batch_mode(tmp_path, ngspice):
    """The file as written, by the program as installed: every measure is there."""
    target = tmp_path / "tripler.cir"
    assert run(deck, TRIPLER, "--plate", "3 %", "--to", str(target)).exit_code == 0
    assert target.read_text() == run(deck, TRIPLER, "--plate", "3 %").output
    done = subprocess.run(
        [ngspice, "-b", target.name], cwd=tmp_path, capture_output=True, text=True, check=True
    )
    names = ["no_load_ratio", "output_resistance", "efficiency", *(f"peak_s{k}" for k in range(1, 8))]
    for name in names:
        assert any(line.startswith(name) for line in done.stdout.splitlines()), name
    assert "failed" not in done.stdout


@pytest.mark.usefixtures("ngspice")
@pytest.mark.parametrize("subject", [TRIPLER, "1-0v", "pump-shelf"])
def test_exact_and_simulated_agree(subject):
    done = run(verify, subject, "--top", "1", "--format", "csv")
    assert done.exit_code == 0
    rows = list(csv.DictReader(io.StringIO(done.output)))
    assert [row["quantity"] for row in rows[:3]] == ["no-load ratio", "output resistance", "efficiency"]
    assert all(row["quantity"].startswith("peak S") for row in rows[3:])
    assert all(abs(float(row["difference"])) < 1e-3 for row in rows)


@pytest.mark.long
@pytest.mark.usefixtures("ngspice")
@pytest.mark.parametrize("brief", ["greenhouse-node", "greenhouse-node-regulated", "pump-shelf"])
def test_finalists_agree(brief):
    done = run(verify, brief, "--top", "3", "--format", "json")
    assert done.exit_code == 0
    assert len(json.loads(done.output)) == 3


@pytest.mark.usefixtures("ngspice")
def test_disagreement_is_an_exit_status(monkeypatch):
    """A simulator that measures another circuit must not pass."""
    real = verification.simulate
    monkeypatch.setattr(verification, "simulate", lambda text: real(text.replace("RS1=0.1", "RS1=0.2")))
    done = run(verify, TRIPLER, "--frequency", "1 MHz")
    assert done.exit_code == 1
    assert "differ by more than 0.1 %" in done.output


def test_without_ngspice_it_says_how_to_get_it(monkeypatch):
    monkeypatch.setattr(simulating.shutil, "which", lambda _: None)
    with pytest.raises(CapmusterError, match="apt-get install ngspice"):
        run(verify, TRIPLER)


def test_wirings_are_verified_with_unequal_values():
    """Preferred numbers of the series E6 (IEC 60063), so that no symmetry hides a fault."""
    one = subjects(TRIPLER, Values(), unequal=True)[0]
    assert [c.capacitance for c in one.circuit.capacitors] == pytest.approx([1e-6, 1.5e-6])
    assert [s.resistance / 0.1 for s in one.circuit.switches] == pytest.approx([*UNEQUAL, 1.0])


def test_share_of_a_difference():
    row = Comparison("peak S1", "V", 0.5, 0.502, 4.0)
    assert row.difference == pytest.approx(0.0005)
    assert row.agrees
    assert not Comparison("efficiency", "1", 0.9, 0.91, 0.9).agrees


@pytest.mark.parametrize("module", [deck, verify])
def test_refused_input(module):
    with pytest.raises(CapmusterError, match="neither a converter nor a brief"):
        run(module, "nowhere")
