"""Price-sensitive load, no-load cost and resources out of service, from the files to the run tables."""

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

LOW, FULL, OUTAGE = 0, 1, 2


@pytest.fixture(scope="module")
def run(tmp_path_factory: pytest.TempPathFactory) -> RunFolder:
    """Hydro 100 MW at 20, gas 100 MW at 50, a retired unit; bids of 40 MW at 45 and 30 MW at 15, both at East.

    Fixed load of 50 MW leaves hydro for the first bid only; 95 MW of it leaves 5 MW for the first bid, which then
    sets the price; in the last hour hydro is out and gas serves 50 MW of fixed load and no bid.
    """
    folder = write_scenario(
        tmp_path_factory.mktemp("market") / "scenario",
        buses=buses("West", "East", low=0.95, high=1.05),
        branches=[branch("Line", ("West", "East"), r=1e-5, x=0.02)],
        resources=[
            resource("Hydro", "West", 100.0, no_load_cost=300.0),
            resource("Gas", "East", 100.0, no_load_cost=700.0, eco_min_mw=0.0),
            {**resource("Retired", "East", 500.0, no_load_cost=9000.0), "in_service": False},
        ],
        offers=[offer("Hydro", 100.0, 20.0), offer("Gas", 100.0, 50.0), offer("Retired", 500.0, 1.0)],
        bids=[
            {"bus": "East", "segment": 1, "mw": 40.0, "price": 45.0},
            {"bus": "East", "segment": 2, "mw": 30.0, "price": 15.0},
        ],
        loads=loads({"East": (50.0, 95.0, 50.0)}),
        outages=[{"kind": "resource", "id": "Hydro", "first_interval": HOURS[OUTAGE], "last_interval": HOURS[OUTAGE]}],
    )
    return run_of(folder)


@pytest.mark.parametrize("name", FORMULATIONS)
@pytest.mark.parametrize(
    ("hour", "served", "price", "no_load"),
    [(LOW, 40.0, 20.0, 1000.0), (FULL, 5.0, 45.0, 1000.0), (OUTAGE, 0.0, 50.0, 700.0)],
    ids=["bid worth serving", "bid sets the price", "resource out"],
)
def test_load_is_served_up_to_its_price(
    run: RunFolder, name: str, hour: int, served: float, price: float, no_load: float
) -> None:
    losses = 0.05
    (solve,) = at_hour(run, "solves", name, hour).to_dict("records")
    assert solve["verdict"] in USABLE_VERDICTS
    prices = at_hour(run, "prices", name, hour).set_index("bus")["lmp"]
    assert prices["East"] == pytest.approx(price, abs=0.1)
    dispatch = at_hour(run, "dispatch", name, hour).set_index("resource")
    assert dispatch.loc["bid at East 1", "mw"] == pytest.approx(-served, abs=2 * losses)
    assert dispatch.loc["bid at East 2", "mw"] == pytest.approx(0.0, abs=1e-3)
    assert dispatch.loc["bid at East 1", "cost"] == pytest.approx(45.0 * dispatch.loc["bid at East 1", "mw"])
    fixed = 95.0 if hour == FULL else 50.0
    load = at_hour(run, "operating_point", name, hour).set_index("bus")["load_mw"]
    assert load["East"] == pytest.approx(fixed + served, abs=2 * losses)
    generation = 50.0 * 50.0 if hour == OUTAGE else 20.0 * min(fixed + served, 100.0)
    assert solve["objective"] == pytest.approx(generation - 45.0 * served + no_load, abs=5.0)
    assert dispatch["cost"].sum() == pytest.approx(solve["objective"], abs=1e-3)


@pytest.mark.parametrize("name", FORMULATIONS)
def test_what_is_out_of_service_has_no_row_and_no_cost(run: RunFolder, name: str) -> None:
    for hour in (LOW, OUTAGE):
        rows = set(at_hour(run, "dispatch", name, hour)["resource"])
        assert "Retired" not in rows
        assert ("Hydro" in rows) == (hour != OUTAGE)
    idle = at_hour(run, "dispatch", name, LOW).set_index("resource").loc["Gas"]
    assert idle["mw"] == pytest.approx(0.0, abs=1e-3)
    assert idle["cost"] == pytest.approx(700.0, abs=0.1), "a resource in service has its no-load cost"


@pytest.mark.parametrize("name", FORMULATIONS)
def test_served_bids_pay_like_any_load(run: RunFolder, name: str) -> None:
    money = at_hour(run, "money", name, LOW).set_index(["basis", "item"])["amount"]
    price = at_hour(run, "prices", name, LOW).set_index("bus")["lmp"]["East"]
    assert money["total", "load payments"] == pytest.approx(90.0 * price, rel=1e-6)
    for basis in ("components", "constraints"):
        assert abs(money[basis, "remainder"]) <= 1e-4 * money["total", "load payments"]
