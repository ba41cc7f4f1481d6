"""The claim in a browser: one page of A4, nothing loaded, readable on a phone."""

from __future__ import annotations

import re
from collections.abc import Iterator
from contextlib import contextmanager
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

from lmpgap.settlement.exhibit.page import claim_page
from lmpgap.settlement.exhibit.rows import exhibit_rows
from lmpgap.settlement.exhibit.statement import build_statement
from lmpgap.settlement.settle import settle
from tests.settlement.conftest import Solved

CHROMIUM = Path("/usr/bin/chromium")
SIZES = {"phone": (375, 812), "desktop": (1280, 900)}

pytestmark = [
    pytest.mark.browser,
    pytest.mark.skipif(not CHROMIUM.exists(), reason="needs chromium"),
]


@pytest.fixture(scope="module")
def browser() -> Iterator[Any]:
    from playwright.sync_api import sync_playwright

    with sync_playwright() as playwright:
        started = playwright.chromium.launch(
            executable_path=str(CHROMIUM), args=["--no-sandbox", "--disable-gpu", "--disable-background-networking"]
        )
        yield started
        started.close()


@contextmanager
def opened(browser: Any, file: Path, *, size: str = "desktop", scheme: str = "light") -> Iterator[Any]:
    """Open a page; fail if it loads anything besides itself or writes to the console."""
    context = browser.new_context(
        viewport=dict(zip(("width", "height"), SIZES[size], strict=True)), color_scheme=scheme, locale="en-US"
    )
    page = context.new_page()
    seen: list[str] = []
    page.on("request", lambda request: seen.append(request.url))
    page.on("console", lambda message: seen.append(message.text))
    page.on("pageerror", lambda error: seen.append(str(error)))
    page.goto(file.resolve().as_uri())
    yield page
    assert seen == [file.resolve().as_uri()]
    context.close()


@pytest.fixture(scope="module")
def page_file(solved: Solved, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Return the page of a claim with more accounts than it can show, some with very long names."""
    names = [f"{'Very Long Name of a Trading Company ' * 3}{i}" if i % 3 else f"Account {i}" for i in range(11)]
    positions = solved.scenario.tables["positions"]
    starts = positions["interval_start"].unique()
    many = pd.DataFrame(
        [(n, s, b, 10.0 * (i + 1)) for i, n in enumerate(names) for s in starts for b in ("B2", "B4")],
        columns=["account", "interval_start", "node", "mw"],
    )

    class WithManyAccounts:
        """The scenario with other positions."""

        def __init__(self) -> None:
            self.tables = {**solved.scenario.tables, "positions": many}

        def __getattr__(self, name: str) -> object:
            return getattr(solved.scenario, name)

    scenario = WithManyAccounts()
    settlement = settle(solved.run, scenario, write=False)  # type: ignore[arg-type]
    solves = solved.run.table("solves")
    statement = build_statement(
        settlement,
        solved.run,
        scenario,  # type: ignore[arg-type]
        solves,
        accounts=None,
        included=list(solved.scenario.hashes),
        filtered=[],
        written_at=datetime(2026, 3, 20, tzinfo=UTC),
    )
    rows = exhibit_rows(settlement.rows, pd.Series(np.full(len(settlement.rows), "2026-03-07 HE21")))
    file = tmp_path_factory.mktemp("page") / "claim.html"
    file.write_text(claim_page(statement, rows), encoding="utf-8")
    return file


def test_prints_on_one_page(browser: Any, page_file: Path, tmp_path: Path) -> None:
    with opened(browser, page_file) as page:
        page.pdf(path=str(tmp_path / "claim.pdf"), prefer_css_page_size=True)
    content = (tmp_path / "claim.pdf").read_bytes()
    assert len(re.findall(rb"/Type\s*/Page\b(?!s)", content)) == 1
    box = re.search(rb"/MediaBox\s*\[0 0 ([\d.]+) ([\d.]+)\]", content)
    assert box is not None
    assert [float(x) for x in box.groups()] == pytest.approx([595, 842], abs=1.5)


@pytest.mark.parametrize("size", ["phone", "desktop"])
@pytest.mark.parametrize("scheme", ["light", "dark"])
def test_reads_on_any_screen(browser: Any, page_file: Path, size: str, scheme: str) -> None:
    with opened(browser, page_file, size=size, scheme=scheme) as page:
        assert page.evaluate("document.documentElement.scrollWidth") <= SIZES[size][0]
        narrowest = page.evaluate(
            "Math.min(...[...document.querySelectorAll('td.name, th.name')].map(cell => cell.clientWidth))"
        )
        assert narrowest > 60
        for part in ("body", ".soft", ".kicker", "td.sum"):
            assert contrast(page, part) >= 4.5


def test_tables_are_reached_by_keyboard(browser: Any, page_file: Path) -> None:
    with opened(browser, page_file, size="phone") as page:
        reached = []
        for _step in range(4):
            page.keyboard.press("Tab")
            reached.append(page.evaluate("document.activeElement.getAttribute('aria-label')"))
        assert reached == ["Amounts by account", "Largest rows", "Other references", "Certificate"]


def contrast(page: Any, selector: str) -> float:
    """Return the WCAG contrast ratio of an element's text against the page."""
    colours = page.evaluate(
        "s => [getComputedStyle(document.querySelector(s)).color, getComputedStyle(document.body).backgroundColor]",
        selector,
    )
    levels = []
    for colour in colours:
        parts = np.array([float(x) for x in re.findall(r"[\d.]+", colour)[:3]]) / 255.0
        linear = np.where(parts <= 0.04045, parts / 12.92, ((parts + 0.055) / 1.055) ** 2.4)
        levels.append(float(linear @ np.array([0.2126, 0.7152, 0.0722])))
    return (max(levels) + 0.05) / (min(levels) + 0.05)
