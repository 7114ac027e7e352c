"""The shortlist page as text: self-contained, escaped, small, the same every time; plots and their axes."""

from __future__ import annotations

import base64
import hashlib
import math
import re
from dataclasses import replace
from html.parser import HTMLParser
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from page_examples import HOSTILE, example

from capmuster.enumerate.converters import converters
from capmuster.rank.files.export import export
from capmuster.rank.inputs.brief import load_brief
from capmuster.rank.page.axes import engineering, linear_axis, log_axis
from capmuster.rank.page.data import BINS, LossBar
from capmuster.rank.page.plots import SHADES, impedance_plot, loss_plot, population_plot
from capmuster.rank.page.population import population_of
from capmuster.rank.page.render import render_page
from capmuster.rank.page.shortlisted import page_data
from capmuster.rank.page.tablecells import page_table
from capmuster.rank.scores.utilisation import charge_flow
from capmuster.rank.shortlist import shortlist

MEGABYTE = 1_000_000


class _Reader(HTMLParser):
    """Collects tags with their attributes, and the text of the page."""

    def __init__(self) -> None:
        super().__init__()
        self.tags: list[tuple[str, dict[str, str | None]]] = []
        self.text: list[str] = []

    def handle_starttag(self, tag, attrs):
        self.tags.append((tag, dict(attrs)))

    def handle_data(self, data):
        self.text.append(data)


def _read(page: str) -> _Reader:
    reader = _Reader()
    reader.feed(page)
    return reader


@pytest.fixture(scope="module")
def page() -> str:
    return render_page(example())


def test_nothing_is_fetched(page):
    allowed = {"img-src": "data:", "default-src": "'none'"}
    reader = _read(page)
    for tag, attributes in reader.tags:
        assert tag not in {"img", "iframe", "object", "embed", "audio", "video", "base"}
        for name in ("src", "srcset", "data", "action", "background", "poster"):
            assert name not in attributes
        target = attributes.get("href") or "#"
        assert target.startswith("#") or (tag == "link" and target == "data:,")
    policy = next(a["content"] for t, a in reader.tags if t == "meta" and "http-equiv" in a)
    for directive, value in allowed.items():
        assert f"{directive} {value}" in policy
    assert "unsafe-inline" not in policy.split("script-src")[1]
    style = page.split("<style>")[1].split("</style>")[0]
    assert "@import" not in style
    assert all(url.startswith("#") for url in re.findall(r"url\((.*?)\)", style))


def test_text_that_looks_like_markup_is_text(page):
    hostile = render_page(example(title=HOSTILE))
    reader = _read(hostile)
    assert [tag for tag, _ in reader.tags].count("script") == 1
    assert not any("onerror" in attributes for _, attributes in reader.tags)
    joined = "".join(reader.text)
    # Title, heading, caution, assumption, finding, provenance, and every family and element of that name.
    assert joined.count(HOSTILE) >= 6 + 12
    assert joined.count(HOSTILE) > "".join(_read(page).text).count(HOSTILE)


def test_one_hash_lets_one_script_run(page):
    script = page.split("<script>")[1].split("</script>")[0]
    digest = base64.b64encode(hashlib.sha256(script.encode()).digest()).decode()
    assert f"script-src 'sha256-{digest}'" in page


def test_units_stand_in_the_header(page):
    assert re.search(r"area <span class=\"unit\">\[mm²\]</span></button>", page)
    assert re.search(r"capacitor utilisation <span class=\"unit\">\[%\]</span></button>", page)


def test_ids_are_unique_and_links_lead_somewhere(page):
    reader = _read(page)
    ids = [attributes["id"] for _, attributes in reader.tags if "id" in attributes]
    assert len(ids) == len(set(ids))
    targets = {a["href"][1:] for t, a in reader.tags if t == "a"}
    assert targets <= set(ids)


def test_the_same_page_every_time():
    assert render_page(example()) == render_page(example())


def test_fifty_candidates_stay_below_two_megabytes():
    assert len(render_page(example(50, 4)).encode()) < 1.0 * MEGABYTE
    assert len(render_page(example(50, 12)).encode()) < 2.0 * MEGABYTE


def test_a_page_without_candidates():
    text = render_page(example(0))
    assert "What the search found" in text
    assert "<table" not in text


def test_page_of_a_shipped_brief(tmp_path):
    found = shortlist(load_brief("pump-shelf"), top=50)
    data = page_data(found)
    assert [cell.text for cell in data.candidates[0].cells][:2] == ["1", found.frame.id[0]]
    for candidate, area in zip(data.candidates, found.frame.area_mm2, strict=True):
        assert candidate.area == area
        assert len(candidate.cells) == len(found.columns)
    assert data.cautions == tuple(found.cautions)
    assert data.cautions  # 56 V in a wet place
    assert len(data.others) == len(found.pool) - 50
    # Every converter that holds the output is in the plot.
    assert data.population.counts.sum() == found.pool.considered
    target = tmp_path / "shelf.html"
    export(found, [target])
    assert target.read_bytes() == render_page(data).encode()
    assert target.stat().st_size < 2 * MEGABYTE


def test_losses_are_input_power_less_output_power():
    # Energy balance: at no other loss, (M V_in - V_out) I is all that is lost (theory of the ideal ratio).
    brief = load_brief("pump-shelf")
    data = page_data(shortlist(brief, top=2))
    ratio = data.candidates[0].cells[2].value
    droop = ratio * brief.input_minimum - brief.required
    assert data.candidates[0].losses[0].total == pytest.approx(droop * brief.current, rel=1e-9)
    brief = load_brief("greenhouse-node-regulated")
    data = page_data(shortlist(brief, top=2))
    ratio = data.candidates[0].cells[2].value
    for bar, volts in zip(
        data.candidates[0].losses,
        (brief.input_minimum, brief.input_nominal, brief.input_maximum),
        strict=True,
    ):
        assert bar.total == pytest.approx((ratio * volts - brief.required) * brief.current, rel=1e-9)


def test_all_losses_add_up_to_input_power_less_output_power():
    # Energy balance: efficiency is output power over output power and all losses.
    found = shortlist(load_brief("greenhouse-node-losses"), top=3)
    for row, candidate in enumerate(page_data(found).candidates):
        sized = found.pool.evaluation.sized
        for bar, at in zip(candidate.losses, (sized.minimum, sized.nominal, sized.maximum), strict=True):
            power_out = at.output_power[row]
            assert bar.total == pytest.approx(power_out / at.efficiency[row] - power_out, rel=1e-9)
        names = [name for name, _ in candidate.losses[0].terms]
        assert {"gate drive", "plates", "leakage"} <= set(names)
        assert len(names) == len(set(names))


def test_cells_are_the_frame_in_the_units_of_the_headings():
    found = shortlist(load_brief("greenhouse-node-losses"), top=5)
    table = page_table(found.columns, found.frame)
    factors = {"%": 0.01, "mW": 1e-3, "µW": 1e-6, "MHz": 1e6, "kHz": 1e3, "mA": 1e-3, "Ω": 1.0, "kΩ": 1e3}
    seen = set()
    for k, column in enumerate(table.columns):
        for value, cells in zip(found.frame[column.key], table.rows, strict=True):
            cell = cells[k]
            if isinstance(value, float) and math.isfinite(value):
                factor = factors.get(column.unit, 1.0)
                seen.add(column.unit)
                assert cell.value * factor == pytest.approx(value, rel=1e-9), column.key
                written = float(cell.text)
                assert written == pytest.approx(cell.value, rel=6e-4, abs=0.06 if column.unit == "%" else 0)
    assert {"%", "mW", "MHz", "mA"} <= seen
    # One prefix for each unit, so that columns compare.
    assert len({column.unit for column in table.columns if column.unit.endswith("W")}) == 1


def test_impedance_curve_of_a_shipped_brief():
    # The limits cross the exact curve's ends: at low frequency R_SSL, at high frequency R_FSL; in between the
    # exact impedance lies above both limits and below their sum (x coth(x/y) <= R <= x + y).
    brief = load_brief("pump-shelf")
    for candidate in page_data(shortlist(brief, top=5)).candidates:
        curve = candidate.curve
        assert np.all(curve.exact >= np.maximum(curve.slow, curve.fast) * (1 - 1e-9))
        assert np.all(curve.exact <= (curve.slow + curve.fast) * (1 + 1e-9))
        assert curve.exact[0] == pytest.approx(curve.slow[0], rel=2e-3)
        assert curve.exact[-1] == pytest.approx(curve.fast[-1], rel=2e-3)


def test_population_against_one_converter_at_a_time():
    brief = load_brief("pump-shelf")
    small = replace(brief, most_capacitors=2)
    counts = np.zeros((BINS, BINS), dtype=int)
    for n in (1, 2):
        table = converters(n)
        for row in range(len(table)):
            converter = table.converter(row)
            if small.holds(converter.ratio):
                flow = charge_flow(converter)
                c, s = (
                    max(0, math.ceil(share * BINS) - 1)
                    for share in (flow.capacitor_utilisation, flow.switch_utilisation)
                )
                counts[c, s] += 1
    assert np.array_equal(population_of(small, 2).counts, counts)
    # Above the census there are family members: one of 3 capacitors for each role that holds the output.
    more = population_of(replace(brief, most_capacitors=3), 2)
    assert more.counts.sum() > counts.sum()
    assert "families" in more.description


def test_population_plot_has_a_cell_for_each_bin_that_is_not_empty():
    data = example()
    text = population_plot(data.population, ())
    cells = sum(found.count("M") for found in re.findall(r'class="shade s\d" d="([^"]*)"', text)) - len(
        SHADES
    )  # the legend's own
    assert cells == np.count_nonzero(data.population.counts)


def test_loss_bars_are_as_long_as_their_terms():
    bars = (LossBar("a", (("x", 1.0), ("y", 3.0))), LossBar("b", (("x", 0.5), ("y", 0.0))))
    spans = [
        float(end) - float(start)
        for start, end in re.findall(r'class="term t\d" d="M([\d.]+) [\d.]+H([\d.]+)v18', loss_plot(bars))
    ]
    assert spans[1] / spans[0] == pytest.approx(3.0, rel=1e-3)
    assert spans[2] / spans[0] == pytest.approx(0.5, rel=1e-3)
    assert spans[3] == 0.0


def test_impedance_plot_draws_limits_as_straight_lines():
    text = impedance_plot(example(1).candidates[0].curve)
    (exact,) = re.findall(r'class="curve exact" d="(M[^h"]*)"', text)
    assert exact.count("L") == 60
    for kind in ("slow", "fast"):
        (line,) = re.findall(rf'class="curve {kind}" d="(M[^h"]*)"', text)
        assert line.count("L") == 1


@given(st.floats(-1e6, 1e6), st.one_of(st.just(0.0), st.floats(1e-6, 1e6)))
def test_linear_axis_holds_its_values_on_round_ticks(low, width):
    axis = linear_axis(low, low + width, 10.0, 110.0)
    rounding = 1e-8 * (abs(low) + width)
    assert axis.low <= low + rounding
    assert axis.high >= low + width - rounding
    assert 2 <= len(axis.ticks) <= 9
    assert axis(axis.low) == 10.0
    assert axis(axis.high) == pytest.approx(110.0)
    steps = {round(b - a, 9) for a, b in pairwise(axis.ticks)}
    assert max(steps) - min(steps) < 1e-6 * max(1.0, abs(low) + width)


@given(st.floats(1e-12, 1e9), st.floats(1.0, 1e6))
def test_log_axis_holds_its_values(low, factor):
    axis = log_axis(low, low * factor, 300.0, 0.0)
    assert axis.low <= low * (1 + 1e-8)
    assert axis.high >= low * factor * (1 - 1e-8)
    assert axis.high > axis.low
    assert 1 <= len(axis.ticks) <= 9
    assert axis(math.sqrt(axis.low * axis.high)) == pytest.approx(150.0)


@pytest.mark.parametrize(
    ("value", "text"),
    [
        (2e4, "20 kHz"),
        (1.2e5, "120 kHz"),
        (1e6, "1 MHz"),
        (0.05, "50 mHz"),
        (0.0, "0 Hz"),
        (999.9e3, "1 MHz"),
    ],
)
def test_ticks_have_prefixes_of_the_si(value, text):
    assert engineering(value, "Hz") == text
