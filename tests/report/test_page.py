"""The page as text: complete, self-contained, and deaf to hostile names."""

from __future__ import annotations

import base64
import json
import re
from dataclasses import replace
from html.parser import HTMLParser
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from jinja2 import UndefinedError

from lmpgap.errors import DataError
from lmpgap.report.embed import ArrayStore, compact_matrix, packed_amounts, script_hash
from lmpgap.report.render import environment, weekly_html, write_weekly_report
from lmpgap.report.sweep_page import write_sweep_page
from lmpgap.report.text import MINUS, money, number, percent, plain, plot_text, script_json, small
from lmpgap.report.view import WeeklyView, build_view
from tests.report.conftest import view_of
from tests.report.synthetic import HOSTILE_NAMES, SyntheticRun, synthetic_run


class Elements(HTMLParser):
    """Collects elements with their attributes, and the text of scripts."""

    def __init__(self, text: str) -> None:
        super().__init__(convert_charrefs=True)
        self.elements: list[tuple[str, dict[str, str | None]]] = []
        self.scripts: list[tuple[dict[str, str | None], str]] = []
        self._script: dict[str, str | None] | None = None
        self.feed(text)

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.elements.append((tag, dict(attrs)))
        self._script = dict(attrs) if tag == "script" else None
        if tag == "script":
            self.scripts.append((dict(attrs), ""))

    def handle_endtag(self, tag: str) -> None:
        self._script = None

    def handle_data(self, data: str) -> None:
        if self._script is not None:
            attributes, text = self.scripts[-1]
            self.scripts[-1] = (attributes, text + data)


@pytest.fixture(scope="module")
def page(report: Path) -> Elements:
    return Elements(report.read_text(encoding="utf-8"))


def data_of(page: Elements) -> dict[str, object]:
    return json.loads(next(text for attributes, text in page.scripts if attributes.get("id") == "report-data"))


def test_small_enough_for_fifty_buses(report: Path) -> None:
    assert report.stat().st_size < 8e6


def test_loads_nothing_from_anywhere(page: Elements) -> None:
    for tag, attributes in page.elements:
        for key in ("src", "srcset", "data", "action", "poster"):
            assert key not in attributes, (tag, attributes)
        href = attributes.get("href")
        assert href is None or href.startswith("#") or href == "data:,", (tag, attributes)
        assert not [key for key in attributes if key.startswith("on")], (tag, attributes)
    assert not [tag for tag, _ in page.elements if tag in ("iframe", "object", "embed", "img", "form")]


def test_the_drawing_library_is_embedded_once_and_admitted_by_its_hash(page: Elements) -> None:
    own = [text for attributes, text in page.scripts if not attributes]
    assert len(own) == 2
    assert sum("plotly.js v" in text for _, text in page.scripts) == 1
    policy = next(a["content"] for t, a in page.elements if t == "meta" and a.get("http-equiv"))
    assert policy is not None
    assert "default-src 'none'" in policy
    for text in own:
        assert script_hash(text) in policy


def test_style_loads_no_font_and_no_picture(report: Path) -> None:
    text = report.read_text(encoding="utf-8")
    style = text[text.index("<style>") : text.index("</style>")]
    assert "url(" not in style
    assert "@import" not in style
    assert "@font-face" not in style


def test_sections_stand_in_the_order_of_a_readers_questions(page: Elements) -> None:
    sections = [attributes["id"] for tag, attributes in page.elements if tag == "section"]
    assert sections == [
        "summary", "stakes", "where", "when", "why", "constraints", "losses", "audit", "posted", "settlement",
        "trust", "conventions", "inputs",
    ]  # fmt: skip


def test_every_control_has_a_label_and_every_picture_an_alternative(page: Elements) -> None:
    labelled = {attributes.get("for") for tag, attributes in page.elements if tag == "label"}
    for tag, attributes in page.elements:
        if tag in ("select", "input"):
            assert attributes.get("id") in labelled, attributes
        if "plot" in (attributes.get("class") or "").split():
            assert attributes.get("role") == "img"
            assert attributes.get("aria-label")
    identifiers = [attributes["id"] for _, attributes in page.elements if "id" in attributes]
    assert len(identifiers) == len(set(identifiers))


def test_sentences_and_hashes_are_in_the_page(run: SyntheticRun, report: Path) -> None:
    text = report.read_text(encoding="utf-8")
    for sentence in run.sentences:
        assert sentence in text
    for digest in run.scenario.hashes.values():
        assert digest in text


def test_sections_without_rows_say_so(run: SyntheticRun) -> None:
    scenario = replace(run.scenario, tables={**run.scenario.tables, "posted": pd.DataFrame(), "hubs": pd.DataFrame()})
    text = weekly_html(build_view({"prices": run.tables["prices"]}, scenario, {}, ["One sentence."]))
    for section in ("stakes", "constraints", "audit", "posted", "settlement", "trust"):
        start = text.index(f'<section id="{section}"')
        assert "Nothing to report" in text[start : text.index("</section>", start)], section


def test_an_unfilled_slot_is_an_error() -> None:
    with pytest.raises(UndefinedError):
        environment().get_template("weekly.html.j2").render(pictures={})
    with pytest.raises(UndefinedError):
        environment().from_string("{{ missing }}").render()


def test_embedded_prices_are_those_of_the_table(run: SyntheticRun, view: WeeklyView, page: Elements) -> None:
    data = data_of(page)
    arrays = {attributes["id"]: text for attributes, text in page.scripts if attributes.get("type") == "text/plain"}
    reference = data["prices"]["soc"]["congestion"]
    assert reference["kind"] == "full"
    values = np.frombuffer(base64.b64decode(arrays[reference["id"]]), dtype="<f4").reshape(12, 169)
    prices = run.tables["prices"].query("formulation == 'soc'")
    wide = prices.pivot(index="bus", columns="interval_start", values="congestion_component")
    np.testing.assert_allclose(values, wide.to_numpy(), atol=1e-4)
    assert data["prices"]["dc"]["loss"] == {"kind": "zero"}
    assert data["prices"]["ac"]["energy"]["kind"] == "hour"
    assert data["prices"]["ac"]["lmp"] == {"kind": "sum"}
    assert data["figures"]["heatmap"]["data"][0].get("z") is None


def test_writing_replaces_the_file_in_one_step(view: WeeklyView, tmp_path: Path) -> None:
    target = tmp_path / "new folder" / "week.html"
    assert write_weekly_report(view, target) == target
    first = target.read_text(encoding="utf-8")
    assert write_weekly_report(view, target).read_text(encoding="utf-8") == first
    assert [file.name for file in target.parent.iterdir()] == ["week.html"]


def test_a_file_that_cannot_be_written_is_told_in_words(view: WeeklyView, tmp_path: Path) -> None:
    (tmp_path / "file").write_text("in the way")
    with pytest.raises(DataError, match="cannot be written"):
        write_weekly_report(view, tmp_path / "file" / "week.html")


# --- hostile names ------------------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def hostile_view() -> WeeklyView:
    run = synthetic_run(n_bus=len(HOSTILE_NAMES), names=HOSTILE_NAMES)
    settings = replace(run.scenario.settings, name=HOSTILE_NAMES[0], currency="<b>X</b>")
    scenario = replace(run.scenario, settings=settings, hashes={HOSTILE_NAMES[1]: "0"})
    return view_of(replace(run, scenario=scenario, sentences=HOSTILE_NAMES))


def test_hostile_names_add_no_element_and_end_no_script(hostile_view: WeeklyView, page: Elements) -> None:
    hostile = Elements(weekly_html(hostile_view))
    harmless = {tag for tag, _ in page.elements}
    assert {tag for tag, _ in hostile.elements} <= harmless
    assert len([text for attributes, text in hostile.scripts if not attributes]) == 2
    assert not [a for _, a in hostile.elements for key in a if key.startswith("on")]
    data = data_of(hostile)
    assert data["buses"]["name"][0] == HOSTILE_NAMES[0]


def test_hostile_names_stay_text_in_plotly_labels(hostile_view: WeeklyView) -> None:
    text = weekly_html(hostile_view)
    data = data_of(Elements(text))
    for figure in data["figures"].values():
        for found in re.findall(r"<[^<>]*>", json.dumps(figure, ensure_ascii=False)):
            assert found in ("<br>", "<b>", "</b>", "<extra>", "</extra>"), found
        assert "<b>X" not in json.dumps(figure)


def test_names_are_shortened_isolated_and_disarmed_in_labels() -> None:
    assert plot_text("<b>&</b>") == "&lt;b&gt;&amp;&lt;/b&gt;"
    assert plot_text("a" * 300) == "\u2068" + "a" * 35 + "\u2026\u2069"
    assert plot_text("$a$") == "&#36;a&#36;"
    hebrew = plot_text("\u05e9\u05dc\u05d5\u05dd \u202e123")
    assert hebrew[0] == "\u2068"
    assert hebrew[-1] == "\u2069"
    assert "\u202e" not in hebrew
    assert plain("a\nb\x00c\u2028d") == "a b c d"


def test_json_in_a_script_cannot_end_it() -> None:
    text = script_json({"a": "</script><!--", "b": "\u2028&"})
    assert "<" not in text
    assert "&" not in text
    assert json.loads(text) == {"a": "</script><!--", "b": "\u2028&"}
    with pytest.raises(ValueError, match="JSON"):
        script_json(float("nan"))


# --- small parts --------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("value", "expected"),
    [(1234.5, "1,234.50"), (-0.004, "0.00"), (-3.456, MINUS + "3.46"), (float("nan"), "—"), (float("inf"), "—")],
)
def test_numbers(value: float, expected: str) -> None:
    assert number(value) == expected


def test_signed_numbers_money_and_residuals() -> None:
    assert number(0.0, signed=True) == "0.00"
    assert number(2.0, signed=True) == "+2.00"
    assert money(-1234.4, "USD") == MINUS + "1,234\u00a0USD"
    assert percent(0.979) == "97.9\u00a0%"
    assert small(1.5e-7) == f"1.5e{MINUS}07"
    assert small(float("inf")) == "∞"


def test_matrices_are_kept_in_the_smallest_form() -> None:
    store = ArrayStore()
    assert compact_matrix(np.full((2, 3), np.nan, dtype=np.float32), store) == {"kind": "missing"}
    assert compact_matrix(np.zeros((2, 3), dtype=np.float32), store) == {"kind": "zero"}
    same = np.tile(np.float32([1, 2, np.nan]), (2, 1))
    assert compact_matrix(same, store)["kind"] == "hour"
    same[1, 0] = 9
    assert compact_matrix(same, store)["kind"] == "full"
    assert [len(base64.b64decode(text)) for _, text in store.blocks] == [12, 24]


@pytest.mark.parametrize("largest", [0.02, 142.21, 3000.0])
def test_packed_amounts_come_back_to_a_fraction_of_a_cent(largest: float) -> None:
    values = np.linspace(-largest, largest, 1001).astype(np.float32)
    store = ArrayStore()
    reference = packed_amounts(values, store)
    raw = np.frombuffer(base64.b64decode(store.blocks[0][1]), dtype=np.uint8).reshape(-1, 3).astype(np.int32)
    whole = raw[:, 0] | raw[:, 1] << 8 | raw[:, 2] << 16
    whole = np.where(whole >= 2**23, whole - 2**24, whole)
    np.testing.assert_allclose(whole * reference["step"], values, atol=3e-4)


def test_the_sweep_page_stands_alone(run: SyntheticRun, tmp_path: Path) -> None:
    path = write_sweep_page(run.tables["sweep"], "A <b>name</b>", "USD", tmp_path / "sweep.html")
    page = Elements(path.read_text(encoding="utf-8"))
    assert not [a for _, a in page.elements if "src" in a]
    figures = json.loads(next(text for a, text in page.scripts if a.get("id") == "figures"))
    assert set(figures) == {"prices", "losses"}
    assert [trace["name"] for trace in figures["prices"]["data"]] == ["dc", "dc-loss", "soc"]
    with pytest.raises(DataError, match="no sweep"):
        write_sweep_page(run.tables["sweep"].iloc[:0], "A", "USD", path)
