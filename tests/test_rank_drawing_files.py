"""Drawings as files and as text: well formed, escaped, the same bytes every time, legible without colour."""

from __future__ import annotations

import io
import os
import re
import subprocess
import sys
import xml.etree.ElementTree as ET
from pathlib import Path
from typing import TYPE_CHECKING

import pytest

from capmuster.enumerate.errors import CapmusterError
from capmuster.enumerate.families import dickson, family_names, fibonacci, ladder, series_parallel
from capmuster.rank.cli import main
from capmuster.rank.drawing.files import drawing_bytes, write_drawings
from capmuster.rank.drawing.sheet import converter_sheet
from capmuster.rank.drawing.svg import INLINE, PRINT, svg
from capmuster.rank.drawing.terminal import text_diagram

if TYPE_CHECKING:
    from capmuster.rank.drawing.shapes import Drawing

SVG = "{http://www.w3.org/2000/svg}"
HOSTILE = '<script>alert("x")</script> & $x^2$'


def _tree(drawing: Drawing) -> ET.Element:
    return ET.fromstring(svg(drawing))  # noqa: S314 -- written here


def test_svg_is_well_formed_and_text_stays_text():
    drawing = converter_sheet(series_parallel(4), title=HOSTILE, families=["<b>"])
    tree = _tree(drawing)
    allowed = {SVG + name for name in ("svg", "title", "rect", "path", "g", "text")}
    assert {element.tag for element in tree.iter()} <= allowed
    texts = [element.text for element in tree.iter(SVG + "text")]
    assert HOSTILE in " ".join(texts)
    assert sorted(texts) == sorted(label.text for label in drawing.labels)
    assert float(tree.get("width")) == pytest.approx(drawing.width, abs=0.01)


def test_svg_holds_any_title():
    title = "bell\x07 null\x00 half\ud800 水 ünïcödé"
    texts = [element.text for element in _tree(converter_sheet(dickson(2), title=title)).iter(SVG + "text")]
    assert any("bell\ufffd null\ufffd half\ufffd 水 ünïcödé" in text for text in texts)


def test_svg_draws_every_mark():
    drawing = converter_sheet(ladder(3, 1))
    marks = [*drawing.wires, *(mark for symbol in drawing.symbols for mark in symbol.marks)]
    paths = [element.get("d") for element in _tree(drawing).iter(SVG + "path")]
    assert sum(path.count("M") for path in paths) == len(marks)


def test_inline_svg_has_no_ground_of_its_own():
    text = svg(converter_sheet(dickson(2)), INLINE, inline=True)
    assert text.startswith("<svg ")
    assert "currentColor" in text
    assert PRINT.ink not in text


@pytest.mark.parametrize("suffix", [".svg", ".png", ".pdf"])
def test_same_drawing_same_bytes(suffix, tmp_path):
    drawing = converter_sheet(fibonacci(3))
    here = drawing_bytes(drawing, suffix)
    assert here == drawing_bytes(drawing, suffix)
    assert not re.search(rb"CreationDate|ModDate|\b20[0-9]{6}", here)
    # Another process, with another hash seed, another directory and matplotlib settings of the user's own.
    (tmp_path / "matplotlibrc").write_text("lines.linewidth: 9\nfont.size: 30\nsavefig.dpi: 30\n")
    code = (
        "import sys; from capmuster.enumerate.families import fibonacci\n"
        "from capmuster.rank.drawing.files import drawing_bytes\n"
        "from capmuster.rank.drawing.sheet import converter_sheet\n"
        f"sys.stdout.buffer.write(drawing_bytes(converter_sheet(fibonacci(3)), {suffix!r}))"
    )
    environment = {
        **os.environ,
        "PYTHONHASHSEED": "7",
        "PYTHONPATH": os.pathsep.join(p for p in sys.path if p),
    }
    done = subprocess.run(
        [sys.executable, "-c", code], cwd=tmp_path, env=environment, capture_output=True, check=True
    )
    assert done.stdout == here


def test_png_shows_what_the_geometry_says():
    image_module = pytest.importorskip("PIL.Image")  # comes with matplotlib
    drawing = converter_sheet(series_parallel(3))
    image = image_module.open(io.BytesIO(drawing_bytes(drawing, ".png"))).convert("L")
    assert image.size == (int(2 * drawing.width), int(2 * drawing.height))
    assert image.getpixel((3, 3)) == 255
    for symbol in drawing.symbols:  # something dark at the middle of each plate, contact, arrow
        box = tuple(
            int(2 * v) for v in (symbol.box.left, symbol.box.top, symbol.box.right + 1, symbol.box.bottom + 1)
        )
        assert image.crop(box).getextrema()[0] < 110, symbol.name
    for label in drawing.labels:  # and text inside its box, with nothing of it just outside
        box = label.box
        inside = image.crop(tuple(int(2 * v) for v in (box.left, box.top, box.right, box.bottom)))
        assert inside.getextrema()[0] < 130, label.text


def test_pdf_is_one_page_of_the_drawing_size_with_its_text_as_text():
    drawing = converter_sheet(dickson(2))
    content = drawing_bytes(drawing, ".pdf")
    assert content.startswith(b"%PDF-")
    box = re.search(rb"/MediaBox \[ *0 0 ([0-9.]+) ([0-9.]+) *\]", content)
    # 72 points of the PDF are 96 px.
    assert float(box[1]) == pytest.approx(drawing.width * 0.75, abs=0.01)
    assert float(box[2]) == pytest.approx(drawing.height * 0.75, abs=0.01)
    assert content.count(b"/Type /Page ") == 1
    assert b"/FontFile2" in content


def test_tones_differ_without_colour():
    def lightness(colour: str) -> float:
        # Relative luminance of sRGB as the web's contrast rules (WCAG 2) define it.
        channels = [int(colour[k : k + 2], 16) / 255 for k in (1, 3, 5)]
        linear = [c / 12.92 if c <= 0.04045 else ((c + 0.055) / 1.055) ** 2.4 for c in channels]
        return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]

    paper = lightness(PRINT.paper)
    for tone in (PRINT.ink, PRINT.soft, PRINT.accent):
        assert (paper + 0.05) / (lightness(tone) + 0.05) > 4.5  # WCAG 2 AA for small text
    assert lightness(PRINT.faint) - lightness(PRINT.ink) > 0.2


def test_several_files_or_none(tmp_path):
    drawing = converter_sheet(dickson(2))
    good, bad = tmp_path / "a.svg", tmp_path / "missing" / "b.pdf"
    with pytest.raises(CapmusterError, match="does not exist"):
        write_drawings(drawing, [good, bad])
    assert list(tmp_path.iterdir()) == []
    write_drawings(drawing, [good, tmp_path / "b.PNG"])
    assert sorted(path.name for path in tmp_path.iterdir()) == ["a.svg", "b.PNG"]
    assert good.read_bytes() == drawing_bytes(drawing, ".svg")
    with pytest.raises(CapmusterError, match=r"suffix '\.gif'.*\.svg, \.png, \.pdf"):
        write_drawings(drawing, [tmp_path / "c.gif"])
    with pytest.raises(CapmusterError, match="named twice"):
        write_drawings(drawing, [good, str(good)])
    with pytest.raises(CapmusterError, match="no suffix"):
        write_drawings(drawing, [Path("c")])


def test_text_diagram_of_the_doubler():
    # Common practice: charge from input to ground, then stack on the input.
    assert text_diagram(dickson(2)).splitlines() == [
        "Phase 1          Phase 2",
        "2 · O unused     2   O─┬─",
        "                       ╪ C1 ↑1",
        "1   I─┬─         1   I─┴─",
        "      ╪ C1 ↓1",
        "0   G─┴─         0 · G unused",
    ]


def test_text_diagram_fits_the_terminal_and_goes_without_line_characters():
    wide, narrow = text_diagram(series_parallel(4), width=100), text_diagram(series_parallel(4), width=50)
    assert max(map(len, wide.splitlines())) <= 100
    assert max(map(len, narrow.splitlines())) <= 50
    assert wide.count("Phase") == narrow.count("Phase") == 2
    assert text_diagram(fibonacci(5), ascii_only=True).isascii()
    assert text_diagram(ladder(4, 1).swapped(), ascii_only=True).isascii()
    assert not any(line.endswith(" ") for line in wide.splitlines())


def _run(*arguments: str) -> int:
    with pytest.raises(SystemExit) as stopped:
        main(arguments)
    return stopped.value.code


def test_command_draws_a_wiring_and_an_id(tmp_path, capsys):
    by_wiring, by_id = tmp_path / "a.svg", tmp_path / "b.svg"
    assert _run("draw", "I-G/O-I", "--to", str(by_wiring)) == 0
    assert _run("draw", dickson(2).id, "--to", str(by_id), "--to", str(tmp_path / "c.pdf")) == 0
    assert by_wiring.read_bytes() == by_id.read_bytes() == drawing_bytes(_sheet_of_the_doubler(), ".svg")
    assert (tmp_path / "c.pdf").read_bytes() == drawing_bytes(_sheet_of_the_doubler(), ".pdf")
    assert capsys.readouterr().err == ""


def _sheet_of_the_doubler() -> Drawing:
    return converter_sheet(dickson(2), families=family_names(1)[dickson(2).id])


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (("I-G/O-I", "--to", "x.gif"), "drawing: 'x.gif' has the suffix '.gif'; accepted: .svg, .png, .pdf"),
        (("I-G/O-I", "--to", "x.svg", "--input-voltage", "3 A"), "--input-voltage: value '3 A'"),
        (("I-G/O-Q", "--to", "x.svg"), "unknown vertex 'Q'"),
        (("1-zzzzzz", "--to", "x.svg"), "1-zzzzzz"),
        (("I-G/O-I", "--to", "no/such/folder/x.svg"), "does not exist"),
    ],
)
def test_command_refuses_with_one_line(arguments, message, tmp_path, capsys, monkeypatch):
    monkeypatch.chdir(tmp_path)
    assert _run("draw", *arguments) == 2
    error = capsys.readouterr().err
    assert message in error
    assert error.count("\n") == 1
    assert list(tmp_path.iterdir()) == []


def test_show_has_the_diagram_in_text(capsys):
    assert _run("show", "I-G/O-I") == 0
    assert "C1" in capsys.readouterr().out.split("figure")[0]
