"""One made-up week for all tests of the report."""

from __future__ import annotations

from pathlib import Path

import pytest

from lmpgap.report.render import write_weekly_report
from lmpgap.report.view import WeeklyView, build_view
from tests.report.synthetic import SyntheticRun, synthetic_run


def view_of(run: SyntheticRun) -> WeeklyView:
    return build_view(run.tables, run.scenario, run.manifest, run.sentences)


@pytest.fixture(scope="session")
def run() -> SyntheticRun:
    return synthetic_run()


@pytest.fixture(scope="session")
def view(run: SyntheticRun) -> WeeklyView:
    return view_of(run)


@pytest.fixture(scope="session")
def report(view: WeeklyView, tmp_path_factory: pytest.TempPathFactory) -> Path:
    return write_weekly_report(view, tmp_path_factory.mktemp("report") / "week.html")
