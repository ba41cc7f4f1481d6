"""`price` with losses taken as given, and `ageing`."""

import json
from pathlib import Path

import pytest

from lmpgap.runs.folder import RunFolder
from lmpgap.runs.price import price
from lmpgap.scenario.read import read_scenario
from tests.cli.test_command_line import run_main
from tests.support.scenarios import hourly_scenario


@pytest.fixture(scope="module")
def week(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, Path]:
    folder = hourly_scenario(tmp_path_factory.mktemp("losses") / "scenario", "case5", hours=4)
    run = price(read_scenario(folder), folder.parent / "run", formulations=("dc-loss", "ac"), audit=False)
    return folder, run.path


@pytest.mark.parametrize(
    ("arguments", "kind", "source"),
    [
        (["--factors-from", "RUN"], "frozen", "case5_pjm, ac"),
        (["--factors-from", "RUN", "--voltages-from", "RUN"], "frozen", "case5_pjm, ac; voltages of case5_pjm, ac"),
        (["--voltages-from", "RUN"], "own", "voltages of case5_pjm, ac"),
    ],
    ids=["factors", "factors and voltages", "voltages"],
)
def test_losses_from_another_run(
    week: tuple[Path, Path], tmp_path: Path, arguments: list[str], kind: str, source: str
) -> None:
    folder, run = week
    given = [str(run) if word == "RUN" else word for word in arguments]
    done = run_main("price", str(folder), "--formulations", "dc-loss", "--run", str(tmp_path / "run"), *given)
    assert done.returncode == 0, done.stderr
    made = RunFolder(tmp_path / "run")
    setting = made.manifest["settings"]["losses"]
    assert (setting["kind"], setting["source"], setting["age_hours"]) == (kind, source, 0.0)
    assert set(made.table("solves")["verdict"]) == {"certified"}


def test_an_age_without_an_operating_point_is_status_1(week: tuple[Path, Path], tmp_path: Path) -> None:
    folder, run = week
    factors = ("--factors-from", str(run), "--factors-age", "24")
    done = run_main("price", str(folder), "--formulations", "dc-loss", "--run", str(tmp_path / "run"), *factors)
    assert done.returncode == 1
    assert "there is no operating point of" in done.stderr


def test_ageing_as_json(week: tuple[Path, Path]) -> None:
    _, run = week
    done = run_main("ageing", str(run), "--ages", "0,2", "--json")
    assert done.returncode == 0, done.stderr
    now, old = json.loads(done.stdout)
    assert (now["age_hours"], old["age_hours"]) == (0.0, 2.0)
    assert now["intervals"] == old["intervals"] == 2
    assert min(old["loss_component"], now["loss_component"]) > 0.0
    assert old["mean_absolute"] != now["mean_absolute"]
    assert run_main("ageing", str(run), "--ages", "now").returncode == 2
