"""Losses taken as given: a table of delivery factors, and operating points of another run."""

from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from lmpgap.errors import DataError, RunFolderError
from lmpgap.runs.factor_age import factor_age
from lmpgap.runs.folder import RunFolder
from lmpgap.runs.given_losses import FactorTable, FrozenPoints, VoltageProfiles
from lmpgap.runs.price import price
from lmpgap.scenario.read import read_scenario
from tests.support.scenarios import hourly_scenario


@pytest.fixture(scope="module")
def week(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, RunFolder]:
    """Five buses, one congested line, eight hours; priced under dc-loss and ac."""
    folder = hourly_scenario(tmp_path_factory.mktemp("week") / "scenario", "case5", hours=8)
    run = price(read_scenario(folder), folder.parent / "run", formulations=("dc-loss", "ac"))
    return folder, run


def lmp(run: RunFolder) -> pd.DataFrame:
    prices = run.table("prices", formulation="dc-loss")
    return prices.pivot(index="interval_start", columns="bus", values="lmp")


def test_losses_frozen_at_its_own_points_reproduce_the_prices(week: tuple[Path, RunFolder], tmp_path: Path) -> None:
    """At its own base the frozen dispatch has the prices of the convex one."""
    folder, run = week
    scenario = read_scenario(folder)
    frozen = price(
        scenario,
        tmp_path / "frozen",
        formulations=("dc-loss",),
        losses=FrozenPoints(scenario, run, formulation="dc-loss"),
    )
    assert (lmp(frozen) - lmp(run)).abs().max().max() < 5e-3
    assert frozen.manifest["settings"]["losses"]["kind"] == "frozen"
    assert set(frozen.table("solves")["verdict"]) == {"certified"}


def test_prices_move_with_the_age_of_the_operating_point(week: tuple[Path, RunFolder]) -> None:
    folder, run = week
    table = factor_age(read_scenario(folder), run, [0.0, 1.0, 4.0])
    assert list(table["intervals"]) == [4, 4, 4]
    moved = table["loss_component"].to_numpy()
    assert moved[2] > moved[1] > 1e-4
    with pytest.raises(DataError, match="no interval"):
        factor_age(read_scenario(folder), run, [48.0])


def test_an_age_without_an_operating_point_is_told(week: tuple[Path, RunFolder], tmp_path: Path) -> None:
    folder, run = week
    scenario = read_scenario(folder)
    losses = FrozenPoints(scenario, run, age=pd.Timedelta(hours=1))
    with pytest.raises(DataError, match="no operating point of 2026-03-07T06:00"):
        price(scenario, tmp_path / "old", formulations=("dc-loss",), losses=losses)


def test_a_table_of_factors_gives_losses_once(week: tuple[Path, RunFolder], tmp_path: Path) -> None:
    """Losses at the table's factors are those of the flows, not twice of them."""
    _, run = week
    prices = run.table("prices", formulation="dc-loss")
    factor = 1.0 + prices["loss_component"] / prices["energy_component"]
    table = pd.DataFrame(
        {
            "interval_start": prices["interval_start"].map(lambda t: t.isoformat()),
            "bus": prices["bus"],
            "delivery_factor": factor.round(6),
        }
    )
    with_table = hourly_scenario(tmp_path / "scenario", "case5", hours=8)
    table.to_csv(with_table / "delivery_factors.csv", index=False)
    scenario = read_scenario(with_table)
    given = price(scenario, tmp_path / "run", formulations=("dc-loss",), losses=FactorTable(scenario))
    own_losses = run.table("solves", formulation="dc-loss")["losses_mw"].to_numpy()
    losses = given.table("solves")["losses_mw"].to_numpy()
    assert losses == pytest.approx(own_losses, rel=0.05)
    assert np.abs(lmp(given) - lmp(run)).max().max() < 0.2
    with pytest.raises(RunFolderError, match=r"losses\.kind: 'table' in the folder, 'own' now"):
        price(scenario, tmp_path / "run", formulations=("dc-loss",))


def test_gaps_in_the_table_are_all_named(week: tuple[Path, RunFolder], tmp_path: Path) -> None:
    folder = hourly_scenario(tmp_path / "scenario", "case5", hours=2)
    rows = [f"2026-03-07T0{h}:00:00-07:00,B{b},1.0" for h in (0, 1) for b in (1, 2, 3, 4, 5) if (h, b) != (1, 4)]
    (folder / "delivery_factors.csv").write_text("interval_start,bus,delivery_factor\n" + "\n".join(rows[:-1]) + "\n")
    with pytest.raises(DataError) as caught:
        FactorTable(read_scenario(folder))
    assert [fault.column for fault in caught.value.faults] == ["B4", "B5"]


def test_losses_at_the_voltages_of_the_ac_dispatch(tmp_path: Path) -> None:
    """High voltages carry the same power with less current: losses fall by about the square, towards those of AC."""
    folder = hourly_scenario(tmp_path / "scenario", "case14", hours=3)
    scenario = read_scenario(folder)
    run = price(scenario, tmp_path / "run", formulations=("dc-loss", "ac"), audit=False)
    profiled = price(
        scenario, tmp_path / "profiled", formulations=("dc-loss",), losses=VoltageProfiles(scenario, run), audit=False
    )
    flat, exact = (run.table("solves", formulation=name)["losses_mw"].to_numpy() for name in ("dc-loss", "ac"))
    losses = profiled.table("solves")["losses_mw"].to_numpy()
    voltage = run.table("operating_point", formulation="ac")["v_pu"]
    assert voltage.mean() > 1.02
    assert losses / flat == pytest.approx(np.full(3, 1 / voltage.mean() ** 2), rel=0.02)
    assert (np.abs(losses - exact) < 0.5 * np.abs(flat - exact)).all()
    assert set(profiled.table("solves")["verdict"]) == {"certified"}
    assert profiled.manifest["settings"]["losses"]["source"] == "voltages of case14_ieee, ac"
    combined = VoltageProfiles(scenario, run, FrozenPoints(scenario, run, formulation="dc-loss"))
    assert combined.setting.kind == "frozen"
    frozen = price(scenario, tmp_path / "frozen", formulations=("dc-loss",), losses=combined, audit=False)
    assert frozen.table("solves")["losses_mw"].to_numpy() == pytest.approx(losses, rel=0.01)


def test_voltages_that_do_not_exist_are_told(week: tuple[Path, RunFolder], tmp_path: Path) -> None:
    folder, run = week
    scenario = read_scenario(folder)
    linear = price(scenario, tmp_path / "linear", formulations=("dc",), positions=[0])
    with pytest.raises(DataError, match="no solves of ac or soc to take voltages from"):
        VoltageProfiles(scenario, linear)
    other = read_scenario(hourly_scenario(tmp_path / "other", "case14", hours=2))
    with pytest.raises(DataError, match="another network"):
        VoltageProfiles(other, run)
    longer = read_scenario(hourly_scenario(tmp_path / "longer", "case5", hours=9))
    with pytest.raises(DataError, match="no voltages of 2026-03-07T15:00"):
        VoltageProfiles(longer, run).at(8)
