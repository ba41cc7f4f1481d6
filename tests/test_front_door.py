"""The library's front door, and the main job from one end to the other."""

import subprocess
import sys
from pathlib import Path

import pandas as pd
import pytest

import lmpgap
from tests.support.scenarios import change_load, hourly_scenario


@pytest.mark.parametrize("name", lmpgap.__all__)
def test_every_public_name_is_there_and_documented(name: str) -> None:
    thing = getattr(lmpgap, name)
    assert name == "__version__" or thing.__doc__


def test_an_unknown_name_is_an_attribute_error() -> None:
    with pytest.raises(AttributeError, match="no attribute 'nonsense'"):
        _ = lmpgap.nonsense


def test_importing_loads_no_solver() -> None:
    script = "import sys, lmpgap; print([m for m in ('numpy', 'pandas', 'casadi', 'clarabel') if m in sys.modules])"
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"


@pytest.fixture(scope="module")
def scenario(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Five buses with a congested line, six hours, posted prices with one planted error, a position, an outage."""
    folder = hourly_scenario(tmp_path_factory.mktemp("weekly") / "scenario", "case5", hours=6)
    start = "2026-03-07T0{}:00:00-07:00"
    run = lmpgap.price(lmpgap.read_scenario(folder), run=folder.parent / "posting", formulations=("dc-loss",))
    prices = run.table("prices")
    posted = pd.DataFrame(
        {
            "interval_start": prices["interval_start"].map(lambda t: t.isoformat()),
            "node": prices["bus"],
            "lmp": prices["lmp"].round(2),
            "energy_component": prices["energy_component"].round(2),
            "congestion_component": prices["congestion_component"].round(2),
            "loss_component": prices["loss_component"].round(2),
        }
    )
    posted.loc[7, "lmp"] += 3.0
    posted.to_csv(folder / "posted.csv", index=False)
    rows = [f"Utility,{start.format(hour)},B2,100" for hour in range(6)]
    (folder / "positions.csv").write_text("account,interval_start,node,mw\n" + "\n".join(rows) + "\n")
    (folder / "hubs.csv").write_text("hub,bus,weight\nCentre,B2,0.5\nCentre,B3,0.5\n")
    return folder


def test_the_main_job(scenario: Path, tmp_path: Path) -> None:
    done = lmpgap.weekly_report(scenario, tmp_path / "run", tmp_path / "out" / "week.html")
    html = done.report.read_text(encoding="utf-8")
    assert len(done.sentences) == 5
    assert html.startswith("<!DOCTYPE html>")
    assert done.index.exists()
    findings = done.run.table("findings")
    assert (findings["kind"] == "identity").sum() == 1, "the planted price that is not the sum of its components"
    drivers = done.run.table("drivers").groupby(["interval_start", "base", "against", "bus"])["amount"].sum()
    differences = done.run.table("differences").set_index(["interval_start", "base", "against", "bus"])["difference"]
    assert (differences - drivers.reindex(differences.index).fillna(0.0)).abs().max() < 1e-6
    assert set(done.run.table("settlement")["account"]) == {"Utility"}
    assert not done.run.table("sweep").empty


def test_an_hour_without_solution_is_in_the_report(scenario: Path, tmp_path: Path) -> None:
    import shutil

    folder = Path(shutil.copytree(scenario, tmp_path / "scenario"))
    change_load(folder, hour=2, factor=10.0)
    done = lmpgap.weekly_report(folder, tmp_path / "run", tmp_path / "week.html")
    solves = done.run.table("solves")
    assert set(solves.loc[solves["verdict"] == "uncertified", "status"]) == {"infeasible"}
    assert "smallest change that makes it feasible" in done.report.read_text(encoding="utf-8")


def test_a_report_that_cannot_be_written_is_told_before_solving(scenario: Path, tmp_path: Path) -> None:
    (tmp_path / "file").write_text("")
    for out, words in ((tmp_path, "is a folder"), (tmp_path / "file" / "week.html", "cannot be written")):
        with pytest.raises(lmpgap.LmpgapError, match=words):
            lmpgap.weekly_report(scenario, tmp_path / "run", out)
    assert not (tmp_path / "run").exists()


def test_compare_keeps_the_pairs_that_are_there(scenario: Path, tmp_path: Path) -> None:
    run = lmpgap.price(lmpgap.read_scenario(scenario), run=tmp_path / "run", formulations=("dc", "dc-loss"))
    lmpgap.compare(run, "dc", "dc-loss")
    lmpgap.compare(run, "posted", "dc-loss")
    lmpgap.compare(run, "dc", "dc-loss")
    stored = run.table("differences")
    pairs = stored.groupby(["base", "against"]).size()
    assert set(pairs.index) == {("dc", "dc-loss"), ("posted", "dc-loss")}
    assert not stored.duplicated(["interval_start", "base", "against", "bus"]).any()
    with pytest.raises(lmpgap.LmpgapError, match="compared with itself"):
        lmpgap.compare(run, "dc", "dc")
    with pytest.raises(lmpgap.LmpgapError, match="no prices of ac"):
        lmpgap.compare(run, "dc", "ac")
