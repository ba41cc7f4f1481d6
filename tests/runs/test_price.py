"""Runs: nothing solved twice, nothing lost, and the same result whoever solves it."""

import os
import signal
import subprocess
import sys
import textwrap
import time
from pathlib import Path

import pandas as pd
import pytest

from lmpgap.errors import LmpgapError, RunFolderError
from lmpgap.runs import interval as interval_module
from lmpgap.runs.folder import RunFolder
from lmpgap.runs.price import price
from lmpgap.runs.schema import SOLVED_TABLES
from lmpgap.runs.summary import summarise_run
from lmpgap.scenario.read import read_scenario
from tests.support.scenarios import change_load, hourly_scenario

ROOT = Path(__file__).parents[2]
FAST = ("dc", "dc-loss")


@pytest.fixture
def scenario(tmp_path: Path) -> Path:
    return hourly_scenario(tmp_path / "scenario", hours=6)


def tables(folder: RunFolder) -> dict[str, pd.DataFrame]:
    """All solved tables without the seconds, which no two runs share."""
    result = {}
    for name in SOLVED_TABLES:
        frame = folder.table(name)
        result[name] = frame.drop(columns=[c for c in frame.columns if c.endswith("_seconds")])
    return result


def assert_same(one: RunFolder, other: RunFolder) -> None:
    """Bit-identical: no tolerance."""
    left, right = tables(one), tables(other)
    for name in SOLVED_TABLES:
        pd.testing.assert_frame_equal(left[name], right[name], check_exact=True, obj=name)


@pytest.fixture
def count_solves(monkeypatch: pytest.MonkeyPatch) -> list[str]:
    """Names of the formulations that are really solved."""
    solved: list[str] = []
    real = interval_module.solve_planned

    def counting(space, name, inputs, start):
        solved.append(name)
        return real(space, name, inputs, start)

    monkeypatch.setattr(interval_module, "solve_planned", counting)
    return solved


def test_every_interval_and_formulation_is_there_and_certified(scenario: Path, tmp_path: Path) -> None:
    folder = price(read_scenario(scenario), tmp_path / "run")
    solves = folder.table("solves")
    assert len(solves) == 6 * 4
    assert set(solves["verdict"]) <= {"certified", "exact", "close"}
    prices = folder.table("prices")
    assert len(prices) == 6 * 4 * 14
    parts = ["energy_component", "congestion_component", "loss_component", "reactive_component"]
    assert (prices["lmp"] - prices[parts].sum(axis=1)).abs().max() < 1e-6
    assert (solves["price_residual"] < 1e-3).all()
    contributions = folder.table("contributions").groupby(["interval_start", "formulation", "bus", "component"])
    total = contributions["amount"].sum().unstack("component", fill_value=0.0)
    wide = prices.set_index(["interval_start", "formulation", "bus"]).join(total).fillna(0.0)
    for component in ("congestion", "reactive"):
        if component in wide:
            assert (wide[component] - wide[f"{component}_component"]).abs().max() < 1e-6
    summary = summarise_run(folder)
    assert list(summary["formulation"]) == ["dc", "dc-loss", "soc", "ac"]
    assert (summary["usable"] == 6).all()


def test_the_audit_says_what_the_linear_dispatch_leaves_missing(scenario: Path, tmp_path: Path) -> None:
    """Common practice (no source): lossless generation equals load, so an AC grid lacks the losses, roughly."""
    folder = price(read_scenario(scenario), tmp_path / "run")
    audit, solves = folder.table("audit"), folder.table("solves")
    found = audit.pivot_table(index=["formulation", "interval_start"], columns="finding", values="value")
    missing = found["missing-power"]
    losses = solves.set_index(["formulation", "interval_start"])["losses_mw"]
    assert len(missing) == 12
    assert (missing["dc"] > 0.9 * losses["ac"]).all()
    assert (missing["dc-loss"].abs() < 0.2 * missing["dc"]).all()
    assert (found.loc["dc-loss", "repair-cost"] > -1e-3).all()
    assert found.loc["dc", "repair-cost"].isna().all(), "only dc-loss is repaired by default"


def test_the_audit_follows_the_ac_solve(scenario: Path, tmp_path: Path) -> None:
    """A revised hour takes its audit with it, and the other hours keep theirs."""
    price(read_scenario(scenario), tmp_path / "run")
    change_load(scenario, hour=3, factor=1.05)
    revised = price(read_scenario(scenario), tmp_path / "run")
    assert_same(revised, price(read_scenario(scenario), tmp_path / "fresh"))


def test_money_balances_in_every_interval(scenario: Path, tmp_path: Path) -> None:
    money = price(read_scenario(scenario), tmp_path / "run").table("money")
    amounts = money.set_index(["interval_start", "formulation", "basis", "item"])["amount"].unstack("item")
    payments = amounts.xs("total", level="basis")["load payments"]
    for basis in ("components", "constraints"):
        remainder = amounts.xs(basis, level="basis")["remainder"].abs()
        assert (remainder <= 1e-4 * payments.abs()).all(), basis


def test_a_second_call_solves_nothing(scenario: Path, tmp_path: Path, count_solves: list[str]) -> None:
    first = price(read_scenario(scenario), tmp_path / "run", formulations=FAST)
    assert len(count_solves) == 12
    before = tables(first)
    price(read_scenario(scenario), tmp_path / "run", formulations=FAST)
    assert len(count_solves) == 12
    assert all(before[name].equals(after) for name, after in tables(first).items())


def test_a_revised_input_solves_only_what_it_touches(scenario: Path, tmp_path: Path, count_solves: list[str]) -> None:
    price(read_scenario(scenario), tmp_path / "run", formulations=FAST)
    change_load(scenario, hour=3, factor=1.1)
    count_solves.clear()
    revised = price(read_scenario(scenario), tmp_path / "run", formulations=FAST)
    assert count_solves == ["dc", "dc-loss"]
    assert_same(revised, price(read_scenario(scenario), tmp_path / "fresh", formulations=FAST))


def test_money_side_inputs_never_cause_a_solve(scenario: Path, tmp_path: Path, count_solves: list[str]) -> None:
    price(read_scenario(scenario), tmp_path / "run", formulations=FAST)
    count_solves.clear()
    (scenario / "hubs.csv").write_text("hub,bus,weight\nH,B1,0.5\nH,B2,0.5\n")
    (scenario / "positions.csv").write_text("account,interval_start,node,mw\nA,2026-03-07T00:00:00-07:00,H,10\n")
    (scenario / "posted.csv").write_text("interval_start,node,lmp\n2026-03-07T00:00:00-07:00,B1,20.00\n")
    price(read_scenario(scenario), tmp_path / "run", formulations=FAST)
    assert count_solves == []


def test_a_formulation_can_be_added(scenario: Path, tmp_path: Path, count_solves: list[str]) -> None:
    """The verdict on the relaxation needs the AC solution: adding `ac` judges `soc` anew, and leaves `dc` alone."""
    early = price(read_scenario(scenario), tmp_path / "run", formulations=("dc", "soc"), audit=False)
    assert set(early.table("solves", formulation="soc")["verdict"]) == {"not verified"}
    count_solves.clear()
    later = price(read_scenario(scenario), tmp_path / "run", formulations=("ac",), audit=False)
    assert set(count_solves) == {"soc", "ac"}
    assert "not verified" not in set(later.table("solves")["verdict"])
    assert_same(
        later, price(read_scenario(scenario), tmp_path / "fresh", formulations=("dc", "soc", "ac"), audit=False)
    )


def test_the_ac_result_does_not_depend_on_its_company(scenario: Path, tmp_path: Path) -> None:
    alone = price(read_scenario(scenario), tmp_path / "alone", formulations=("ac",)).table("prices")
    together = price(read_scenario(scenario), tmp_path / "together").table("prices", formulation="ac")
    pd.testing.assert_frame_equal(alone, together, check_exact=True)


def test_other_settings_in_one_folder_are_refused_by_name(scenario: Path, tmp_path: Path) -> None:
    price(read_scenario(scenario), tmp_path / "run", formulations=("dc",))
    toml = scenario / "scenario.toml"
    toml.write_text(toml.read_text().replace('susceptance = "impedance"', 'susceptance = "reactance"'))
    with pytest.raises(RunFolderError, match=r"dc\.susceptance: 'impedance' in the folder, 'reactance' now"):
        price(read_scenario(scenario), tmp_path / "run", formulations=("dc",))


def test_an_unknown_formulation_is_named(scenario: Path, tmp_path: Path) -> None:
    with pytest.raises(LmpgapError, match="acdc is not a formulation"):
        price(read_scenario(scenario), tmp_path / "run", formulations=("acdc",))


def test_an_infeasible_hour_does_not_stop_the_others(scenario: Path, tmp_path: Path) -> None:
    change_load(scenario, hour=2, factor=20.0)
    folder = price(read_scenario(scenario), tmp_path / "run", formulations=FAST)
    solves = folder.table("solves")
    bad = solves[solves["verdict"] == "uncertified"]
    assert set(bad["status"]) == {"infeasible"}
    assert bad["interval_start"].nunique() == 1
    assert bad["reasons"].str.contains("smallest change that makes it feasible: .* of load at B").all()
    assert len(folder.table("prices")) == 5 * 2 * 14


def test_workers_and_chunks_do_not_change_a_bit(tmp_path: Path) -> None:
    scenario = hourly_scenario(tmp_path / "scenario", hours=10)
    one = price(read_scenario(scenario), tmp_path / "one")
    two = price(read_scenario(scenario), tmp_path / "two", workers=2)
    assert len(list((two.path / "ledger").iterdir())) > len(list((one.path / "ledger").iterdir()))
    assert_same(one, two)


def test_a_killed_run_goes_on_where_it_stopped(tmp_path: Path, count_solves: list[str]) -> None:
    scenario = hourly_scenario(tmp_path / "scenario", hours=60)
    script = textwrap.dedent(
        f"""
        from lmpgap.runs.price import price
        from lmpgap.scenario.read import read_scenario
        price(read_scenario({str(scenario)!r}), {str(tmp_path / "run")!r}, formulations=("dc", "dc-loss"))
        """
    )
    process = subprocess.Popen([sys.executable, "-c", script], cwd=ROOT)
    ledger = tmp_path / "run" / "ledger"
    deadline = time.monotonic() + 60
    while process.poll() is None and time.monotonic() < deadline:
        if ledger.is_dir() and any(ledger.glob("*.json")):
            process.send_signal(signal.SIGKILL)
            break
        time.sleep(0.002)
    process.wait(timeout=60)
    survived = RunFolder(tmp_path / "run").table("solves")
    assert 0 < len(survived) < 120, "the kill must fall between the first and the last chunk"
    price(read_scenario(scenario), tmp_path / "run", formulations=FAST)
    assert len(count_solves) == 120 - len(survived)
    assert_same(RunFolder(tmp_path / "run"), price(read_scenario(scenario), tmp_path / "fresh", formulations=FAST))


def test_a_clock_set_back_during_a_run_changes_nothing(
    scenario: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Keys and progress do not look at the wall clock; it only dates the manifest."""
    from datetime import UTC, datetime

    from lmpgap.runs import price as price_module

    moments = iter([datetime(2026, 11, 1, 8, 30, tzinfo=UTC), datetime(2025, 1, 1, tzinfo=UTC)])

    class Clock(datetime):
        @classmethod
        def now(cls, tz=None):
            return next(moments)

    monkeypatch.setattr(price_module, "datetime", Clock)
    price(read_scenario(scenario), tmp_path / "run", formulations=("dc",))
    later = price(read_scenario(scenario), tmp_path / "run", formulations=FAST)
    monkeypatch.undo()
    assert later.manifest["updated"].startswith("2025-01-01")
    assert_same(later, price(read_scenario(scenario), tmp_path / "fresh", formulations=FAST))


def _die_once(marker: str) -> None:
    """Kill this worker the first time it is asked to solve."""
    if not os.path.exists(marker):
        open(marker, "w").close()
        os.kill(os.getpid(), signal.SIGKILL)


def test_a_chunk_whose_worker_dies_is_done_again(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    from lmpgap.runs import price as price_module

    scenario = hourly_scenario(tmp_path / "scenario", hours=8)
    marker = str(tmp_path / "died")
    real = price_module._named_chunk

    def dying(*arguments):
        _die_once(marker)
        return real(*arguments)

    monkeypatch.setattr(price_module, "_named_chunk", dying)
    survived = price(read_scenario(scenario), tmp_path / "run", formulations=FAST, workers=2)
    monkeypatch.undo()
    assert os.path.exists(marker), "no worker died: the test would prove nothing"
    assert_same(survived, price(read_scenario(scenario), tmp_path / "fresh", formulations=FAST))
