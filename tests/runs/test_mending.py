"""A run folder that lost files, or parts of them, to hands and disks: told when it is read, mended when it is run."""

from __future__ import annotations

import shutil
from pathlib import Path

import pandas as pd
import pytest

from lmpgap.errors import RunFolderError
from lmpgap.runs.folder import RunFolder
from lmpgap.runs.price import price
from lmpgap.runs.schema import SOLVED_TABLES
from lmpgap.scenario.read import read_scenario
from lmpgap.scenario.scenario import Scenario
from tests.support.scenarios import hourly_scenario


@pytest.fixture(scope="module")
def scenario(tmp_path_factory: pytest.TempPathFactory) -> Scenario:
    return read_scenario(hourly_scenario(tmp_path_factory.mktemp("mending") / "scenario", "case3", hours=50))


@pytest.fixture(scope="module")
def whole(scenario: Scenario) -> RunFolder:
    """Three chunks of at most a day each."""
    run = price(scenario, scenario.folder.parent / "run", formulations=("dc",))
    assert len(run.ledger()) == 3
    return run


@pytest.fixture
def damaged(whole: RunFolder, tmp_path: Path) -> RunFolder:
    """A copy to do harm to."""
    return RunFolder(shutil.copytree(whole.path, tmp_path / "run"))


def second_file(run: RunFolder, table: str) -> Path:
    return sorted((run.path / table).iterdir())[1]


def assert_mended(scenario: Scenario, damaged: RunFolder, whole: RunFolder) -> None:
    price(scenario, damaged.path, formulations=("dc",))
    for table in SOLVED_TABLES:
        ours, theirs = damaged.table(table), whole.table(table)
        seconds = [column for column in theirs.columns if column.endswith("_seconds")]
        pd.testing.assert_frame_equal(ours.drop(columns=seconds), theirs.drop(columns=seconds))


@pytest.mark.parametrize("table", SOLVED_TABLES)
def test_a_deleted_file_is_told_and_solved_again(scenario: Scenario, damaged: RunFolder, whole: RunFolder, table: str):
    file = second_file(damaged, table)
    file.unlink()
    with pytest.raises(RunFolderError, match=f"'{table}'.*lacks 1 of 3 files.*{file.name}: run `lmpgap price`"):
        damaged.table(table)
    assert_mended(scenario, damaged, whole)


@pytest.mark.parametrize("kept", [0, 1, 400])
def test_a_file_cut_short_is_told_and_solved_again(scenario: Scenario, damaged: RunFolder, whole: RunFolder, kept: int):
    file = second_file(damaged, "prices")
    file.write_bytes(file.read_bytes()[:kept])
    with pytest.raises(RunFolderError, match=r"'prices' of .* cannot be read .*: run `lmpgap price` or `weekly` again"):
        damaged.table("prices")
    assert_mended(scenario, damaged, whole)


@pytest.mark.parametrize("content", [None, "", '{"2026', "[]"])
def test_a_lost_part_of_the_ledger_is_solved_again_and_nothing_is_there_twice(
    scenario: Scenario, damaged: RunFolder, whole: RunFolder, content: str | None
):
    file = second_file(damaged, "ledger")
    if content is None:
        file.unlink()
        # What no finished solve accounts for is not part of the table.
        assert len(damaged.table("solves")) < len(whole.table("solves"))
    else:
        file.write_text(content)
    assert_mended(scenario, damaged, whole)


def test_a_whole_folder_is_left_alone(whole: RunFolder):
    assert whole.mend() == 0
