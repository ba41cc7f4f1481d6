"""Posted files in the operator's own shape, names, signs and clock."""

from __future__ import annotations

from datetime import UTC, datetime, timedelta
from pathlib import Path
from zoneinfo import ZoneInfo

import pandas as pd
import pytest

from lmpgap.scenario.scenario import Scenario
from tests.scenario.folder import SETTINGS, faults, read

ZONE = ZoneInfo("America/Boise")


def settings(*lines: str, minutes: int = 60) -> str:
    text = SETTINGS.replace("interval_minutes = 60", f"interval_minutes = {minutes}")
    return text + "[posted]\n" + "\n".join(lines) + "\n"


def day_starts(day: str, minutes: int = 60) -> list[datetime]:
    start = datetime.fromisoformat(day).replace(tzinfo=ZONE)
    first, past = start.astimezone(UTC), (start + timedelta(days=1)).astimezone(UTC)
    return [first + timedelta(minutes=k) for k in range(0, int((past - first).total_seconds() // 60), minutes)]


def posted(folder: Path, text: str, *lines: str, minutes: int = 60, **more: str) -> Scenario:
    changes: dict[str, str | bytes | None] = {"scenario.toml": settings(*lines, minutes=minutes), "posted.csv": text}
    if minutes != 60:
        changes["loads.csv"] = "bus,mw\nSouth,1\n"
    return read(folder, {**changes, **more})


def told(scenario: Scenario) -> list[str]:
    """The warnings, but that the loads of these scenarios are of another day than the posted prices."""
    return [str(warning) for warning in scenario.warnings if warning.kind != "outside the intervals"]


def times(scenario: Scenario, table: str = "posted") -> list[pd.Timestamp]:
    return scenario.tables[table]["interval_start"].tolist()


def expected(day: str, minutes: int = 60) -> list[pd.Timestamp]:
    return [pd.Timestamp(start) for start in day_starts(day, minutes)]


# --- names and signs -------------------------------------------------------------------------------------


def test_own_column_names_and_signs(tmp_path: Path) -> None:
    lines = [
        "congestion_sign = -1",
        "shadow_price_sign = -1",
        "[posted.columns]",
        'lmp = "Total"',
        'congestion_component = "Cong"',
        'node = "Point"',
        'interval_start = "When"',
        'shadow_price = "Mu"',
    ]
    text = "When,Point,Total,Cong,Region\n2026-03-08T06:00Z,North,12.5,3,West\n2026-03-08T06:00Z,Gone,11,,West\n"
    constraints = "When,constraint,Mu\n2026-03-08T06:00Z,NS limit,-7.5\n"
    scenario = posted(tmp_path, text, *lines, **{"posted_constraints.csv": constraints})
    frame = scenario.tables["posted"]
    assert frame["lmp"].tolist() == [12.5, 11.0]
    assert frame["congestion_component"].iloc[0] == -3.0
    assert frame[["congestion_component", "loss_component"]].isna().sum().tolist() == [1, 2]
    assert frame["version"].tolist() == [1, 1]
    assert scenario.tables["posted_constraints"]["shadow_price"].tolist() == [7.5]
    assert told(scenario) == [
        "posted.csv: columns that [posted.columns] does not map are not read: Region",
        "posted.csv, line 3, column node: is not in buses or hubs (kept; 1 row) (found 'Gone')",
    ]


def test_faults_name_the_operators_own_columns(tmp_path: Path) -> None:
    changes = {
        "scenario.toml": settings("[posted.columns]", 'lmp = "Total"'),
        "posted.csv": "interval_start,node,Total\n2026-03-08T06:00Z,North,many\n",
    }
    assert faults(tmp_path, changes) == [
        "posted.csv, line 2, column Total: is not a number (found 'many'); allowed: a number [currency/MWh]"
    ]


def test_a_mapped_column_that_is_not_there(tmp_path: Path) -> None:
    changes = {
        "scenario.toml": settings("[posted.columns]", 'lmp = "Total"'),
        "posted.csv": "interval_start,node,Totl\n2026-03-08T06:00Z,North,1\n",
    }
    assert faults(tmp_path, changes)[0].startswith("posted.csv: the column 'Total' is missing: posted price")


def test_versions_are_all_kept(tmp_path: Path) -> None:
    text = (
        "interval_start,node,lmp,version,published_at\n"
        "2026-03-08T06:00Z,North,10,1,2026-03-09T06:00Z\n2026-03-08T06:00Z,North,11,2,2026-03-11T06:00Z\n"
    )
    frame = posted(tmp_path, text).tables["posted"]
    assert frame["version"].tolist() == [1, 2]
    assert frame["published_at"].tolist() == [pd.Timestamp("2026-03-09T06:00Z"), pd.Timestamp("2026-03-11T06:00Z")]


# --- clocks ----------------------------------------------------------------------------------------------


def local_labels(day: str, form: str) -> list[str]:
    """Return what operators write for the hours of a day, in order."""
    labels = []
    for number, start in enumerate(day_starts(day), start=1):
        local = start.astimezone(ZONE)
        wall = local.replace(tzinfo=None)
        end_wall = wall + timedelta(hours=1)
        true_end = (start + timedelta(hours=1)).astimezone(ZONE).replace(tzinfo=None)
        labels.append(
            {
                "start": wall.isoformat(" "),
                "wall end": end_wall.isoformat(),
                "true end": true_end.isoformat(),
                "end 24:00": f"{wall:%Y-%m-%d} 24:00" if end_wall.hour == 0 else f"{end_wall:%Y-%m-%d %H:%M}",
                "HE": f"{wall:%Y-%m-%d} HE{wall.hour + 1:02d}",
                "HE*": f"{wall:%Y-%m-%d} HE{wall.hour + 1:02d}{'*' if local.fold else ''}",
                "numbers": f"{wall:%Y-%m-%d} {number}",
            }[form]
        )
    return labels


DAYS = ("2026-03-08", "2026-06-01", "2026-11-01")


@pytest.mark.parametrize("day", DAYS)
@pytest.mark.parametrize("form", ["start", "wall end", "true end", "end 24:00", "HE", "HE*", "numbers"])
def test_local_clock(tmp_path: Path, day: str, form: str) -> None:
    clock = "start" if form == "start" else "hour_ending"
    rows = [f"{label},{node},{10 + k}" for k, label in enumerate(local_labels(day, form)) for node in ("North", "East")]
    text = "interval_start,node,lmp\n" + "\n".join(rows) + "\n"
    scenario = posted(tmp_path, text, f'clock = "{clock}"', "local = true")
    frame = scenario.tables["posted"]
    for node in ("North", "East"):
        mine = frame[frame["node"] == node]
        assert mine["interval_start"].tolist() == expected(day)
        assert mine["lmp"].tolist() == [10.0 + k for k in range(len(mine))]
    assert told(scenario) == []


@pytest.mark.parametrize("clock", ["start", "hour_ending"])
def test_quarter_hours_of_a_repeated_hour(tmp_path: Path, clock: str) -> None:
    shift = timedelta(minutes=15 if clock == "hour_ending" else 0)
    walls = [(start.astimezone(ZONE).replace(tzinfo=None) + shift) for start in day_starts("2026-11-01", 15)]
    text = "interval_start,node,lmp\n" + "".join(f"{wall.isoformat()},North,1\n" for wall in walls)
    scenario = posted(tmp_path, text, f'clock = "{clock}"', "local = true", minutes=15)
    assert times(scenario) == expected("2026-11-01", 15)


def test_hour_ending_with_an_offset(tmp_path: Path) -> None:
    text = "interval_start,node,lmp\n2026-03-08T01:00-07:00,North,1\n"
    scenario = posted(tmp_path, text, 'clock = "hour_ending"')
    assert times(scenario) == [pd.Timestamp("2026-03-08T00:00-07:00")]


def test_local_clock_without_saying_so(tmp_path: Path) -> None:
    changes = {
        "scenario.toml": settings('clock = "hour_ending"'),
        "posted.csv": "interval_start,node,lmp\n2026-03-08 HE01,North,1\nnever,North,1\n,North,1\n",
    }
    found = faults(tmp_path, changes)
    assert [fault.split("; allowed")[0] for fault in found] == [
        "posted.csv, line 2, column interval_start: has no offset; say local = true in [posted] if local clock time is "
        "meant (found '2026-03-08 HE01')",
        "posted.csv, line 3, column interval_start: is not a time (found 'never')",
        "posted.csv, line 4, column interval_start: is empty (found '')",
    ]


def test_rows_in_the_hour_that_does_not_exist_are_left_out_and_told(tmp_path: Path) -> None:
    labels = ["2026-03-08T01:00", "2026-03-08T02:00", "2026-03-08T03:00"]
    text = "interval_start,node,lmp\n" + "".join(f"{label},North,{k}\n" for k, label in enumerate(labels))
    scenario = posted(tmp_path, text, "local = true")
    assert scenario.tables["posted"]["lmp"].tolist() == [0, 2]
    assert told(scenario) == [
        "posted.csv, line 3, column interval_start: 1 row is in the hour that clocks skip in spring; such an hour does "
        "not exist, and the rows are left out (found '2026-03-08T02:00')"
    ]


def test_a_repeated_hour_that_is_there_once_is_told(tmp_path: Path) -> None:
    labels = ["2026-11-01T00:00", "2026-11-01T01:00", "2026-11-01T02:00"]
    text = "interval_start,node,lmp\n" + "".join(f"{label},North,{k}\n" for k, label in enumerate(labels))
    scenario = posted(tmp_path, text, "local = true")
    first = pd.Timestamp("2026-11-01T00:00-06:00")
    assert times(scenario) == [first, first + pd.Timedelta("1h"), first + pd.Timedelta("3h")]
    assert told(scenario) == [
        "posted.csv, line 3, column interval_start: 1 row is in the hour that occurs twice in autumn, but is there "
        "once; taken as the first of the two (found '2026-11-01T01:00')"
    ]


def test_versions_do_not_count_as_repeated_hours(tmp_path: Path) -> None:
    text = "interval_start,node,lmp,version\n" + "".join(
        f"2026-11-01T0{hour}:00,North,1,{version}\n" for version in (1, 2) for hour in (0, 1, 1, 2)
    )
    scenario = posted(tmp_path, text, "local = true")
    starts = expected("2026-11-01")[:4]
    assert times(scenario) == starts * 2


def test_local_times_of_publication(tmp_path: Path) -> None:
    text = (
        "interval_start,node,lmp,published_at\n2026-06-01T00:00,North,1,2026-06-02T09:30\n"
        "2026-06-01T00:00,East,1,2026-06-02T09:30\n2026-06-01T01:00,North,1,\n2026-06-01T02:00,North,1,2026-06-02T09:30Z\n"
    )
    frame = posted(tmp_path / "good", text, "local = true").tables["posted"]
    morning = pd.Timestamp("2026-06-02T09:30-06:00")
    assert frame["published_at"].tolist() == [morning, morning, pd.NaT, pd.Timestamp("2026-06-02T09:30Z")]
    changes = {"scenario.toml": settings("local = true"), "posted.csv": text.replace("09:30Z", "morning")}
    found = faults(tmp_path / "bad", changes)
    assert len(found) == 1
    assert found[0].startswith("posted.csv, line 5, column published_at: is not a time (found '2026-06-02Tmorning')")


def test_date_and_hour_in_two_columns(tmp_path: Path) -> None:
    rows = [label.split(" ") for label in local_labels("2026-11-01", "HE")]
    text = "Day,Hour,node,lmp\n" + "".join(f"{date},{hour},North,1\n" for date, hour in rows)
    lines = ['clock = "hour_ending"', "local = true", "[posted.columns]", 'date = "Day"', 'hour = "Hour"']
    assert times(posted(tmp_path, text, *lines)) == expected("2026-11-01")


def test_posted_constraints_follow_the_same_clock(tmp_path: Path) -> None:
    text = "interval_start,constraint,shadow_price,direction\n" + "".join(
        f"{label},NS,1,Forward\n" for label in local_labels("2026-11-01", "HE")
    )
    scenario = read(
        tmp_path,
        {"scenario.toml": settings('clock = "hour_ending"', "local = true"), "posted_constraints.csv": text},
    )
    assert times(scenario, "posted_constraints") == expected("2026-11-01")
    assert set(scenario.tables["posted_constraints"]["direction"]) == {"forward"}


# --- wide shapes -----------------------------------------------------------------------------------------


def test_a_column_per_node(tmp_path: Path) -> None:
    text = "interval_start,North,East,Old name\n2026-03-08T06:00Z,1,2,3\n2026-03-08T07:00Z,4,,6\n"
    scenario = posted(tmp_path, text, 'shape = "wide"')
    frame = scenario.tables["posted"]
    assert list(zip(frame["interval_start"].dt.hour, frame["node"], frame["lmp"], strict=True)) == [
        (6, "North", 1), (6, "East", 2), (6, "Old name", 3), (7, "North", 4), (7, "Old name", 6),
    ]  # fmt: skip
    assert frame["energy_component"].isna().all()
    assert "found 'Old name'" in told(scenario)[0]


def test_a_column_per_node_with_components(tmp_path: Path) -> None:
    text = (
        "When,Part,North,East\n2026-03-08T06:00Z,LMP,10,20\n2026-03-08T06:00Z,MCC,1,-2\n"
        "2026-03-08T06:00Z,loss_component,0.5,0.25\n"
    )
    lines = [
        'shape = "wide"', "congestion_sign = -1", "[posted.columns]", 'interval_start = "When"',
        'component = "Part"', 'lmp = "LMP"', 'congestion_component = "MCC"',
    ]  # fmt: skip
    frame = posted(tmp_path, text, *lines).tables["posted"]
    assert frame["lmp"].tolist() == [10, 20]
    assert frame["congestion_component"].tolist() == [-1, 2]
    assert frame["loss_component"].tolist() == [0.5, 0.25]


@pytest.mark.parametrize("day", DAYS)
@pytest.mark.parametrize("style", ["HE", "star", "numbers"])
def test_a_column_per_hour(tmp_path: Path, day: str, style: str) -> None:
    starts = day_starts(day)
    if style == "numbers":
        header = [str(k) for k in range(1, 26)]
        cells = [str(k) for k in range(len(starts))] + [""] * (25 - len(starts))
    else:
        header = [f"HE{k}" for k in range(1, 25)]
        header.insert(2, "HE2*" if style == "star" else "HE25")
        if style == "HE":
            header = [f"HE{k}" for k in range(1, 26)]
        by_label = {
            f"HE{s.astimezone(ZONE).hour + 1}{'*' if s.astimezone(ZONE).fold else ''}": k for k, s in enumerate(starts)
        }
        if style == "HE" and len(starts) == 25:
            by_label = {f"HE{k + 1}": k for k in range(25)}
        cells = [str(by_label.get(label, "")) for label in header]
    lines = [
        f"{day},{node},{part}," + ",".join(cells)
        for node in ("North", "East")
        for part in ("lmp", "loss_component")
    ]  # fmt: skip
    text = ",".join(["date", "node", "component", *header]) + "\n" + "\n".join(lines) + "\n"
    scenario = posted(tmp_path, text, 'shape = "wide"', 'clock = "hour_ending"', "local = true")
    frame = scenario.tables["posted"]
    for node in ("North", "East"):
        mine = frame[frame["node"] == node].sort_values("lmp")
        assert mine["interval_start"].tolist() == expected(day)
        assert mine["loss_component"].tolist() == mine["lmp"].tolist() == [float(k) for k in range(len(starts))]
    assert told(scenario) == []


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("when,North\n2026-03-08T06:00Z,1\n", "posted.csv: the column 'interval_start' is missing from the wide table"),
        ("node,HE1\nNorth,1\n", "posted.csv: the column 'date' is missing from the wide table"),
        ("date,node,HE1,HE99x\n2026-03-08,North,1,2\n", "posted.csv: the column 'HE99x' is not an hour of the day"),
        ("interval_start,North,North\n2026-03-08T06:00Z,1,2\n", "posted.csv, column North: the column is there twice"),
        ("interval_start\n2026-03-08T06:00Z\n", "posted.csv: the wide table has no column per node"),
        ("interval_start,component,North\n2026-03-08T06:00Z,price,1\n", "posted.csv, line 2, column component: is not"),
        ("interval_start,North\n2026-03-08T06:00Z,1\n2026-03-08T07:00Z,x\n", "posted.csv, line 3, column lmp: is not"),
    ],
)  # fmt: skip
def test_faults_of_wide_tables(tmp_path: Path, text: str, message: str) -> None:
    changes = {"scenario.toml": settings('shape = "wide"', "local = true"), "posted.csv": text}
    found = faults(tmp_path, changes)
    assert any(fault.startswith(message) for fault in found), found
