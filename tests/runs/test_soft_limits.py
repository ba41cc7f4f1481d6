"""Limits and load that give way at a penalty, and hours that have no dispatch, through a run folder."""

from pathlib import Path

import pytest

from lmpgap.prices.certificate import USABLE_VERDICTS
from lmpgap.runs.folder import RunFolder
from tests.support.small_scenarios import (
    FORMULATIONS,
    at_hour,
    branch,
    buses,
    loads,
    offer,
    resource,
    run_of,
    write_scenario,
)

PENALTIES = "[penalties]\npower_balance = 4000.0\ntransmission = 1500.0\n"
CHEAP, DEAR = 20.0, 40.0
RATING, LIMIT = 100.0, 90.0


def corridor(folder: Path, settings: str = "") -> Path:
    """Two equal lines from west to east; hours: easy, lines too small, capacity too small."""
    return write_scenario(
        folder,
        settings,
        buses=buses("West", "East", low=0.95, high=1.05),
        branches=[
            branch("A", ("West", "East"), r=0.001, normal_rating_mva=RATING),
            branch("B", ("West", "East"), r=0.001, normal_rating_mva=RATING),
        ],
        interfaces=[{"interface": "Eastward", "branch": name, "weight": 1.0} for name in ("A", "B")],
        interface_limits=[{"interface": "Eastward", "limit_mw": 2 * LIMIT}],
        resources=[resource("Hydro", "West", 400.0), resource("Gas", "East", 50.0)],
        offers=[offer("Hydro", 400.0, CHEAP), offer("Gas", 50.0, DEAR)],
        loads=loads({"East": (100.0, 260.0, 100.0), "West": (0.0, 0.0, 420.0)}, mvar=0.05),
    )


@pytest.fixture(scope="module")
def soft(tmp_path_factory: pytest.TempPathFactory) -> RunFolder:
    return run_of(corridor(tmp_path_factory.mktemp("soft") / "soft", PENALTIES))


@pytest.fixture(scope="module")
def hard(tmp_path_factory: pytest.TempPathFactory) -> RunFolder:
    return run_of(corridor(tmp_path_factory.mktemp("soft") / "hard"))


@pytest.mark.parametrize("name", FORMULATIONS)
def test_an_easy_hour_touches_no_penalty(soft: RunFolder, name: str) -> None:
    assert not at_hour(soft, "constraints", name, 0)["at_penalty"].any()
    assert not at_hour(soft, "dispatch", name, 0)["resource"].str.contains("unserved").any()


@pytest.mark.parametrize("name", FORMULATIONS)
def test_a_limit_that_gives_way_says_so_and_its_shadow_price_is_the_penalty(soft: RunFolder, name: str) -> None:
    """260 MW against an interface of 180 and 50 in the east: it gives way by about 30, the ratings by 5 each."""
    rows = at_hour(soft, "constraints", name, 1)
    interface = rows[rows["kind"] == "interface"].iloc[0]
    assert interface["constraint"] == "interface Eastward forward"
    assert interface["at_penalty"]
    assert interface["shadow_price"] == pytest.approx(1500.0, rel=1e-4)
    assert interface["limit"] == pytest.approx(2 * LIMIT)
    assert interface["value"] == pytest.approx(210.0, abs=3.0)
    thermal = rows[rows["kind"] == "thermal"]
    assert thermal["at_penalty"].any()
    totals = thermal.groupby("monitored")["shadow_price"].sum()
    assert totals.to_dict() == pytest.approx({"A": 1500.0, "B": 1500.0}, rel=1e-4)
    # One more MW in the east exceeds the interface and, as a whole, the two ratings.
    price = at_hour(soft, "prices", name, 1).set_index("bus")
    assert price.loc["West", "lmp"] == pytest.approx(CHEAP, abs=1e-2)
    assert price.loc["East", "lmp"] == pytest.approx(CHEAP + 3000.0, rel=0.02)
    assert at_hour(soft, "solves", name, 1)["verdict"].iloc[0] in USABLE_VERDICTS


@pytest.mark.parametrize("name", FORMULATIONS)
def test_load_that_is_not_served_is_in_the_dispatch_and_sets_the_price(soft: RunFolder, name: str) -> None:
    """520 MW of load, 450 of capacity: the price stops at the balance penalty."""
    dispatch = at_hour(soft, "dispatch", name, 2).set_index("resource")
    unserved = dispatch[dispatch.index.str.startswith("unserved load at ")]
    losses = at_hour(soft, "solves", name, 2)["losses_mw"].iloc[0]
    assert unserved["mw"].sum() == pytest.approx(70.0 + losses, abs=1e-2)
    assert unserved["cost"].sum() == pytest.approx(4000.0 * unserved["mw"].sum(), rel=1e-9)
    assert at_hour(soft, "operating_point", name, 2)["load_mw"].sum() == pytest.approx(450.0 - losses, abs=1e-2)
    assert at_hour(soft, "prices", name, 2)["lmp"].max() == pytest.approx(4000.0, rel=1e-4)
    objective = at_hour(soft, "solves", name, 2)["objective"].iloc[0]
    assert dispatch["cost"].sum() == pytest.approx(objective, rel=1e-6)
    assert at_hour(soft, "solves", name, 2)["verdict"].iloc[0] in USABLE_VERDICTS


@pytest.mark.parametrize("name", FORMULATIONS)
def test_hours_without_a_dispatch_name_what_is_in_the_way_and_the_run_goes_on(hard: RunFolder, name: str) -> None:
    assert at_hour(hard, "solves", name, 0)["verdict"].iloc[0] in USABLE_VERDICTS
    line, capacity = (at_hour(hard, "solves", name, hour).iloc[0] for hour in (1, 2))
    for solve in (line, capacity):
        assert (solve["status"], solve["verdict"]) == ("infeasible", "uncertified")
        assert "smallest change that makes it feasible: " in solve["reasons"]
    assert "of load at East is not served" in line["reasons"] or "interface Eastward forward" in line["reasons"]
    assert "capacity in service is 450 MW and fixed load 520 MW" in capacity["reasons"]
    assert "of load at West is not served" in capacity["reasons"]
    assert set(hard.table("prices", formulation=name)["interval_start"].dt.hour) == {6}


def test_a_rating_that_must_run_output_cannot_pass_is_named_with_its_amount(tmp_path: Path) -> None:
    """60 MW that must run, a line of 50 and no load on its side: only the rating can give way by less than all."""
    folder = write_scenario(
        tmp_path / "scenario",
        buses=buses("West", "East"),
        branches=[branch("Only", ("West", "East"), normal_rating_mva=50.0)],
        resources=[
            {"resource": "Must", "bus": "West", "eco_min_mw": 60.0, "eco_max_mw": 60.0},
            resource("Gas", "East", 100.0),
        ],
        offers=[offer("Must", 60.0, 5.0), offer("Gas", 100.0, 40.0)],
        loads=loads({"East": (80.0, 80.0)}),
    )
    run = run_of(folder, ("dc", "dc-loss"))
    for name in ("dc", "dc-loss"):
        reasons = at_hour(run, "solves", name, 1)["reasons"].iloc[0]
        assert "the limit Only forward is widened by 10 MW" in reasons or (
            "10 MW of must-run output at West is taken away" in reasons
        )


@pytest.mark.parametrize("name", ["soc", "ac"])
def test_reactive_load_that_nobody_can_supply_is_named(tmp_path: Path, name: str) -> None:
    """200 Mvar at the end of a line that cannot carry them within the voltage band; the linear models see nothing."""
    folder = write_scenario(
        tmp_path / "scenario",
        buses=buses("West", "East", low=0.95, high=1.05),
        branches=[branch("Only", ("West", "East"), r=0.01, x=0.2)],
        resources=[resource("Hydro", "West", 200.0, q_min_mvar=-100.0, q_max_mvar=300.0)],
        offers=[offer("Hydro", 200.0, 20.0)],
        loads=[*loads({"East": (80.0, 80.0)}, mvar=0.1)[:1], *loads({"East": (80.0, 80.0)}, mvar=2.5)[1:]],
    )
    run = run_of(folder, ("dc", name))
    assert set(run.table("solves", formulation="dc")["verdict"]) == {"certified"}
    assert at_hour(run, "solves", name, 0)["verdict"].iloc[0] in ("certified", "not verified")
    solve = at_hour(run, "solves", name, 1).iloc[0]
    assert solve["status"] == "infeasible"
    assert "Mvar are supplied at East" in solve["reasons"] or "voltage East lower" in solve["reasons"]


@pytest.mark.parametrize("name", FORMULATIONS)
def test_money_balances_with_limits_and_load_at_their_penalties(soft: RunFolder, name: str) -> None:
    for hour in range(3):
        money = at_hour(soft, "money", name, hour).set_index(["basis", "item"])["amount"]
        for basis in ("components", "constraints"):
            parts = money[basis].drop("remainder").sum()
            assert abs(money["total", "surplus"] - parts) <= 1e-4 * abs(money["total", "load payments"])
    beyond = at_hour(soft, "money", name, 1).set_index(["basis", "item"])["amount"]["constraints", "beyond limits"]
    # 30 MW over the interface and 10 MW over both ratings, roughly, at 1500 $/MWh.
    assert beyond == pytest.approx(1500.0 * (30.0 + 10.0), rel=0.05)
