"""The shortlist page in a real browser: sorting, filtering, fold-outs, links, keyboard."""

from __future__ import annotations

from typing import TYPE_CHECKING

import pytest
from page_browser import Opened, open_page, running
from page_examples import COLUMNS, HOSTILE, example

from capmuster.rank.page.render import render_page

if TYPE_CHECKING:
    from collections.abc import Iterator

    from playwright.sync_api import Browser

    from capmuster.rank.page.data import Candidate

DATA = example()
PLACE, ID, FAMILIES, SWITCHES, AREA, SHARE = range(6)


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


def _ids(candidates: list[Candidate]) -> list[str]:
    return [candidate.id for candidate in candidates]


def test_opens_folded_and_in_order(opened):
    assert opened.shown() == _ids(DATA.candidates)
    assert opened.page.locator(".detail:visible").count() == 0
    assert opened.page.text_content("#count") == "12 of 12 shown"
    assert opened.page.title() == "Shortlist: Greenhouse node"


@pytest.mark.parametrize("column", [AREA, SWITCHES, SHARE])
def test_numbers_sort_by_value(opened, column):
    ascending = sorted(DATA.candidates, key=lambda one: one.cells[column].value)
    opened.sort(column)
    assert opened.shown() == _ids(ascending)
    assert opened.page.get_attribute(opened.head(column), "aria-sort") == "ascending"
    opened.sort(column)
    values = [next(o for o in DATA.candidates if o.id == key).cells[column].value for key in opened.shown()]
    assert values == sorted(values, reverse=True)
    assert opened.page.get_attribute(opened.head(column), "aria-sort") == "descending"
    opened.sort(PLACE)
    assert opened.shown() == _ids(DATA.candidates)
    assert opened.page.locator("th[aria-sort]").count() == 1


def test_text_sorts_by_letters_and_equal_rows_keep_their_order(opened):
    opened.sort(FAMILIES)
    families = [
        next(o for o in DATA.candidates if o.id == key).cells[FAMILIES].text for key in opened.shown()
    ]
    assert families == sorted(families, key=str.casefold)
    without = [one.id for one in DATA.candidates if not one.cells[FAMILIES].text]
    assert opened.shown()[: len(without)] == without


@pytest.mark.parametrize(
    ("text", "test"),
    [
        ("<= 8", lambda v: v <= 8),
        (">9", lambda v: v > 9),
        ("< 6", lambda v: v < 6),
        (">=12", lambda v: v >= 12),
        ("= 7", lambda v: v == 7),
        ("6..10", lambda v: 6 <= v <= 10),
        ("6,0 .. 1e1", lambda v: 6 <= v <= 10),
    ],
)
def test_numbers_filter_by_bounds(opened, text, test):
    opened.filter(SWITCHES, text)
    expected = [one for one in DATA.candidates if test(one.cells[SWITCHES].value)]
    assert opened.shown() == _ids(expected)
    assert opened.page.text_content("#count") == f"{len(expected)} of 12 shown"
    dim = opened.page.locator("#plot-area .point.dim").count()
    assert dim == 12 - len(expected)
    opened.page.click("#reset")
    assert opened.shown() == _ids(DATA.candidates)
    assert opened.page.locator(".point.dim").count() == 0


def test_text_filters_find_and_together(opened):
    opened.filter(FAMILIES, "dickson")
    some = [one for one in DATA.candidates if "Dickson" in one.cells[FAMILIES].text]
    assert opened.shown() == _ids(some)
    opened.filter(AREA, f"> {some[1].area}")
    assert opened.shown() == _ids(some[2:])
    opened.page.click("#reset")
    opened.page.fill("#find", DATA.candidates[4].wiring[:12].upper())  # in a hidden column, in any case
    assert DATA.candidates[4].id in opened.shown()
    opened.page.fill("#find", "no such text")
    assert opened.shown() == []


def test_a_filter_that_cannot_be_read_is_marked_and_hides_nothing(opened):
    opened.filter(AREA, ">= x")
    cell = opened.page.locator(f".filters th:nth-child({AREA + 2}) input")
    assert cell.get_attribute("aria-invalid") == "true"
    assert opened.shown() == _ids(DATA.candidates)
    opened.filter(AREA, ">= 1")
    assert cell.get_attribute("aria-invalid") == "false"


def test_columns_can_be_hidden_and_shown(opened):
    page = opened.page
    later = [k for k, column in enumerate(COLUMNS) if not column.shown]
    for k in range(len(COLUMNS)):
        assert page.locator(opened.head(k)).is_visible() == (k not in later)
    page.click("#columns summary")
    page.uncheck(f"#columns input[data-column='{AREA}']")
    page.check(f"#columns input[data-column='{later[0]}']")
    page.keyboard.press("Escape")
    assert not page.locator("#columns > div").is_visible()
    row = page.locator(f"{opened.row(DATA.candidates[0].id)} > td")
    assert not row.nth(AREA + 1).is_visible()
    assert row.nth(later[0] + 1).is_visible()
    assert row.nth(later[0] + 1).text_content() == DATA.candidates[0].wiring
    page.click("#columns summary")
    page.click("#all-columns")
    assert page.locator("#table > thead > tr:first-child > th:visible").count() == len(COLUMNS) + 1
    page.click("#first-columns")
    assert not page.locator(opened.head(later[0])).is_visible()


def test_fold_outs(opened):
    page, key = opened.page, DATA.candidates[3].id
    button = page.locator(f"{opened.row(key)} .unfold")
    button.click()
    assert button.get_attribute("aria-expanded") == "true"
    detail = page.locator(opened.detail(key))
    assert detail.is_visible()
    assert page.locator(".detail:visible").count() == 1
    texts = detail.locator("svg text").all_text_contents()
    assert {"Phase 1", "Phase 2", "C1", "gate drive", "fast limit R_FSL"} <= set(texts)
    assert detail.locator(".elements tbody tr").count() == 4
    button.focus()
    page.keyboard.press("Enter")
    assert not detail.is_visible()
    page.click("#open-all")
    assert page.locator(".detail:visible").count() == 12
    page.click("#close-all")
    assert page.locator(".detail:visible").count() == 0


def test_fold_outs_stay_with_their_rows_when_sorted(opened):
    key = DATA.candidates[5].id
    opened.page.click(f"{opened.row(key)} .unfold")
    opened.sort(AREA)
    opened.sort(AREA)
    assert opened.page.locator(f"{opened.row(key)} + tr").get_attribute("id") == f"d-{key}"
    assert opened.page.locator(opened.detail(key)).is_visible()


@pytest.mark.parametrize("plot", ["#plot-area", "#plot-population"])
def test_a_point_leads_to_its_row(opened, plot):
    page, key = opened.page, DATA.candidates[7].id
    page.locator(f"{plot} .point[data-id='{key}']").dispatch_event("click")
    assert page.evaluate("document.activeElement.id") == f"c-{key}"
    assert page.locator(opened.detail(key)).is_visible()
    top = page.locator(opened.row(key)).bounding_box()["y"]
    assert 0 <= top < 900
    assert page.locator(".point.hot").count() == 2  # in both plots
    assert page.url.split("#")[0].endswith("page.html")


def test_a_click_with_the_mouse_hits_the_point_that_is_seen(opened):
    page, key = opened.page, DATA.candidates[0].id
    page.locator(f"#plot-area .point[data-id='{key}'] path").click()
    assert page.evaluate("document.activeElement.id") == f"c-{key}"


def test_a_row_leads_to_its_points(opened):
    page, key = opened.page, DATA.candidates[2].id
    page.hover(f"{opened.row(key)} td:nth-child(3)")
    hot = page.locator(".point.hot")
    assert {point.get_attribute("data-id") for point in hot.all()} == {key}
    assert hot.count() == 2
    page.click(f"{opened.row(key)} .unfold")
    page.click(f"{opened.detail(key)} .to-plot")
    assert page.evaluate("document.activeElement.dataset.id") == key
    assert page.evaluate("document.activeElement.closest('figure').id") == "plot-area"
    box = page.locator("#plot-area svg.plot").bounding_box()
    assert 0 <= box["y"] < 900


def test_a_point_whose_row_is_filtered_away_brings_it_back(opened):
    key = DATA.candidates[1].id
    opened.filter(PLACE, "> 6")
    assert key not in opened.shown()
    opened.page.locator(f"#plot-area .point[data-id='{key}']").dispatch_event("click")
    assert key in opened.shown()
    assert opened.page.input_value(f".filters th:nth-child({PLACE + 2}) input") == ""


def test_keyboard_alone_is_enough(opened):
    page = opened.page

    def focused() -> str:
        return page.evaluate(
            "(e => e.classList.contains('point') ? e.closest('figure').id + ' ' + e.dataset.id"
            " : e.id || e.className || e.textContent)(document.activeElement)"
        )

    stops = []
    for _ in range(12):
        page.keyboard.press("Tab")
        stops.append(focused())
    first = DATA.candidates[0].id
    # Each plot is one stop, at the best candidate; then come the table's tools.
    assert stops[0] == "skip"
    assert stops[1] == "theme"
    assert stops[2:4] == [f"plot-area {first}", f"plot-population {first}"]
    assert stops[4] == "find"
    page.locator(f"#plot-area .point[data-id='{first}']").focus()
    page.keyboard.press("ArrowRight")
    page.keyboard.press("ArrowRight")
    assert focused() == f"plot-area {DATA.candidates[2].id}"
    page.keyboard.press("End")
    page.keyboard.press("ArrowUp")
    assert focused() == f"plot-area {DATA.candidates[10].id}"
    page.keyboard.press("Enter")
    assert focused() == f"c-{DATA.candidates[10].id}"
    page.locator(f"{opened.head(AREA)} .sort").focus()
    page.keyboard.press("Enter")
    assert page.get_attribute(opened.head(AREA), "aria-sort") == "ascending"


def test_arrow_keys_follow_the_order_of_the_table(opened):
    opened.sort(SWITCHES)
    order = opened.shown()
    opened.page.locator(f"#plot-area .point[data-id='{order[0]}']").focus()
    for key in order[1:4]:
        opened.page.keyboard.press("ArrowDown")
        assert opened.page.evaluate("document.activeElement.dataset.id") == key


def test_an_address_with_an_id_opens_that_row(browser, tmp_path):
    path = tmp_path / "page.html"
    path.write_text(render_page(DATA), encoding="utf-8")
    page = browser.new_page()
    key = DATA.candidates[6].id
    page.goto(f"{path.as_uri()}#c-{key}")
    assert page.locator(f"[id='d-{key}']").is_visible()
    page.close()


def test_markup_in_texts_is_shown_as_text(browser, tmp_path):
    found = open_page(browser, tmp_path / "page.html", example(title=HOSTILE))
    page = found.page
    assert page.evaluate("window.hacked") is None
    assert page.locator("img").count() == 0
    assert page.text_content("h1") == HOSTILE
    assert HOSTILE in page.text_content(".caution:nth-of-type(2)")
    page.fill("#find", "<script>")
    assert len(found.shown()) == 3
    assert found.complaints == []
    # Should markup slip through all the same: the page's policy does not run it.
    page.evaluate(
        "(() => { const s = document.createElement('script'); s.textContent = 'window.hacked = 3';"
        " document.body.append(s); document.body.insertAdjacentHTML('beforeend',"
        " '<img src=x onerror=\"window.hacked = 4\">'); })()"
    )
    page.wait_for_timeout(100)
    assert page.evaluate("window.hacked") is None
    assert all(url.startswith(("file:", "data:")) for url in found.requests)
    page.context.close()


def test_without_a_script_all_is_there_to_read(browser, tmp_path):
    found = open_page(browser, tmp_path / "page.html", DATA, java_script_enabled=False)
    page = found.page
    assert page.locator(".detail").first.is_visible()
    assert not page.locator("#find").is_visible()
    key = DATA.candidates[3].id
    assert page.locator(f"#plot-area .point[data-id='{key}']").get_attribute("href") == f"#c-{key}"
    page.context.close()


def test_narrow_screens_scroll_only_the_table(browser, tmp_path):
    found = open_page(browser, tmp_path / "page.html", DATA)
    found.page.set_viewport_size({"width": 420, "height": 800})
    found.page.click("#open-all")
    assert found.page.evaluate("document.documentElement.scrollWidth") <= 420
    found.page.context.close()
