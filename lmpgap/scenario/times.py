"""Hours in words: labels in local hour ending, right on days of 23 and 25 hours."""

from __future__ import annotations

import zoneinfo
from datetime import UTC, datetime, timedelta

import numpy as np

from lmpgap.scenario.typed import TimeArray


def hour_ending_labels(starts: TimeArray, time_zone: str, interval_minutes: int = 60) -> list[str]:
    """Return a label such as ``2026-11-01 HE02`` for each interval start.

    An hour is named by the local clock at its end, counted from the start of its day: the hour from midnight
    is HE01, the last one HE24, both with the date of that day. Where clocks go back, the second of the two
    equal hours is marked with a star (HE02*); where they go forward, a number is left out (HE02 is followed by
    HE04). Intervals shorter than an hour add the minute at which they start (HE02:15); longer ones are named
    by their last hour.

    Parameters
    ----------
    starts : (n,)
        Starts in UTC.
    time_zone
        IANA name.
    interval_minutes
        Length of an interval [min].
    """
    zone = zoneinfo.ZoneInfo(time_zone)
    distinct, inverse = np.unique(starts, return_inverse=True)
    back = timedelta(minutes=max(interval_minutes - 60, 0))
    labels = [_label(time, zone, back, interval_minutes < 60) for time in distinct.astype("M8[us]").tolist()]
    return [labels[i] for i in np.asarray(inverse).reshape(-1).tolist()]


def _label(start: datetime | None, zone: zoneinfo.ZoneInfo, back: timedelta, minutes: bool) -> str:
    if start is None:
        return ""
    local = (start.replace(tzinfo=UTC) + back).astimezone(zone)
    label = f"{local:%Y-%m-%d} HE{local.hour + 1:02d}{'*' if local.fold else ''}"
    return f"{label}:{local.minute:02d}" if minutes or local.minute else label
