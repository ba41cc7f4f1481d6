"""Deadlines by the analyst's own rule, and days of 23 and 25 hours."""

from __future__ import annotations

from datetime import date

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from lmpgap.errors import DataError
from lmpgap.scenario.settings import Settlement as SettlementSettings
from lmpgap.settlement.deadline import DeadlineRule, days_left
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

DAYS = st.dates(date(2020, 1, 1), date(2035, 12, 31))


@pytest.mark.parametrize(
    ("rule", "day", "deadline"),
    [
        (DeadlineRule(days=10), date(2026, 3, 2), date(2026, 3, 12)),
        (DeadlineRule(days=0), date(2026, 3, 2), date(2026, 3, 2)),
        # Monday 2 March 2026 and five business days: Monday 9 March.
        (DeadlineRule(days=5, counted="business"), date(2026, 3, 2), date(2026, 3, 9)),
        # From a Saturday the first business day after it is day one.
        (DeadlineRule(days=1, counted="business"), date(2026, 3, 7), date(2026, 3, 9)),
        (DeadlineRule(days=1, counted="business"), date(2026, 3, 6), date(2026, 3, 9)),
        (
            DeadlineRule(days=1, counted="business", holidays=(date(2026, 3, 9),)),
            date(2026, 3, 6),
            date(2026, 3, 10),
        ),
    ],
)
def test_deadline_by_hand(rule: DeadlineRule, day: date, deadline: date) -> None:
    assert rule.deadline(day) == deadline
    assert rule.days_left(day, deadline) == 0


@pytest.mark.parametrize(
    ("counted", "today", "left"),
    [
        ("calendar", date(2026, 3, 6), 6),
        ("calendar", date(2026, 3, 13), -1),
        ("business", date(2026, 3, 6), 4),  # Mon, Tue, Wed, Thu
        ("business", date(2026, 3, 7), 4),
        ("business", date(2026, 3, 12), 0),
        ("business", date(2026, 3, 13), -1),
        ("business", date(2026, 3, 16), -2),
    ],
)
def test_days_left_by_hand(counted: str, today: date, left: int) -> None:
    """Operating date Monday 2 March 2026; the deadline is Thursday 12 March by both counts."""
    rule = DeadlineRule(days=10 if counted == "calendar" else 8, counted=counted)  # type: ignore[arg-type]
    assert rule.deadline(date(2026, 3, 2)) == date(2026, 3, 12)
    assert rule.days_left(date(2026, 3, 2), today) == left


@given(day=DAYS, days=st.integers(0, 60), today=DAYS)
def test_days_left_is_negative_exactly_when_the_deadline_has_passed(day: date, days: int, today: date) -> None:
    for rule in (DeadlineRule(days=days), DeadlineRule(days=days, counted="business")):
        assert (rule.days_left(day, today) < 0) == (today > rule.deadline(day))


@pytest.mark.parametrize("change", [{"days": -1}, {"counted": "lunar"}, {"counted_from": "rumour"}])
def test_impossible_rules_are_refused(change: dict[str, object]) -> None:
    with pytest.raises(DataError, match="deadline"):
        DeadlineRule(**{"days": 5, **change})  # type: ignore[arg-type]


def test_rule_in_words() -> None:
    rule = DeadlineRule(days=1, counted="business", counted_from="published", label="our rule")
    assert rule.sentence == "our rule: 1 business day after the date the price was last published"


@pytest.mark.parametrize(("day", "hours"), [("2026-03-08", 23), ("2026-11-01", 25), ("2026-06-01", 24)])
def test_operating_dates_are_local_and_have_as_many_hours_as_the_clock(day: str, hours: int) -> None:
    zone = "America/Boise"
    first = pd.Timestamp(day, tz=zone).tz_convert("UTC")
    starts = hourly(str(first.tz_localize(None)), hours)
    table = days_left(DeadlineRule(days=3), starts, time_zone=zone, today=date(2026, 1, 1))
    assert table["operating_date"].tolist() == [pd.Timestamp(day)]
    assert table["intervals"].tolist() == [hours]
    one_more = hourly(str(first.tz_localize(None)), hours + 1)
    assert len(days_left(DeadlineRule(days=3), one_more, time_zone=zone, today=None)) == 2


@pytest.mark.parametrize(("day", "hours"), [("2026-03-08", 23), ("2026-11-01", 25)])
def test_intervals_not_dates_drive_the_money(day: str, hours: int) -> None:
    """A position of 1 MW all day and a loss component 1 $/MWh too high: as many dollars as the day has hours."""
    zone = "America/Boise"
    starts = hourly(str(pd.Timestamp(day, tz=zone).tz_convert("UTC").tz_localize(None)), hours)
    world = make_world(
        ("A", "B"),
        starts,
        positions=position_frame([("a", s, "B", 1.0) for s in starts]),
        posted=posted_frame(starts, ("A", "B"), {"energy": np.array([[40.0]]), "loss": np.array([[0.0, 1.0]])}),
        settlement=SettlementSettings(deadline_days=10, label="rule"),
        time_zone=zone,
    )
    run = FakeRun(split_frame(starts, ("A", "B"), "ac", energy=40.0, factor=np.ones(2)), solve_frame(starts, "ac"))
    settlement = settle(run, world, today=date(2026, 3, 9))
    assert settlement.claims["amount"].tolist() == pytest.approx([hours])
    assert settlement.deadlines["amount"].tolist() == pytest.approx([hours])
    assert settlement.deadlines["operating_date"].tolist() == [pd.Timestamp(day)]


def test_published_dates_are_those_of_the_latest_version() -> None:
    starts = hourly("2026-03-02T08:00", 2)
    posted = posted_frame(starts, ("A", "B"), {"energy": np.array([[40.0]]), "loss": np.array([[0.0, 1.0]])})
    posted["published_at"] = pd.Timestamp("2026-03-03T12:00:00Z")
    later = posted.assign(version=2, published_at=pd.Timestamp("2026-03-11T12:00:00Z"))
    both = pd.concat([posted, later[later["interval_start"] == starts[1]]], ignore_index=True)
    both["published_at"] = both["published_at"].astype("datetime64[us, UTC]")
    world = make_world(
        ("A", "B"),
        starts,
        positions=position_frame([("a", s, "B", 1.0) for s in starts]),
        posted=both,
        settlement=SettlementSettings(deadline_days=10, counted_from="published"),
    )
    run = FakeRun(split_frame(starts, ("A", "B"), "ac", energy=40.0, factor=np.ones(2)), solve_frame(starts, "ac"))
    deadlines = settle(run, world, today=date(2026, 3, 9)).deadlines
    # One date, two publications: the earlier one decides.
    assert deadlines["deadline"].tolist() == [pd.Timestamp("2026-03-13")]
    assert deadlines["days_left"].tolist() == [4]


def test_unknown_publication_gives_no_deadline() -> None:
    starts = hourly("2026-03-02", 2)
    rule = DeadlineRule(days=10, counted_from="published")
    table = days_left(rule, starts, time_zone="UTC", today=date(2026, 3, 9))
    assert table["deadline"].isna().all()
    assert table["days_left"].isna().all()
