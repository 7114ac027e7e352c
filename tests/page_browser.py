"""A page in a browser that runs without a screen, and all that it asked for and complained of."""

from __future__ import annotations

from contextlib import contextmanager
from typing import TYPE_CHECKING

import pytest

from capmuster.rank.page.render import render_page

if TYPE_CHECKING:
    from collections.abc import Iterator
    from pathlib import Path

    from playwright.sync_api import Browser, Page

    from capmuster.rank.page.data import PageData


@contextmanager
def running(chromium: str) -> Iterator[Browser]:
    """Start the browser at a path; without playwright the test is skipped."""
    playwright = pytest.importorskip(
        "playwright.sync_api", reason="playwright is not installed: pip install 'capmuster[test]'"
    )
    quiet = ("background-networking", "component-update", "sync")
    with playwright.sync_playwright() as started:
        browser = started.chromium.launch(
            executable_path=chromium,
            args=[
                "--no-sandbox",
                "--disable-gpu",
                "--no-first-run",
                *(f"--disable-{name}" for name in quiet),
            ],
        )
        yield browser
        browser.close()


class Opened:
    """A page, and all that it asked for and complained of."""

    def __init__(self, page: Page, path: Path) -> None:
        self.page = page
        self.requests: list[str] = []
        self.complaints: list[str] = []
        page.on("request", lambda request: self.requests.append(request.url))
        page.on("console", lambda message: self.complaints.append(message.text))
        page.on("pageerror", lambda error: self.complaints.append(str(error)))
        page.goto(path.as_uri())

    def shown(self) -> list[str]:
        """Ids of the rows that are seen, from top to bottom."""
        bodies = self.page.locator("#table > tbody")
        return [body.get_attribute("data-id") for body in bodies.all() if body.is_visible()]

    def head(self, column: int) -> str:
        """Selector of a column's heading."""
        return f"#table > thead > tr:first-child > th:nth-child({column + 2})"

    def sort(self, column: int) -> None:
        """Press a column's heading."""
        self.page.click(f"{self.head(column)} .sort")

    def filter(self, column: int, text: str) -> None:
        """Write into a column's filter."""
        self.page.fill(f".filters th:nth-child({column + 2}) input", text)

    def row(self, key: str) -> str:
        """Selector of a candidate's row."""
        return f"[id='c-{key}']"

    def detail(self, key: str) -> str:
        """Selector of what it folds out to."""
        return f"[id='d-{key}']"


def open_page(browser: Browser, path: Path, data: PageData, **settings) -> Opened:
    """Write a page to a file and open it."""
    path.write_text(render_page(data), encoding="utf-8")
    context = browser.new_context(viewport={"width": 1360, "height": 900}, **settings)
    context.set_default_timeout(5000)
    return Opened(context.new_page(), path)
