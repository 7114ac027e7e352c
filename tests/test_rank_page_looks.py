"""How the shortlist page looks in a real browser: print on A4, dark and light, labels that do not overlap."""

from __future__ import annotations

import re
from typing import TYPE_CHECKING

import pytest
from page_browser import Opened, open_page, running
from page_examples import example

from capmuster.rank.inputs.brief import load_brief
from capmuster.rank.page.shortlisted import page_data
from capmuster.rank.shortlist import shortlist

if TYPE_CHECKING:
    from collections.abc import Iterator

    from playwright.sync_api import Browser, Page

DATA = example()
AREA = 4  # column
A4_LANDSCAPE = 297, 210  # [mm]
MARGIN = 11  # [mm], as the style sheet has it
PX_PER_MM = 96 / 25.4  # by definition of the CSS px


@pytest.fixture(scope="module")
def browser(chromium) -> Iterator[Browser]:
    with running(chromium) as started:
        yield started


@pytest.fixture
def opened(browser, tmp_path) -> Iterator[Opened]:
    found = open_page(browser, tmp_path / "page.html", DATA)
    yield found
    # Whatever a test did, nothing was fetched and nothing went wrong.
    assert found.complaints == []
    assert all(url.startswith(("file:", "data:")) for url in found.requests)
    assert sum(url.startswith("file:") for url in found.requests) == 1
    found.page.context.close()


def test_print_fits_a4_and_leaves_the_controls_out(opened):
    page = opened.page
    page.click("#columns summary")
    page.click("#all-columns")
    page.keyboard.press("Escape")
    page.click(f"{opened.row(DATA.candidates[0].id)} .unfold")
    page.emulate_media(media="print")
    width = round((A4_LANDSCAPE[0] - 2 * MARGIN) * PX_PER_MM)
    page.set_viewport_size({"width": width, "height": 700})
    assert page.evaluate("document.documentElement.scrollWidth") <= width
    # Nothing is cut: every cell is as wide as what it holds, and the table no wider than the sheet.
    too_wide = page.evaluate(
        "[...document.querySelectorAll('#table th, #table td, .elements td, svg')]"
        f".filter(e => e.getBoundingClientRect().right > {width} + 1 || e.scrollWidth > e.clientWidth + 1"
        " && getComputedStyle(e).display === 'table-cell').length"
    )
    assert too_wide == 0
    for hidden in (".tools", ".filters", "#theme", ".hint", ".unfold", ".sort", ".to-plot"):
        assert page.locator(f"{hidden}:visible").count() == 0
    assert page.locator(f"{opened.head(AREA)} .printed").inner_text().split() == ["area", "[mm²]"]
    # Rows and figures are not torn, headings come again on each sheet.
    for part in (".row", "figure", ".elements tr"):
        assert page.evaluate(f"getComputedStyle(document.querySelector('{part}')).breakInside") == "avoid"
    assert page.evaluate("getComputedStyle(document.querySelector('#table thead')).display") == (
        "table-header-group"
    )
    pdf = page.pdf(prefer_css_page_size=True, print_background=True)
    boxes = {tuple(map(float, box)) for box in re.findall(rb"/MediaBox \[0 0 ([\d.]+) ([\d.]+)\]", pdf)}
    (size,) = boxes
    # 72 points to the inch of 25.4 mm.
    assert size == pytest.approx([side * 72 / 25.4 for side in A4_LANDSCAPE], abs=1.0)


def test_a_table_with_every_column_is_printed_uncut(browser, tmp_path):
    # The widest there is: all loss terms over a load profile.
    data = page_data(shortlist(load_brief("greenhouse-node-losses"), top=6))
    found = open_page(browser, tmp_path / "page.html", data)
    found.page.click("#columns summary")
    found.page.click("#all-columns")
    width = round((A4_LANDSCAPE[0] - 2 * MARGIN) * PX_PER_MM)
    found.page.emulate_media(media="print")
    found.page.set_viewport_size({"width": width, "height": 700})
    heads = found.page.locator("#table > thead > tr:first-child > th:visible").count()
    assert heads == len(data.columns)
    assert found.page.evaluate("document.documentElement.scrollWidth") <= width
    assert found.complaints == []
    found.page.context.close()


def test_print_is_dark_on_white_even_from_the_dark_view(browser, tmp_path):
    found = open_page(browser, tmp_path / "page.html", DATA, color_scheme="dark")
    found.page.emulate_media(media="print", color_scheme="dark")
    assert _colours(found.page) == ((0, 0, 0), (255, 255, 255))
    found.page.context.close()


def _colours(page: Page) -> tuple[tuple[int, ...], tuple[int, ...]]:
    """Ink and paper."""
    style = page.evaluate("(s => [s.color, s.backgroundColor])(getComputedStyle(document.body))")
    ink, paper = (tuple(map(int, re.findall(r"\d+", text)[:3])) for text in style)
    return ink, paper


def _luminance(colour: tuple[int, ...]) -> float:
    """Relative luminance as the web's contrast rules (WCAG 2) define it."""
    channels = [value / 255 for value in colour]
    linear = [c / 12.92 if c <= 0.04045 else ((c + 0.055) / 1.055) ** 2.4 for c in channels]
    return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]


def _contrast(one: tuple[int, ...], other: tuple[int, ...]) -> float:
    light, dark = sorted((_luminance(one), _luminance(other)), reverse=True)
    return (light + 0.05) / (dark + 0.05)


def test_dark_and_light(browser, tmp_path):
    for scheme in ("light", "dark"):
        found = open_page(browser, tmp_path / "page.html", DATA, color_scheme=scheme)
        page = found.page
        page.click("#open-all")
        ink, paper = _colours(page)
        assert (_luminance(paper) < 0.1) == (scheme == "dark")
        assert _contrast(ink, paper) > 7
        # Every text, in drawings too, reaches what WCAG 2 asks for (AA).
        faintest = page.evaluate(
            "[...document.querySelectorAll('main *')].filter(e => e.checkVisibility() && "
            "[...e.childNodes].some(n => n.nodeType === 3 && n.textContent.trim())).map(e => "
            "e.namespaceURI.endsWith('svg') ? getComputedStyle(e).fill : getComputedStyle(e).color)"
        )
        for text in set(faintest):
            colour = tuple(map(int, re.findall(r"\d+", text)[:3]))
            assert _contrast(colour, paper) > 4.5, text
        page.click("#theme")
        assert (_luminance(_colours(page)[1]) < 0.1) == (scheme == "light")
        assert found.complaints == []
        page.context.close()


def test_labels_in_plots_and_drawings_do_not_overlap_as_rendered(opened):
    opened.page.click("#open-all")
    clashes = opened.page.evaluate(
        """() => [...document.querySelectorAll('svg')].filter(s => s.checkVisibility()).flatMap(svg => {
          const boxes = [...svg.querySelectorAll('text')]
            .map(t => [t.textContent, t.getBoundingClientRect()]);
          const frame = svg.getBoundingClientRect(), found = [];
          boxes.forEach(([a, p], i) => {
            if (p.left < frame.left - 1 || p.right > frame.right + 1 || p.top < frame.top - 3 ||
                p.bottom > frame.bottom + 3) found.push(`${a} leaves its drawing`);
            boxes.slice(0, i).forEach(([b, q]) => {
              const across = Math.min(p.right, q.right) - Math.max(p.left, q.left);
              const along = Math.min(p.bottom, q.bottom) - Math.max(p.top, q.top);
              if (across > 0.5 && along > 4) found.push(`${a} on ${b}`);
            });
          });
          return found;
        })"""
    )
    assert clashes == []
