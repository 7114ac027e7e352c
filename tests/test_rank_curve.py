"""Curves as numbers, rows and pictures."""

import csv
import io
import json
from xml.etree import ElementTree as ET

import numpy as np
import pytest
from click.testing import CliRunner

from capmuster.enumerate.errors import CapmusterError
from capmuster.rank.commands.curve import command
from capmuster.rank.exact.curve import HEADER, curve
from capmuster.rank.exact.curvepicture import picture
from capmuster.rank.exact.subject import Values, is_brief, subjects

TRIPLER = "I-G/a-I I-G/O-a"


def ideal_curve(**values):
    return curve(subjects(TRIPLER, Values(**values))[0], points=61)


def run(*arguments):
    done = CliRunner().invoke(command, arguments)
    if done.exception is not None and not isinstance(done.exception, SystemExit):
        raise done.exception
    return done.output


def test_asymptotes_corner_and_efficiency_of_a_tripler():
    """Sums over squared multipliers (Seeman and Sanders 2008), efficiency V / (M V_in) (common practice).

    Capacitors carry 1 and 1, switches 2, 2, 1, 1, 1, 1, 1 (both capacitors charge through the outer two).
    """
    found = ideal_curve(capacitances=(1e-6,), resistances=(0.1,), load=0.01)
    sweep = found.over_frequency
    np.testing.assert_allclose(sweep.slow, 2 / (sweep.frequency * 1e-6), rtol=1e-12)
    np.testing.assert_allclose(sweep.fast, 2 * 13 * 0.1, rtol=1e-12)
    assert found.corner == pytest.approx(2 / 2.6e-6, rel=1e-12)
    np.testing.assert_allclose(sweep.resistance[[0, -1]], [sweep.slow[0], sweep.fast[-1]], rtol=1e-3)
    for one in (sweep, found.over_load):
        np.testing.assert_allclose(one.efficiency, one.output / 3.0, rtol=1e-9)
    np.testing.assert_allclose(
        np.diff(found.over_load.output),
        -np.diff(found.over_load.load) * found.over_load.resistance[0],
        rtol=1e-6,
    )


def test_overload_is_left_open():
    """Beyond the short-circuit current there is no output to speak of."""
    found = ideal_curve(load=0.5)
    short = 3.0 / found.over_frequency.resistance
    np.testing.assert_array_equal(np.isnan(found.over_frequency.output), short < 0.5)
    assert not np.isnan(found.over_load.output).any()


def test_plates_give_the_efficiency_a_best_load():
    """Plate loss at light load, conduction at heavy load (common practice)."""
    found = ideal_curve(plate_fraction=(0.05,))
    best = int(np.argmax(found.over_load.efficiency))
    assert 0 < best < 60


def test_command_writes_the_same_numbers_in_every_form(tmp_path):
    arguments = (TRIPLER, "--load", "20 mA", "--points", "9")
    rows = list(csv.DictReader(io.StringIO(run(*arguments, "--format", "csv"))))
    data = json.loads(run(*arguments, "--format", "json"))
    assert tuple(rows[0]) == HEADER
    assert len(rows) == len(data["points"]) == 18
    for row, point in zip(rows, data["points"], strict=True):
        assert point["sweep"] == row["sweep"]
        for name in HEADER[1:]:
            assert (point[name] is None and row[name] == "") or point[name] == float(row[name])
    target = tmp_path / "curve.csv"
    run(*arguments, "--to", str(target))
    assert target.read_text() == run(*arguments, "--format", "csv")
    table = run(*arguments)
    assert "corner (R_SSL = R_FSL)" in table
    assert table.count(" V  ") >= 9


def test_brief_stands_for_its_finalists():
    assert is_brief("pump-shelf")
    assert not is_brief(TRIPLER)
    one, two = subjects("pump-shelf", Values(), top=2)
    assert one.converter != two.converter
    assert one.title.endswith("place 1")
    assert abs(one.point().output_voltage) == pytest.approx(10.0, rel=0.3)
    with pytest.raises(CapmusterError, match="sizes the elements itself"):
        subjects("pump-shelf", Values(duty=0.4))


def test_pictures_depend_on_the_curve_alone():
    pytest.importorskip("matplotlib")
    found = ideal_curve()
    svg = picture(found, ".svg")
    assert svg == picture(found, ".svg")
    assert picture(found, ".png") == picture(found, ".png")
    text = "".join(ET.fromstring(svg).itertext())  # noqa: S314 - our own file
    for label in (
        "switching frequency [Hz]",
        "output resistance [ohm]",
        "load [A]",
        "corner",
        "exact",
        "slow limit",
    ):
        assert label in text
    assert picture(found, ".png").startswith(b"\x89PNG")
    assert b"date" not in svg.lower()


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (("nowhere",), "neither a converter nor a brief"),
        (("I-G/O",), "malformed"),
        ((TRIPLER, "--to", "curve.pdf"), "accepted: .csv, .svg, .png"),
        ((TRIPLER, "--to", "no/such/folder/curve.csv"), "does not exist"),
        ((TRIPLER, "--points", "1"), "points: 1 is too small"),
        ((TRIPLER, "--capacitance", "1u,2u,3u"), "3 values for the capacitances; accepted: 1 or 2"),
        ((TRIPLER, "--frequency", "3 V"), "--frequency: value '3 V' has the wrong unit"),
        ((TRIPLER, "--lowest", "1 MHz", "--highest", "1 kHz"), "a lowest below the highest"),
        ((TRIPLER, "--duty", "100 %"), "duty 1.0 of phase 1"),
    ],
)
def test_refused_input(arguments, message):
    with pytest.raises(CapmusterError, match=message.replace(".", r"\.")):
        run(*arguments)
