"""A browser that reports everything a page must not do: requests beyond the file, console messages, errors.

Run as a script to take pictures of a report:

    python -m tests.report.browser REPORT.html FOLDER
"""

from __future__ import annotations

import sys
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

CHROMIUM = Path("/usr/bin/chromium")
ARGUMENTS = [
    "--no-sandbox",
    "--disable-gpu",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
    "--no-first-run",
]
SIZES = {"phone": (375, 812), "desktop": (1280, 900)}


@dataclass
class Watch:
    """What a page did that it should not."""

    requests: list[str] = field(default_factory=list)
    messages: list[str] = field(default_factory=list)

    def attach(self, page: Any) -> None:
        page.on(
            "request",
            lambda request: None if request.url.startswith("file:") else self.requests.append(request.url[:200]),
        )
        page.on("console", lambda message: self.messages.append(f"{message.type}: {message.text[:400]}"))
        page.on("pageerror", lambda error: self.messages.append(f"error: {error}"))

    def assert_silent(self) -> None:
        assert self.requests == []
        assert self.messages == []


@contextmanager
def chromium() -> Iterator[Any]:
    """Start the browser; yields it."""
    from playwright.sync_api import sync_playwright

    with sync_playwright() as playwright:
        browser = playwright.chromium.launch(executable_path=str(CHROMIUM), args=ARGUMENTS)
        try:
            yield browser
        finally:
            browser.close()


@contextmanager
def opened(
    browser: Any,
    path: Path,
    *,
    size: tuple[int, int] = SIZES["desktop"],
    scheme: str = "light",
    touch: bool = False,
    wait: bool = True,
) -> Iterator[tuple[Any, Watch]]:
    """Open a file; yields the page, ready for use if it has a script to wait for, and the watch on it."""
    context = browser.new_context(
        viewport={"width": size[0], "height": size[1]}, color_scheme=scheme, has_touch=touch, locale="en-US"
    )
    try:
        page = context.new_page()
        watch = Watch()
        watch.attach(page)
        page.goto(path.resolve().as_uri())
        if wait:
            page.wait_for_selector("html[data-ready=yes]", state="attached")
        yield page, watch
    finally:
        context.close()


def draw_all(page: Any) -> None:
    """Scroll through the page until every picture is drawn."""
    for slot in page.eval_on_selector_all(".plot", "plots => plots.map(plot => plot.dataset.slot)"):
        page.locator(f".plot[data-slot={slot}]").scroll_into_view_if_needed()
        page.wait_for_selector(f".plot[data-slot={slot}][data-ready=yes]")
    page.evaluate("document.documentElement.style.scrollBehavior = 'auto'; window.scrollTo(0, 0)")


def between(page: Any, first: str, last: str) -> dict[str, float]:
    """Return the part of the page from one element to another, with a little room above and below."""
    page.evaluate("window.scrollTo(0, 0)")
    top = page.locator(first).bounding_box()["y"] - 12
    end = page.locator(last).bounding_box()
    return {"x": 0, "y": top, "width": page.viewport_size["width"], "height": end["y"] + end["height"] + 12 - top}


def take_pictures(browser: Any, path: Path, folder: Path, schemes: tuple[str, ...] = ("light", "dark")) -> list[Path]:
    """Write full-page screenshots at phone and desktop size per scheme, the opening view, the map, and an A4 PDF."""
    folder.mkdir(parents=True, exist_ok=True)
    written = []
    for scheme in schemes:
        for name, size in SIZES.items():
            with opened(browser, path, size=size, scheme=scheme) as (page, watch):
                draw_all(page)
                target = folder / f"{name}-{scheme}.png"
                page.screenshot(path=target, full_page=True)
                written.append(target)
                if name == "desktop" and scheme == "light":
                    target = folder / "opening.png"
                    page.screenshot(path=target)
                    written.append(target)
                    target = folder / "where.png"
                    page.screenshot(
                        path=target, full_page=True, clip=between(page, "#console", "#picture-map .reading")
                    )
                    written.append(target)
                    target = folder / "print.pdf"
                    page.pdf(path=target, prefer_css_page_size=True, print_background=True)
                    written.append(target)
                watch.assert_silent()
    return written


if __name__ == "__main__":
    with chromium() as started:
        for picture in take_pictures(started, Path(sys.argv[1]), Path(sys.argv[2])):
            sys.stdout.write(f"{picture}\n")
