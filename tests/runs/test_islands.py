"""Islands have an energy price each; a bus that nothing feeds has no price, and the run says why."""

from pathlib import Path

import pytest

from lmpgap.prices.certificate import USABLE_VERDICTS
from lmpgap.runs.folder import RunFolder
from tests.support.small_scenarios import (
    FORMULATIONS,
    HOURS,
    at_hour,
    branch,
    buses,
    loads,
    offer,
    resource,
    run_of,
    write_scenario,
)

PENALTIES = "[penalties]\npower_balance = 3000.0\n"


def islands(folder: Path, settings: str = "") -> Path:
    """Two islands, and a spur on the first that its line leaves behind in the second hour."""
    return write_scenario(
        folder,
        settings,
        buses=buses("North", "South", "Spur", "East", "West"),
        branches=[
            branch("NS", ("North", "South")),
            branch("SS", ("South", "Spur")),
            branch("WE", ("West", "East")),
        ],
        resources=[resource("Hydro", "North", 200.0), resource("Gas", "West", 150.0)],
        offers=[offer("Hydro", 200.0, 10.0), offer("Gas", 150.0, 40.0)],
        loads=loads({"South": (80.0, 80.0), "Spur": (5.0, 5.0), "East": (50.0, 50.0)}),
        outages=[{"kind": "branch", "id": "SS", "first_interval": HOURS[1], "last_interval": HOURS[1]}],
    )


@pytest.fixture(scope="module")
def soft(tmp_path_factory: pytest.TempPathFactory) -> RunFolder:
    return run_of(islands(tmp_path_factory.mktemp("islands") / "soft", PENALTIES))


@pytest.fixture(scope="module")
def hard(tmp_path_factory: pytest.TempPathFactory) -> RunFolder:
    return run_of(islands(tmp_path_factory.mktemp("islands") / "hard"))


@pytest.mark.parametrize("name", FORMULATIONS)
def test_each_island_has_its_own_energy_price(soft: RunFolder, name: str) -> None:
    prices = at_hour(soft, "prices", name, 0).set_index("bus")
    assert prices["energy_component"].to_dict() == pytest.approx(
        {"North": 10.0, "South": 10.0, "Spur": 10.0, "East": 40.0, "West": 40.0}, abs=1e-3
    )
    assert (prices["lmp"] - prices["energy_component"]).abs().max() < 1e-3
    assert set(at_hour(soft, "solves", name, 0)["verdict"]) <= set(USABLE_VERDICTS)


@pytest.mark.parametrize("name", FORMULATIONS)
def test_load_at_a_dead_bus_goes_unserved_at_the_penalty_and_has_no_price(soft: RunFolder, name: str) -> None:
    prices = at_hour(soft, "prices", name, 1).set_index("bus")
    assert set(prices.index) == {"North", "South", "East", "West"}
    assert prices.loc["South", "lmp"] == pytest.approx(10.0, abs=1e-3)
    assert prices.loc["East", "lmp"] == pytest.approx(40.0, abs=1e-3)
    dispatch = at_hour(soft, "dispatch", name, 1).set_index("resource")
    assert dispatch.loc["unserved load at Spur", "mw"] == pytest.approx(5.0)
    assert dispatch.loc["unserved load at Spur", "cost"] == pytest.approx(15_000.0)
    point = at_hour(soft, "operating_point", name, 1).set_index("bus")
    assert point.loc["Spur", "load_mw"] == pytest.approx(0.0)
    (solve,) = at_hour(soft, "solves", name, 1).to_dict("records")
    assert solve["verdict"] in USABLE_VERDICTS
    assert solve["objective"] == pytest.approx(80 * 10 + 50 * 40 + 5 * 3000, rel=1e-6)
    assert solve["losses_mw"] == pytest.approx(0.0, abs=1e-3)
    assert "no price at Spur: no resource in service is connected" in solve["reasons"]


@pytest.mark.parametrize("name", FORMULATIONS)
def test_without_a_penalty_the_hour_has_no_dispatch_and_says_why(hard: RunFolder, name: str) -> None:
    assert len(at_hour(hard, "prices", name, 0)) == 5
    assert at_hour(hard, "prices", name, 1).empty
    (solve,) = at_hour(hard, "solves", name, 1).to_dict("records")
    assert (solve["status"], solve["verdict"]) == ("infeasible", "uncertified")
    assert "no resource in service is connected to the load at Spur" in solve["reasons"]


@pytest.mark.parametrize("name", FORMULATIONS)
def test_money_balances_island_by_island(soft: RunFolder, name: str) -> None:
    money = soft.table("money", formulation=name)
    remainder = money[money["item"] == "remainder"]["amount"].abs()
    payments = money[money["item"] == "load payments"]["amount"]
    assert remainder.max() <= 1e-4 * payments.min()
