"""The axis of intervals and hour-ending labels, on days of 23, 24 and 25 hours."""

from __future__ import annotations

from datetime import UTC, datetime, timedelta
from pathlib import Path
from zoneinfo import ZoneInfo

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from lmpgap.scenario.times import hour_ending_labels
from tests.scenario.folder import BASE, read, swap, warnings


def local_day(day: str, zone: str = "America/Boise", minutes: int = 60) -> np.ndarray:
    """Return the starts of a local day's intervals in UTC."""
    start = datetime.fromisoformat(day).replace(tzinfo=ZoneInfo(zone))
    end = start + timedelta(days=1)  # wall clock: the next midnight
    first, past = (np.datetime64(t.astimezone(UTC).replace(tzinfo=None), "us") for t in (start, end))
    return np.arange(first, past, np.timedelta64(minutes, "m"))


def test_ordinary_day() -> None:
    labels = hour_ending_labels(local_day("2026-06-01"), "America/Boise")
    assert labels == [f"2026-06-01 HE{hour:02d}" for hour in range(1, 25)]


def test_day_of_25_hours_marks_the_second_of_two_equal_hours() -> None:
    labels = hour_ending_labels(local_day("2026-11-01"), "America/Boise")
    assert len(labels) == 25
    assert labels[:4] == ["2026-11-01 HE01", "2026-11-01 HE02", "2026-11-01 HE02*", "2026-11-01 HE03"]
    assert labels[-1] == "2026-11-01 HE24"


def test_day_of_23_hours_leaves_a_number_out() -> None:
    labels = hour_ending_labels(local_day("2026-03-08"), "America/Boise")
    assert len(labels) == 23
    assert labels[:4] == ["2026-03-08 HE01", "2026-03-08 HE02", "2026-03-08 HE04", "2026-03-08 HE05"]


def test_quarter_hours_add_the_minute() -> None:
    labels = hour_ending_labels(local_day("2026-11-01", minutes=15), "America/Boise", 15)
    assert len(labels) == 100
    assert labels[4:9] == [f"2026-11-01 HE02{mark}" for mark in (":00", ":15", ":30", ":45", "*:00")]


def test_long_intervals_are_named_by_their_last_hour() -> None:
    labels = hour_ending_labels(local_day("2026-06-01", minutes=240), "America/Boise", 240)
    assert labels == [f"2026-06-01 HE{hour:02d}" for hour in (4, 8, 12, 16, 20, 24)]


def test_a_zone_that_goes_back_half_an_hour() -> None:
    # Lord Howe Island puts its clocks back by 30 minutes, at 02:00 on the first Sunday in April.
    labels = hour_ending_labels(local_day("2026-04-05", "Australia/Lord_Howe", 30), "Australia/Lord_Howe", 30)
    assert len(labels) == 49
    assert labels[2:6] == [f"2026-04-05 {mark}" for mark in ("HE02:00", "HE02:30", "HE02*:30", "HE03:00")]


@given(
    st.datetimes(datetime(2000, 1, 1), datetime(2040, 1, 1)),
    st.sampled_from(["America/Boise", "Europe/Berlin", "Australia/Lord_Howe", "America/Sao_Paulo", "UTC"]),
)
def test_labels_of_a_week_are_distinct(start: datetime, zone: str) -> None:
    first = np.datetime64(start.replace(minute=0, second=0, microsecond=0), "us")
    labels = hour_ending_labels(first + np.arange(168) * np.timedelta64(1, "h"), zone)
    assert len(set(labels)) == 168


def loads(starts: np.ndarray) -> str:
    return "bus,interval_start,mw\n" + "".join(f"South,{start}Z,{50 + i}\n" for i, start in enumerate(starts))


@pytest.mark.parametrize(("day", "hours"), [("2026-03-08", 23), ("2026-11-01", 25), ("2026-06-01", 24)])
def test_scenario_of_a_local_day(tmp_path: Path, day: str, hours: int) -> None:
    zone = ZoneInfo("America/Boise")
    starts = local_day(day)
    text = "bus,interval_start,mw\n"
    for i, start in enumerate(starts.astype("M8[s]").tolist()):
        text += f"South,{start.replace(tzinfo=UTC).astimezone(zone).isoformat()},{50 + i}\n"
    scenario = read(tmp_path, {"loads.csv": text})
    assert scenario.n_interval == hours
    assert scenario.warnings == ()
    assert scenario.interval_starts.tolist() == pd.DatetimeIndex(starts).tz_localize("UTC").tolist()
    assert [scenario.inputs(k).load_p[1] for k in range(hours)] == pytest.approx([0.5 + k / 100 for k in range(hours)])
    labels = scenario.hour_ending(scenario.interval_starts)
    assert labels.iloc[0] == f"{day} HE01"
    assert labels.iloc[-1] == f"{day} HE24"


def test_hour_ending_takes_any_times_with_an_offset(tmp_path: Path) -> None:
    scenario = read(tmp_path)
    frame = scenario.tables["loads"].iloc[[4, 1]]
    labels = scenario.hour_ending(frame["interval_start"])
    assert labels.to_dict() == {4: "2026-03-08 HE01", 1: "2026-03-08 HE01"}
    assert scenario.hour_ending([pd.Timestamp("2026-03-08T01:00-07:00")]).tolist() == ["2026-03-08 HE02"]
    assert scenario.hour_ending([]).tolist() == []
    with pytest.raises(ValueError, match="need a time zone"):
        scenario.hour_ending([pd.Timestamp("2026-03-08T01:00")])


def test_missing_interval_is_a_warning_that_names_it(tmp_path: Path) -> None:
    text = loads(np.delete(local_day("2026-03-08"), [1, 2]))
    assert warnings(tmp_path, {"loads.csv": text}) == [
        "loads.csv, column interval_start: 2 of 23 intervals are missing and will not be solved: 2026-03-08 HE02, "
        "2026-03-08 HE04"
    ]


def test_missing_rows_of_a_bus_are_a_warning(tmp_path: Path) -> None:
    changes = swap("loads.csv", "East,2026-03-08T00:00:00-07:00,31,5\n", "")
    assert warnings(tmp_path, changes) == [
        "loads.csv, column bus: 1 bus has no row in some of the 3 intervals; load counts as zero there: East (1)"
    ]


def test_rows_beside_the_axis_are_a_warning(tmp_path: Path) -> None:
    text = "interval_start,resource,eco_max_mw\n2026-03-08T05:00Z,Gas,10\n2026-03-08T06:00Z,Gas,10\n"
    assert warnings(tmp_path, {"availability.csv": text}) == [
        "availability.csv, line 2, column interval_start: 1 of 2 rows lie at intervals that have no loads and "
        "are not used"
    ]


def test_outage_times_beside_the_grid_are_a_warning(tmp_path: Path) -> None:
    text = "kind,id,first_interval,last_interval\nbranch,NS,2026-03-08T06:30Z,2026-03-08T08:00Z\n"
    found = warnings(tmp_path, {"outages.csv": text})
    assert found[0].startswith("outages.csv, line 2, column first_interval: is not the start of an interval")


def test_offsets_may_differ_from_row_to_row(tmp_path: Path) -> None:
    text = BASE["loads.csv"].replace("2026-03-08T00:00:00-07:00,31", "2026-03-08T07:00:00Z,31")
    assert read(tmp_path, {"loads.csv": text}).n_interval == 3
