"""Local clock labels into instants: repeated and missing hours, hour ending or beginning, numbered hours.

An operator's file may say ``2026-11-01 02:00``, ``2026-11-01 24:00``, ``2026-11-01 HE02``, ``HE02*`` for the
second of two equal hours, or count the hours of a day from 1 to 23, 24 or 25. The order of the rows decides
what the label alone leaves open.
"""

from __future__ import annotations

import re
import zoneinfo
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import UTC, date, datetime, timedelta

import numpy as np

from lmpgap.scenario.network import BoolArray, IntArray
from lmpgap.scenario.typed import NOT_A_TIME, TextColumn, TimeArray

_HOUR_LABEL = re.compile(r"(\d{4}-\d{2}-\d{2})[ T]+(?:HE|H|hour)? ?0*(\d{1,2})(\*?)", re.IGNORECASE)
_MIDNIGHT_AT_END = re.compile(r"(\d{4}-\d{2}-\d{2})[ T]24:00(?::00(?:\.0+)?)?")
_SHORTEST_LABEL, _LONGEST_LABEL = len("2026-11-01 1"), 40
"""A date alone is no time of day."""


@dataclass(frozen=True, kw_only=True)
class ClockRule:
    """How a file writes times.

    Attributes
    ----------
    zone
        IANA name of the zone whose clock is meant.
    hour_ending
        A time names the end of its interval.
    interval_minutes
        Length of an interval [min].
    """

    zone: str
    hour_ending: bool
    interval_minutes: int


@dataclass(frozen=True)
class Resolved:
    """Instants of the rows and what could not be told.

    Attributes
    ----------
    times : (n_row,)
        Interval starts in UTC; no time where there is none.
    unreadable : (n_row,)
        The label is no time.
    missing_hour : (n_row,)
        The label is in the hour that clocks skip in spring.
    assumed_first : (n_row,)
        The label is in the hour that occurs twice in autumn, but is there once and without a star.
    """

    times: TimeArray
    unreadable: BoolArray
    missing_hour: BoolArray
    assumed_first: BoolArray


@dataclass(frozen=True)
class _Label:
    """One distinct label: an instant, a wall-clock time, or a numbered hour of a day."""

    instant: datetime | None = None
    wall: datetime | None = None
    day: date | None = None
    hour: int = 0
    star: bool = False


def resolve(labels: TextColumn, group: IntArray, rule: ClockRule) -> Resolved:
    """Return the interval start of each row.

    Parameters
    ----------
    labels
        What the file says.
    group : (n_row,)
        Number of the series a row belongs to (node, version): in one series the second row with the same label
        is the second of two equal hours.
    rule
        How the file writes times.
    """
    zone = zoneinfo.ZoneInfo(rule.zone)
    parsed = [_parse(value, rule) for value in labels.values]
    again = np.minimum(occurrence(group, labels), 1)
    length = timedelta(minutes=rule.interval_minutes)
    sequential = _sequential_days(parsed, zone)
    starred = {label.day for label in parsed if label is not None and label.star}
    true_end = rule.hour_ending and _ends_on_true_clock(parsed, labels, again, zone, length)
    n = len(labels.values)
    times = np.full((n, 2), NOT_A_TIME)
    gap = np.zeros((n, 2), dtype=bool)
    double = np.zeros(n, dtype=bool)
    for i, label in enumerate(parsed):
        if label is None:
            continue
        for repeat in (0, 1):
            fold = 1 if label.star else repeat
            if label.instant is not None:
                start: datetime | None = label.instant - (length if rule.hour_ending else timedelta(0))
            elif label.day is not None and label.day in sequential:
                midnight = datetime(label.day.year, label.day.month, label.day.day)
                start = _instant(midnight, 0, zone)
                start = None if start is None else start + timedelta(hours=label.hour - 1)
            else:
                wall = label.wall if label.wall is not None else _hour_start(label)
                # A numbered hour is named by its start and one; a clock time may be the true local end.
                if label.day is not None or not rule.hour_ending:
                    start = _instant(wall, fold, zone)
                    double[i] = _is_double(wall, zone) and (label.day is None or label.day not in starred)
                elif true_end:
                    end = _instant(wall, fold, zone)
                    start = None if end is None else end - length
                    double[i] = _is_double(wall, zone)
                else:
                    start = _instant(wall - length, fold, zone)
                    double[i] = _is_double(wall - length, zone)
            gap[i, repeat] = start is None
            if start is not None:
                times[i, repeat] = np.datetime64(start.replace(tzinfo=None), "us")
    code = labels.codes
    unreadable = np.asarray([label is None for label in parsed], dtype=bool)
    if n == 0:
        nothing = np.zeros(0, dtype=bool)
        return Resolved(np.zeros(0, dtype="M8[us]"), nothing, nothing, nothing)
    in_double = double[code]
    return Resolved(
        times[code, again],
        unreadable[code],
        gap[code, again],
        in_double & _alone(group, code),
    )


def occurrence(group: IntArray, labels: TextColumn) -> IntArray:
    """Return how often a row's label stood before in its group, in the order of the rows, shape (n_row,)."""
    key = group * max(len(labels.values), 1) + labels.codes
    order = np.argsort(key, kind="stable")
    ordered = key[order]
    fresh = np.ones(order.size, dtype=bool)
    fresh[1:] = ordered[1:] != ordered[:-1]
    begin = np.flatnonzero(fresh)
    count = np.empty(order.size, dtype=np.int64)
    count[order] = np.arange(order.size) - begin[np.cumsum(fresh) - 1] if order.size else 0
    return count


def _alone(group: IntArray, code: IntArray) -> BoolArray:
    key = group * (int(code.max(initial=0)) + 1) + code
    _, inverse, count = np.unique(key, return_inverse=True, return_counts=True)
    return np.asarray(count[np.asarray(inverse).reshape(-1)] == 1)


def _parse(value: str, rule: ClockRule) -> _Label | None:
    value = value.strip()
    if not _SHORTEST_LABEL <= len(value) <= _LONGEST_LABEL:
        return None
    try:
        if match := _HOUR_LABEL.fullmatch(value):
            hour = int(match.group(2))
            ending = rule.hour_ending or "h" in value.lower()
            hour += 0 if ending else 1
            if not 1 <= hour <= 25:
                return None
            return _Label(day=date.fromisoformat(match.group(1)), hour=hour, star=match.group(3) == "*")
        if match := _MIDNIGHT_AT_END.fullmatch(value):
            return _Label(wall=datetime.fromisoformat(match.group(1)) + timedelta(days=1))
        time = datetime.fromisoformat(value)
    except (ValueError, OverflowError):
        return None
    if not 1970 < time.year < 2200:
        return None
    if time.tzinfo is not None:
        return _Label(instant=time.astimezone(UTC))
    return _Label(wall=time)


def _hour_start(label: _Label) -> datetime:
    day = label.day
    assert day is not None
    return datetime(day.year, day.month, day.day) + timedelta(hours=label.hour - 1)


def _instant(wall: datetime, fold: int, zone: zoneinfo.ZoneInfo) -> datetime | None:
    """Return the instant of a wall-clock time, ``None`` where clocks skip it."""
    instant = wall.replace(tzinfo=zone, fold=fold).astimezone(UTC)
    return instant if instant.astimezone(zone).replace(tzinfo=None) == wall else None


def _is_double(wall: datetime, zone: zoneinfo.ZoneInfo) -> bool:
    """Return whether clocks show this time twice."""
    first, second = _instant(wall, 0, zone), _instant(wall, 1, zone)
    return first is not None and second is not None and first != second


def _day_hours(day: date, zone: zoneinfo.ZoneInfo) -> float:
    midnight = datetime(day.year, day.month, day.day, tzinfo=zone)
    following = midnight + timedelta(days=1)
    return (following.astimezone(UTC) - midnight.astimezone(UTC)) / timedelta(hours=1)


def _sequential_days(labels: Sequence[_Label | None], zone: zoneinfo.ZoneInfo) -> set[date]:
    """Return the days on which the file counts hours one by one instead of naming them by the clock.

    On a day of 25 hours the number 25 tells; on a day of 23 hours the skipped hour is there and the 24th is not.
    """
    hours: dict[date, set[int]] = {}
    for label in labels:
        if label is not None and label.day is not None and not label.star:
            hours.setdefault(label.day, set()).add(label.hour)
    found = set()
    for day, numbers in hours.items():
        length = _day_hours(day, zone)
        if (length == 25 and 25 in numbers) or (
            length == 23
            and 24 not in numbers
            and 23 in numbers
            and any(_instant(_hour_start(_Label(day=day, hour=n)), 0, zone) is None for n in numbers)
        ):
            found.add(day)
    return found


def _ends_on_true_clock(
    labels: Sequence[_Label | None],
    column: TextColumn,
    again: IntArray,
    zone: zoneinfo.ZoneInfo,
    length: timedelta,
) -> bool:
    """Return whether end times are true clock times rather than the start's clock time plus the length.

    Where clocks change the two differ: in autumn another label is there twice, in spring another one is missing.
    """
    repeated = np.zeros(len(labels), dtype=bool)
    repeated[column.codes[again > 0]] = True
    for i, label in enumerate(labels):
        if label is None or label.wall is None:
            continue
        start = label.wall - length
        if repeated[i] and _is_double(label.wall, zone) and not _is_double(start, zone):
            return True
        if _instant(start, 0, zone) is None and _instant(label.wall, 0, zone) is not None:
            return True
    return False
