"""The index over the weeks: rows, trends, rewriting, and two writers at once."""

from __future__ import annotations

import json
import re
from concurrent.futures import ThreadPoolExecutor
from dataclasses import replace
from pathlib import Path

import pandas as pd
import pytest

import lmpgap.report.index as index_module
from lmpgap.errors import DataError
from lmpgap.report.index import index_html, read_weeks, update_index, week_record
from lmpgap.report.view import WeeklyView
from tests.report.conftest import view_of
from tests.report.synthetic import HOSTILE_NAMES, autumn_week, synthetic_run


@pytest.fixture(scope="module")
def weeks() -> list[WeeklyView]:
    starts = autumn_week()[:168]
    return [view_of(synthetic_run(starts=starts - pd.Timedelta(days=7 * back), seed=back + 1)) for back in (2, 1, 0)]


def test_weeks_stand_latest_first_with_their_figures(weeks: list[WeeklyView], tmp_path: Path) -> None:
    for view in weeks:
        update_index(tmp_path, view, tmp_path / f"{view.hours.starts[0]:%Y-%m-%d} week.html")
    records = read_weeks(tmp_path)
    assert [record.first_interval for record in records] == sorted((r.first_interval for r in records), reverse=True)
    text = (tmp_path / "index.html").read_text(encoding="utf-8")
    assert len(re.findall(r"<tr><th scope=\"row\"><a ", text)) == 3
    assert 'href="2026-10-26%20week.html"' in text
    for view in weeks:
        assert f"{view.main.mean_absolute:.2f}" in text
    assert "src=" not in text


def test_a_rewritten_week_replaces_its_row(weeks: list[WeeklyView], tmp_path: Path) -> None:
    update_index(tmp_path, weeks[0], tmp_path / "old.html")
    update_index(tmp_path, replace(weeks[0], sentences=("Corrected.",)), tmp_path / "new.html")
    records = read_weeks(tmp_path)
    assert len(records) == 1
    assert (records[0].report, records[0].sentence) == ("new.html", "Corrected.")
    assert "old.html" not in (tmp_path / "index.html").read_text(encoding="utf-8")


def test_trends_hold_every_hub_and_account(weeks: list[WeeklyView], tmp_path: Path) -> None:
    for view in weeks:
        update_index(tmp_path, view, tmp_path / "week.html")
    text = (tmp_path / "index.html").read_text(encoding="utf-8")
    latest = weeks[-1]
    for name in (*latest.hubs.hubs.name, *(total.account for total in latest.accounts)):
        assert name in text
    assert text.count("<polyline") == len(latest.hubs.hubs.name) + len(latest.accounts)
    gap = latest.hubs.means["ac"]["lmp"] - latest.hubs.means["dc"]["lmp"]
    record = week_record(latest, "week.html")
    assert list(record.hubs.values()) == pytest.approx(list(gap))


def test_a_single_week_and_an_empty_folder(weeks: list[WeeklyView], tmp_path: Path) -> None:
    assert "Nothing to report" in index_html([])
    update_index(tmp_path, weeks[0], tmp_path / "week.html")
    assert "1 week reported" in (tmp_path / "index.html").read_text(encoding="utf-8")


def test_two_writers_at_once_both_end_up_in_the_page(weeks: list[WeeklyView], tmp_path: Path) -> None:
    with ThreadPoolExecutor(3) as pool:
        list(pool.map(lambda view: update_index(tmp_path, view, tmp_path / "week.html"), weeks))
    assert len(re.findall('<tr><th scope="row"><a ', (tmp_path / "index.html").read_text(encoding="utf-8"))) == 3


def test_a_week_that_arrives_while_the_page_is_made_is_not_lost(
    weeks: list[WeeklyView], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The other writer finishes between this one's reading and its writing: the page is made once more."""
    made = []

    def late(records: list[object]) -> str:
        text = index_html(records)  # type: ignore[arg-type]
        if not made:
            made.append(True)
            update_index(tmp_path, weeks[1], tmp_path / "other.html")
        return text

    monkeypatch.setattr(index_module, "index_html", late)
    update_index(tmp_path, weeks[0], tmp_path / "week.html")
    text = (tmp_path / "index.html").read_text(encoding="utf-8")
    assert "other.html" in text
    assert "week.html" in text


def test_a_damaged_week_is_named(weeks: list[WeeklyView], tmp_path: Path) -> None:
    (tmp_path / "weeks").mkdir()
    (tmp_path / "weeks" / "broken.json").write_text("{")
    (tmp_path / "weeks" / "other.json").write_text(json.dumps({"format": 99}))
    with pytest.raises(DataError) as caught:
        update_index(tmp_path, weeks[0], tmp_path / "week.html")
    assert "broken.json" in str(caught.value)
    assert "other.json" in str(caught.value)


def test_hostile_names_in_the_index(tmp_path: Path) -> None:
    run = synthetic_run(n_bus=8, names=HOSTILE_NAMES)
    run = replace(run, scenario=replace(run.scenario, settings=replace(run.scenario.settings, name=HOSTILE_NAMES[2])))
    view = view_of(run)
    page = update_index(tmp_path, view, tmp_path / 'a"onclick=x<b>.html')
    text = page.read_text(encoding="utf-8")
    assert "<script" not in text
    assert "<img" not in text
    assert '"onclick' not in text
    assert all(file.parent == tmp_path / "weeks" for file in tmp_path.rglob("*.json"))
