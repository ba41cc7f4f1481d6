"""Transmission rights: congestion only, options floored at zero, losses left open."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from lmpgap.settlement.options import SettlementOptions
from lmpgap.settlement.result import Settlement
from lmpgap.settlement.rights import by_holder
from lmpgap.settlement.settle import settle
from tests.settlement.world import (
    FakeRun,
    hourly,
    make_world,
    position_frame,
    posted_frame,
    solve_frame,
    split_frame,
)

BUSES = ("Source", "Middle", "Sink")
HOURS = hourly("2026-01-01", 2)
FACTOR = np.array([0.95, 1.0, 1.05])


def right(kind: str = "obligation", source: str = "Source", sink: str = "Sink", start: object = pd.NaT) -> pd.DataFrame:
    frame = pd.DataFrame(
        {"holder": ["h"], "source": [source], "sink": [sink], "mw": [10.0], "kind": [kind], "interval_start": [start]}
    )
    frame["interval_start"] = pd.to_datetime(frame["interval_start"], utc=True).astype("datetime64[us, UTC]")
    return frame


def settled(rights: pd.DataFrame, congestion: np.ndarray, posted: np.ndarray, minutes: int = 60) -> Settlement:
    """Settle rights with factors 0.95/1/1.05 at an energy price of 40 $/MWh on both sides."""
    world = make_world(
        BUSES,
        HOURS,
        positions=position_frame([("p", HOURS[0], "Middle", 1.0)]),
        posted=posted_frame(
            HOURS, BUSES, {"energy": np.array([[40.0]]), "loss": 40.0 * (FACTOR - 1.0)[None, :], "congestion": posted}
        ),
        rights=rights,
        hubs=pd.DataFrame({"hub": ["Hub", "Hub"], "bus": ["Middle", "Sink"], "weight": [1.0, 1.0]}),
        minutes=minutes,
    )
    run = FakeRun(
        split_frame(HOURS, BUSES, "ac", energy=40.0, factor=FACTOR, congestion=congestion), solve_frame(HOURS, "ac")
    )
    return settle(run, world, options=SettlementOptions(posted_reference="scenario"))


CONGESTION = np.array([[-3.0, 0.0, 3.0], [4.0, 0.0, -4.0]])


def test_obligation_pays_both_ways_and_option_only_where_positive() -> None:
    """By hand: spreads of +6 and -8 $/MWh on 10 MW."""
    for kind, expected in (("obligation", [60.0, -80.0]), ("option", [60.0, 0.0])):
        table = settled(right(kind), CONGESTION, CONGESTION).rights
        assert table["amount_published"].tolist() == pytest.approx(expected)
        assert table["amount_posted"].tolist() == pytest.approx(expected)
        assert table["amount_reference"].tolist() == pytest.approx(expected)
        # The loss component of the path: 40 x (1.05 - 0.95) = 4 $/MWh, whatever the right pays.
        assert table["losses_left_open"].tolist() == pytest.approx([40.0, 40.0])


def test_posted_against_reference_congestion() -> None:
    table = settled(right(), CONGESTION, CONGESTION + np.array([0.0, 0.0, 0.5])).rights
    assert table["difference"].tolist() == pytest.approx([5.0, 5.0])
    holder = by_holder(table).iloc[0]
    assert (holder["rows"], holder["left_out"]) == (2, 0)
    assert holder["difference"] == pytest.approx(10.0)


def test_quarter_hours_hubs_and_single_intervals() -> None:
    table = settled(right(sink="Hub", start=HOURS[0]), CONGESTION, CONGESTION, minutes=15).rights
    assert table["interval_start"].tolist() == [HOURS[0]]
    assert table["amount_posted"].tolist() == pytest.approx([10.0 * 0.25 * (1.5 + 3.0)])


def test_unknown_node_is_told() -> None:
    table = settled(right(sink="Nowhere"), CONGESTION, CONGESTION).rights
    assert set(table["status"]) == {"node is not in the scenario"}
    assert table[["amount_published", "amount_posted", "difference"]].isna().all().all()
    holder = by_holder(table).iloc[0]
    assert (holder["rows"], holder["left_out"]) == (0, 2)


def test_no_rights_is_an_empty_table() -> None:
    empty = settled(right().head(0), CONGESTION, CONGESTION)
    assert empty.rights.empty
    assert empty.holders.empty


def test_spread_depends_on_the_reference_as_soon_as_there_are_losses() -> None:
    """Congestion of +1 everywhere is no spread on its own reference, but one on another: 1 x (DF_sink - DF_source)."""
    flat = np.ones((2, 3))
    world = make_world(
        BUSES,
        HOURS,
        positions=position_frame([("p", HOURS[0], "Middle", 1.0)]),
        posted=posted_frame(
            HOURS, BUSES, {"energy": np.array([[40.0]]), "loss": 40.0 * (FACTOR - 1.0)[None, :], "congestion": flat}
        ),
        rights=right(),
    )
    run = FakeRun(split_frame(HOURS, BUSES, "ac", energy=40.0, factor=FACTOR), solve_frame(HOURS, "ac"))
    table = settle(run, world, options=SettlementOptions(posted_reference="unknown")).rights
    assert table["amount_published"].tolist() == pytest.approx([0.0, 0.0], abs=1e-9)
    assert table["amount_posted"].tolist() == pytest.approx([-1.0, -1.0])
