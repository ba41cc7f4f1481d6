"""Rankings, profiles and the ladder, checked by hand on small tables."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import pandas as pd
import pytest

from lmpgap.divergence.compare import compare
from lmpgap.divergence.labels import IntervalLabels
from lmpgap.divergence.ladder import certified_intervals, closest_to, ladder
from lmpgap.divergence.ranking import (
    duration_curve,
    hour_profile,
    rank_buses,
    rank_constraints,
    rank_intervals,
    rank_money,
)
from tests.divergence.synthetic import random_run, run_of

HOURS = pd.date_range("2026-03-02T07:00:00Z", periods=2, freq="h").as_unit("us")


def table(values: list[list[float]], inside: list[list[bool]] | None = None) -> pd.DataFrame:
    """Differences by interval (rows) and bus (columns)."""
    grid = np.array(values)
    return pd.DataFrame(
        {
            "interval_start": np.repeat(HOURS[: len(grid)], grid.shape[1]),
            "base": "dc",
            "against": "ac",
            "bus": [f"B{i}" for i in range(grid.shape[1])] * len(grid),
            "difference": grid.ravel(),
            "inside_interval": np.zeros(grid.size, bool) if inside is None else np.ravel(inside),
        }
    )


def test_buses_and_intervals_are_ranked_by_mean_size():
    rows = table([[1.0, -4.0], [3.0, 0.0]])
    buses = rank_buses(rows).set_index("bus")
    assert buses.index.tolist() == ["B0", "B1"]  # equal sizes keep their order
    assert buses["mean_absolute"].tolist() == [2.0, 2.0]
    assert buses.loc["B1", "mean"] == -2.0
    assert buses.loc["B1", "largest"] == -4.0
    assert buses.loc["B0", "largest_at"] == HOURS[1]
    intervals = rank_intervals(rows)
    assert intervals["interval_start"].tolist() == list(HOURS)
    assert intervals["mean_absolute"].tolist() == [2.5, 1.5]
    assert intervals["largest_at"].tolist() == ["B1", "B0"]


def test_what_is_inside_an_interval_counts_as_nothing():
    rows = table([[1.0, -4.0]], [[False, True]])
    assert rank_buses(rows)["mean_absolute"].tolist() == [1.0, 0.0]
    assert rank_intervals(rows)["mean_absolute"].tolist() == [0.5]


def test_withdrawal_pays_a_price_that_is_higher_and_injection_is_paid():
    rows = table([[1.0, -4.0], [3.0, 0.0]])
    positions = pd.DataFrame(
        {
            "account": ["Load", "Load", "Plant", "Hub", "Lost"],
            "interval_start": [HOURS[0], HOURS[1], HOURS[0], HOURS[0], HOURS[0]],
            "node": ["B0", "B0", "B1", "West", "B9"],
            "mw": [10.0, 20.0, -5.0, 8.0, 1.0],
        }
    )
    hubs = pd.DataFrame({"hub": ["West", "West"], "bus": ["B0", "B1"], "weight": [3.0, 1.0]})
    money = rank_money(rows, positions, 0.5, hubs).set_index("account")
    assert money["amount"].to_dict() == {"Load": 35.0, "Plant": 10.0, "Hub": 0.5 * 8.0 * -0.25, "Lost": 0.0}
    assert money.index[0] == "Load"
    assert money["unpriced"].to_dict() == {"Load": 0, "Plant": 0, "Hub": 0, "Lost": 1}
    assert money.loc["Load", "largest_at"] == HOURS[1]


def test_constraints_rank_by_their_net_effect():
    rng = np.random.default_rng(2)
    run = run_of(random_run(rng, "dc"), random_run(rng, "ac"))
    comparison = compare(run, run, base="dc", against="ac")
    ranked = rank_constraints(comparison.drivers, len(comparison.differences))
    name = ranked["constraint"].iloc[0]
    drivers = comparison.drivers
    rows = drivers[(drivers["constraint"] == name) & (drivers["driver"] != "reactive")]
    net = rows.groupby(["interval_start", "bus"])["amount"].sum()
    assert ranked["mean_absolute"].iloc[0] == pytest.approx(net.abs().sum() / 15)
    assert abs(ranked["largest"].iloc[0]) == pytest.approx(net.abs().max())
    assert ranked["mean_absolute"].is_monotonic_decreasing
    assert "B1" not in set(ranked["constraint"])  # a source of reactive prices is no constraint


def test_profile_by_local_hour_and_duration():
    rows = table([[1.0, -4.0], [3.0, 0.0]])
    profile = hour_profile(rows, IntervalLabels(time_zone="America/Boise")).set_index("hour_ending")
    assert profile["mean"].to_dict() == {1: -1.5, 2: 1.5}
    assert profile["mean_absolute"].to_dict() == {1: 2.5, 2: 1.5}
    curve = duration_curve(rows, points=4)
    assert curve["divergence"].tolist() == [4.0, 3.0, 1.0, 0.0]


def solves(**verdicts: list[str]) -> pd.DataFrame:
    return pd.DataFrame(
        [
            (hour, name, 1.0, verdict)
            for name, column in verdicts.items()
            for hour, verdict in zip(HOURS, column, strict=True)
        ],
        columns=["interval_start", "formulation", "objective", "verdict"],
    )


def test_the_closest_formulation_is_judged_on_certified_hours_only():
    def prices(name: str, values: list[float]) -> pd.DataFrame:
        return pd.DataFrame({"interval_start": HOURS, "formulation": name, "bus": "B0", "lmp": values})

    run = pd.concat([prices("dc", [10.0, 90.0]), prices("dc-loss", [18.0, 20.0]), prices("ac", [20.0, 20.0])])
    good = solves(dc=["certified", "uncertified"], **{"dc-loss": ["certified"] * 2}, ac=["certified"] * 2)
    assert certified_intervals(good, ["dc", "ac"]).tolist() == [HOURS[0]]
    judged = closest_to(run, good)
    assert judged["formulation"].tolist() == ["dc-loss", "dc"]
    assert judged["mean_absolute_error"].tolist() == [2.0, 10.0]
    assert judged["relative"].tolist() == [0.1, 0.5]
    assert judged["excluded"].tolist() == [1, 1]
    assert judged["best_intervals"].tolist() == [1, 0]
    assert closest_to(run, good, truth="soc").empty


def test_each_step_of_the_ladder_names_its_assumption():
    rng = np.random.default_rng(4)
    names = ("dc", "dc-loss", "ac")
    run = run_of(*(random_run(rng, name, n_interval=2) for name in names))
    parts = [compare(run, run, base=a, against=b) for a, b in pairwise(names)]
    differences = pd.concat([part.differences for part in parts])
    drivers = pd.concat([part.drivers for part in parts])
    steps = ladder(
        differences, drivers, solves(dc=["certified"] * 2, **{"dc-loss": ["certified"] * 2}, ac=["certified"] * 2)
    )
    assert steps[["base", "against"]].to_numpy().tolist() == [["dc", "dc-loss"], ["dc-loss", "ac"]]
    assert steps["assumption"].iloc[0] == "losses are left out"
    energy = parts[0].drivers.query("driver == 'energy price'")["amount"].abs().sum() / 10
    assert steps["energy price"].iloc[0] == pytest.approx(energy)
    assert steps["mean_absolute"].iloc[1] == pytest.approx(parts[1].differences["difference"].abs().mean())
