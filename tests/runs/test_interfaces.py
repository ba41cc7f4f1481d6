"""Interfaces: weighted sums of flows, limited in both directions, hour by hour, from the files to the run tables."""

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

CHEAP, DEAR = 20.0, 35.0
FORWARD, TIGHTER, REVERSE, OPEN = range(4)


@pytest.fixture(scope="module")
def run(tmp_path_factory: pytest.TempPathFactory) -> RunFolder:
    """Cheap hydro in the west; load in the east, once in the west while hydro is out; line B is drawn backwards."""
    limits = ((80.0, 60.0), (50.0, 60.0), (80.0, 60.0), (500.0, 500.0))
    folder = write_scenario(
        tmp_path_factory.mktemp("interfaces") / "scenario",
        buses=buses("West", "East", low=0.95, high=1.05),
        branches=[branch("A", ("West", "East"), r=1e-5), branch("B", ("East", "West"), r=1e-5)],
        interfaces=[
            {"interface": "Gate", "branch": "A", "weight": 1.0},
            {"interface": "Gate", "branch": "B", "weight": -1.0},
        ],
        interface_limits=[
            {"interface": "Gate", "limit_mw": forward, "reverse_limit_mw": reverse, "interval_start": HOURS[hour]}
            for hour, (forward, reverse) in enumerate(limits)
        ],
        resources=[
            resource("Hydro", "West", 200.0),
            resource("Oil", "West", 200.0),
            resource("Gas", "East", 200.0),
        ],
        offers=[offer("Hydro", 200.0, CHEAP), offer("Oil", 200.0, 90.0), offer("Gas", 200.0, DEAR)],
        loads=loads({"East": (120.0, 120.0, 0.0, 120.0), "West": (0.0, 0.0, 100.0, 0.0)}),
        outages=[
            {"kind": "resource", "id": "Hydro", "first_interval": HOURS[REVERSE], "last_interval": HOURS[REVERSE]}
        ],
    )
    return run_of(folder)


@pytest.mark.parametrize("name", FORMULATIONS)
@pytest.mark.parametrize(
    ("hour", "direction", "limit", "value", "price"),
    [
        (FORWARD, "forward", 80.0, 80.0, {"West": CHEAP, "East": DEAR}),
        (TIGHTER, "forward", 50.0, 50.0, {"West": CHEAP, "East": DEAR}),
        (REVERSE, "reverse", 60.0, 60.0, {"West": 90.0, "East": DEAR}),
    ],
    ids=["forward", "tighter the next hour", "reverse"],
)
def test_the_limit_of_the_hour_binds_in_its_direction(
    run: RunFolder, name: str, hour: int, direction: str, limit: float, value: float, price: dict[str, float]
) -> None:
    (row,) = at_hour(run, "constraints", name, hour).query("kind == 'interface'").to_dict("records")
    assert row["constraint"] == f"interface Gate {direction}"
    assert (row["limit"], row["unit"], row["at_penalty"]) == (limit, "MW", False)
    assert row["value"] == pytest.approx(value, abs=1e-3)
    assert row["shadow_price"] == pytest.approx(abs(price["East"] - price["West"]), abs=0.05)
    found = at_hour(run, "prices", name, hour).set_index("bus")["lmp"]
    assert found.to_dict() == pytest.approx(price, abs=0.05)
    flows = at_hour(run, "flows", name, hour).set_index("branch")["mw_at_from"]
    assert flows["A"] - flows["B"] == pytest.approx(value if direction == "forward" else -value, abs=1e-3)
    assert at_hour(run, "solves", name, hour)["verdict"].iloc[0] in USABLE_VERDICTS


@pytest.mark.parametrize("name", FORMULATIONS)
def test_a_wide_limit_leaves_one_price(run: RunFolder, name: str) -> None:
    assert at_hour(run, "constraints", name, OPEN).query("kind == 'interface'").empty
    assert at_hour(run, "prices", name, OPEN)["lmp"].to_list() == pytest.approx([CHEAP, CHEAP], abs=0.05)
