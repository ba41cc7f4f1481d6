"""The report in a browser: what a reader can do, and that nothing goes out or wrong meanwhile."""

from __future__ import annotations

import re
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

from lmpgap.report.figures.places import heatmap_order
from lmpgap.report.figures.reasons import waterfall
from lmpgap.report.index import update_index
from lmpgap.report.render import write_weekly_report
from lmpgap.report.sweep_page import write_sweep_page
from lmpgap.report.text import number
from lmpgap.report.view import WeeklyView
from tests.report.browser import CHROMIUM, SIZES, Watch, chromium, draw_all, opened, take_pictures
from tests.report.conftest import view_of
from tests.report.synthetic import HOSTILE_NAMES, SyntheticRun, autumn_week, synthetic_run

playwright = pytest.importorskip("playwright", reason="playwright is not installed: pip install 'lmpgap[test]'")
pytestmark = [
    pytest.mark.browser,
    pytest.mark.skipif(not CHROMIUM.exists(), reason="chromium is missing: apt-get install -y chromium"),
    # playwright leaves its event loop's sockets to the garbage collector
    pytest.mark.filterwarnings("ignore::ResourceWarning"),
]


@pytest.fixture(scope="module")
def browser() -> Iterator[Any]:
    with chromium() as started:
        yield started


@pytest.fixture(scope="module")
def session(browser: Any, report: Path) -> Iterator[tuple[Any, Watch]]:
    with opened(browser, report) as (page, watch):
        draw_all(page)
        yield page, watch
        watch.assert_silent()


@pytest.fixture
def page(session: tuple[Any, Watch]) -> Any:
    """The opened report, back at its opening choice."""
    page, watch = session
    page.select_option("#against", "ac")
    page.select_option("#base", "dc")
    page.select_option("#component", "lmp")
    page.fill("#search", "")
    page.locator(".pick").first.click()
    watch.assert_silent()
    return page


def drawn(page: Any, slot: str, code: str) -> Any:
    """Evaluate code on a picture's element, called ``plot``, after bringing it into view."""
    page.locator(f".plot[data-slot={slot}]").scroll_into_view_if_needed()
    page.wait_for_timeout(120)
    return page.evaluate(
        f"(() => {{ const plot = document.querySelector('.plot[data-slot={slot}]'); return {code}; }})()"
    )


def price(run: SyntheticRun, formulation: str, bus: str, start: pd.Timestamp, column: str = "lmp") -> float:
    table = run.tables["prices"]
    row = table[(table["formulation"] == formulation) & (table["bus"] == bus) & (table["interval_start"] == start)]
    return float(row[column].iloc[0])


def set_hour(page: Any, hour: int) -> None:
    page.evaluate(
        "hour => { const s = document.getElementById('hour'); s.value = hour; s.dispatchEvent(new Event('input')); }",
        hour,
    )
    page.wait_for_timeout(120)


def test_opens_at_the_largest_difference(page: Any, view: WeeklyView) -> None:
    readout = page.inner_text("#readout")
    assert view.nodes.name[view.main.worst_bus] in readout
    assert number(view.main.largest, signed=True) in readout
    assert page.inner_text("#hour-label") == view.hours.label[view.main.worst_hour]


def test_script_draws_what_the_figure_functions_draw(page: Any, view: WeeklyView) -> None:
    bus, hour = view.main.worst_bus, view.main.worst_hour
    expected = waterfall(view, bus, hour)
    shown = drawn(page, "waterfall", "plot.data[0].y.concat(plot.data[1].y)")
    np.testing.assert_allclose(shown, [*expected.data[0].y, *expected.data[1].y], atol=1e-3)
    first = drawn(page, "heatmap", "Array.from(plot.data[0].z[0])")
    np.testing.assert_allclose(first, view.cube.difference("dc", "ac")[heatmap_order(view)[0]], atol=1e-3)
    assert drawn(page, "heatmap", "plot.data[0].z.length") == 12
    here = drawn(page, "map", "plot.data[1].marker.color")
    np.testing.assert_allclose(here, view.cube.difference("dc", "ac")[:, hour], atol=1e-3)


def test_hour_slider_moves_every_picture(page: Any, run: SyntheticRun, view: WeeklyView) -> None:
    set_hour(page, 100)
    assert page.inner_text("#hour-label") == view.hours.label[100]
    start = view.hours.starts[100]
    colours = drawn(page, "map", "plot.data[1].marker.color")
    for place in (0, 5, 11):
        bus = view.nodes.bus[place]
        assert colours[place] == pytest.approx(price(run, "ac", bus, start) - price(run, "dc", bus, start), abs=2e-3)
    for slot in ("binding", "shadow", "losses", "verdicts"):
        assert drawn(page, slot, "plot.layout.shapes[0].x0") == 100
    assert drawn(page, "heatmap", "plot.layout.shapes[0].x0") == 99.5


def test_slider_and_buttons_work_from_the_keyboard(page: Any, view: WeeklyView) -> None:
    before = int(page.input_value("#hour"))
    page.focus("#hour")
    page.keyboard.press("ArrowLeft")
    page.wait_for_timeout(120)
    assert int(page.input_value("#hour")) == before - 1
    assert page.get_attribute("#hour", "aria-valuetext") == view.hours.label[before - 1]
    page.focus("#later")
    page.keyboard.press("Enter")
    assert int(page.input_value("#hour")) == before


def test_the_first_tab_stop_skips_to_the_summary(browser: Any, report: Path) -> None:
    with opened(browser, report) as (page, watch):
        page.keyboard.press("Tab")
        assert page.evaluate("document.activeElement.className") == "skip"
        outline = page.evaluate("getComputedStyle(document.activeElement).outlineStyle")
        assert outline != "none"
        watch.assert_silent()


def test_repeated_hour_is_marked(page: Any, view: WeeklyView) -> None:
    place = int(np.flatnonzero(view.hours.repeated)[0])
    set_hour(page, place)
    assert page.inner_text("#hour-label") == "Sun 1 Nov HE02 (second)"


def test_clicking_the_map_selects_the_bus_everywhere(page: Any, view: WeeklyView) -> None:
    drawn(page, "map", "0")
    marks = page.locator(".plot[data-slot=map] .trace.scatter").nth(1).locator("path.point")
    box = marks.nth(7).bounding_box()
    page.mouse.click(box["x"] + box["width"] / 2, box["y"] + box["height"] / 2)
    page.wait_for_timeout(300)
    name = view.nodes.name[7]
    assert page.input_value("#bus") == f"{name} ({view.nodes.bus[7]})"
    assert page.inner_text("#readout").startswith(name)
    assert drawn(page, "profile", "plot.data[2].name") == name
    row = heatmap_order(view).index(7)
    assert drawn(page, "heatmap", "plot.layout.shapes.at(-1).y0") == row - 0.5


def test_clicking_the_heatmap_selects_bus_and_hour(page: Any, run: SyntheticRun, view: WeeklyView) -> None:
    drawn(page, "heatmap", "0")
    box = page.locator(".plot[data-slot=heatmap] .nsewdrag").bounding_box()
    row, hour = 4, 60
    page.mouse.move(box["x"] + box["width"] * (hour + 0.5) / 169, box["y"] + box["height"] * (row + 0.5) / 12)
    page.wait_for_timeout(150)
    tip = page.inner_text("#tip")
    page.mouse.down()
    page.mouse.up()
    page.wait_for_timeout(300)
    bus = heatmap_order(view)[row]
    assert view.nodes.name[bus] in tip
    assert view.hours.label[hour] in tip
    assert page.inner_text("#hour-label") == view.hours.label[hour]
    assert page.inner_text("#readout").startswith(view.nodes.name[bus])
    start = view.hours.starts[hour]
    for formulation in ("dc", "ac"):
        assert f"{formulation} {price(run, formulation, view.nodes.bus[bus], start):.2f}" in page.inner_text("#readout")


def test_price_set_and_component_change_the_figures(page: Any, run: SyntheticRun, view: WeeklyView) -> None:
    page.select_option("#against", "soc")
    page.select_option("#base", "")
    page.select_option("#component", "loss")
    hour = int(page.input_value("#hour"))
    start = view.hours.starts[hour]
    colours = drawn(page, "map", "plot.data[1].marker.color")
    for place in (1, 8):
        expected = price(run, "soc", view.nodes.bus[place], start, "loss_component")
        assert colours[place] == pytest.approx(expected, abs=1e-3)
    assert "soc, loss" in page.inner_text('[data-subject="map"]')
    assert "Choose a second price set" in page.inner_text("#driver-sentence")


def test_driver_sentence_and_table_match_the_table(page: Any, run: SyntheticRun, view: WeeklyView) -> None:
    bus, hour = view.main.worst_bus, view.main.worst_hour
    drivers = run.tables["drivers"].query("base == 'dc' and against == 'ac'")
    own = drivers[(drivers["bus"] == view.nodes.bus[bus]) & (drivers["interval_start"] == view.hours.starts[hour])]
    own = own[own["amount"].abs() >= 0.005].sort_values("amount", key=abs, ascending=False)
    rows = page.locator("#driver-table tbody tr")
    cells = [rows.nth(i).locator("td.figure").inner_text() for i in range(rows.count())]
    assert cells[: len(own)] == [number(float(amount), signed=True) for amount in own["amount"]]
    assert cells[-1] == number(view.main.largest, signed=True)
    sentence = page.inner_text("#driver-sentence")
    assert f"dc is {abs(view.main.largest):.2f} USD/MWh {'below' if view.main.largest > 0 else 'above'} ac" in sentence
    amounts = [float(text) for text in re.findall(r"(?:: |; |less )(\d+\.\d\d)", sentence)]
    signs = [-1 if less else 1 for less in re.findall(r"(?:: |; )(less )?\d+\.\d\d", sentence)]
    total = sum(sign * amount for sign, amount in zip(signs, amounts, strict=True))
    assert total == pytest.approx(abs(view.main.largest), abs=0.006)


def test_search_and_sorting_change_the_rows(page: Any, view: WeeklyView) -> None:
    drawn(page, "heatmap", "0")
    page.fill("#search", "tarn")
    page.wait_for_timeout(200)
    assert page.inner_text("#found") == "2 of 12 buses"
    assert drawn(page, "heatmap", "plot.data[0].z.length") == 2
    page.fill("#search", "")
    page.select_option("#sort", "name")
    names = drawn(page, "heatmap", "plot.layout.yaxis.ticktext")
    assert names == sorted(view.nodes.name)
    page.select_option("#sort", "load")
    first = view.nodes.name[int(np.argmax(view.nodes.load_mw))]
    assert drawn(page, "heatmap", "plot.layout.yaxis.ticktext[0]") == first
    page.select_option("#sort", "zone")


def test_bus_box_finds_by_part_of_a_name(page: Any, view: WeeklyView) -> None:
    page.fill("#bus", "quay")
    page.keyboard.press("Enter")
    page.keyboard.press("Tab")
    assert page.inner_text("#readout").startswith("Amber Quay")


def test_choosing_a_mark_follows_the_constraint(page: Any, view: WeeklyView) -> None:
    drawn(page, "binding", "0")
    mark = page.locator(".plot[data-slot=binding] .trace.scatter").nth(3).locator("path.point").last
    box = mark.bounding_box()
    page.mouse.click(box["x"] + box["width"] / 2, box["y"] + box["height"] / 2)
    page.wait_for_timeout(300)
    last = int(np.flatnonzero(view.constraints.shadow["ac"][3])[-1])
    assert page.input_value("#constraint") == "3"
    assert page.inner_text("#hour-label") == view.hours.label[last]
    shown = drawn(page, "shadow", "Array.from(plot.data[3].y)")
    np.testing.assert_allclose(shown, view.constraints.shadow["ac"][3], rtol=1e-5)


def test_rows_of_a_table_can_be_chosen(page: Any, view: WeeklyView) -> None:
    picks = page.locator("#key-heatmap .pick")
    picks.nth(2).click()
    bus, hour = view.when.chooses[2]
    assert page.inner_text("#readout").startswith(f"{view.nodes.name[bus]}, {view.hours.label[hour]}")


def test_unusable_and_undetermined_prices_are_marked(page: Any, view: WeeklyView) -> None:
    page.select_option("#base", "soc")
    set_hour(page, 5)
    assert "soc: not a price." in page.inner_text("#readout .doubt")
    page.select_option("#base", "dc")
    cell = int(view.inside["dc", "ac"][0])
    page.fill("#bus", view.nodes.bus[cell // view.hours.n])
    page.keyboard.press("Tab")
    set_hour(page, cell % view.hours.n)
    assert "not a divergence" in page.inner_text("#readout")
    symbol = drawn(page, "map", f"plot.data[1].marker.symbol[{cell // view.hours.n}]")
    assert symbol.endswith("-open")


def test_theme_follows_the_system_and_the_button(browser: Any, report: Path) -> None:
    with opened(browser, report, scheme="dark") as (page, watch):
        dark = page.evaluate("getComputedStyle(document.body).backgroundColor")
        assert dark == "rgb(20, 24, 31)"
        assert drawn(page, "ladder", "plot.layout.font.color") == "#eceff4"
        page.click("#theme")
        assert page.evaluate("getComputedStyle(document.body).backgroundColor") == "rgb(253, 252, 249)"
        assert page.inner_text("#theme") == "Dark"
        watch.assert_silent()


def test_nothing_is_wider_than_a_phone(browser: Any, report: Path) -> None:
    with opened(browser, report, size=SIZES["phone"], touch=True) as (page, watch):
        draw_all(page)
        assert page.evaluate("document.documentElement.scrollWidth") <= 375
        for width in page.eval_on_selector_all(".main-svg", "all => all.map(one => one.getBoundingClientRect().right)"):
            assert width <= 376
        watch.assert_silent()


def test_paper_has_tables_and_no_controls(browser: Any, report: Path, tmp_path: Path) -> None:
    with opened(browser, report, scheme="dark") as (page, watch):
        target = tmp_path / "week.pdf"
        page.pdf(path=target, prefer_css_page_size=True, print_background=True)
        pages = len(re.findall(rb"/Type /Page\b", target.read_bytes()))
        assert 10 <= pages <= 30
        page.emulate_media(media="print")
        assert page.locator("#console").is_hidden()
        assert page.locator("#theme").is_hidden()
        for slot in page.eval_on_selector_all(".plot", "plots => plots.map(plot => plot.dataset.slot)"):
            assert page.locator(f"#key-{slot} table").is_visible(), slot
        # every picture was drawn for paper, without having been scrolled to
        assert page.locator(".plot[data-ready=yes]").count() == page.locator(".plot").count()
        assert page.evaluate("getComputedStyle(document.body).backgroundColor") == "rgb(255, 255, 255)"
        watch.assert_silent()


def test_screenshots_at_every_size(browser: Any, report: Path, tmp_path: Path) -> None:
    for picture in take_pictures(browser, report, tmp_path, ("light",)):
        assert picture.stat().st_size > 20_000


def test_hostile_names_do_no_harm(browser: Any, tmp_path: Path) -> None:
    view = view_of(synthetic_run(n_bus=len(HOSTILE_NAMES), names=HOSTILE_NAMES))
    report = write_weekly_report(view, tmp_path / "week.html")
    index = update_index(tmp_path, view, report)
    for path in (report, index):
        with opened(browser, path, wait=path == report) as (page, watch):
            if path == report:
                draw_all(page)
                for place in range(view.nodes.n):
                    page.fill("#bus", view.nodes.bus[place])
                    page.keyboard.press("Tab")
                    drawn(page, "map", "0")
                for part in ("loss", "congestion"):
                    page.select_option("#component", part)
                labels = drawn(
                    page, "heatmap", "Array.from(plot.querySelectorAll('.ytick text')).map(t => t.textContent)"
                )
                assert any("<script>" in label for label in labels)
                assert page.evaluate("document.documentElement.scrollWidth") <= SIZES["desktop"][0]
            assert page.title() != "owned"
            watch.assert_silent()


def test_index_and_sweep_pages_are_silent(
    browser: Any, run: SyntheticRun, view: WeeklyView, report: Path, tmp_path: Path
) -> None:
    index = update_index(tmp_path, view, report)
    with opened(browser, index, wait=False, size=SIZES["phone"]) as (page, watch):
        assert page.locator("#weeks tbody tr").count() == 1
        assert page.evaluate("document.documentElement.scrollWidth") <= 375
        watch.assert_silent()
    sweep = write_sweep_page(run.tables["sweep"], "Kestrel Basin", "USD", tmp_path / "sweep.html")
    with opened(browser, sweep) as (page, watch):
        assert page.locator(".main-svg").count() > 0
        watch.assert_silent()


@pytest.mark.benchmark_suite
def test_two_thousand_buses_are_interactive_within_five_seconds(browser: Any, tmp_path: Path) -> None:
    """2,000 buses x 168 hours: below 40 MB, and ready for use within 5 s of opening."""
    run = synthetic_run(
        n_bus=2000,
        starts=autumn_week()[:168],
        n_constraint=30,
        coordinates=False,
        pairs=(("dc", "ac"), ("dc", "dc-loss"), ("soc", "ac")),
    )
    report = write_weekly_report(view_of(run), tmp_path / "week.html")
    assert report.stat().st_size < 40e6
    with opened(browser, report) as (page, watch):
        assert page.evaluate("performance.now()") < 5000
        begun = time.perf_counter()
        draw_all(page)
        drawn(page, "heatmap", "0")
        page.select_option("#sort", "size")
        page.fill("#search", "ridge")
        assert " of 2000 buses" in page.inner_text("#found")
        assert time.perf_counter() - begun < 20
        watch.assert_silent()
