"""Intervals as people read them: hour ending in the scenario's time zone, repeated hour marked."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from lmpgap.scenario.network import BoolArray, IntArray

_DAYS = ("Mon", "Tue", "Wed", "Thu", "Fri", "Sat", "Sun")
_MONTHS = ("Jan", "Feb", "Mar", "Apr", "May", "Jun", "Jul", "Aug", "Sep", "Oct", "Nov", "Dec")
REPEATED_MARK = "(second)"
"""Stands after the second of two equal clock hours, as in the sentences."""


@dataclass(frozen=True, kw_only=True)
class Hours:
    """The report's time axis.

    Attributes
    ----------
    starts : DatetimeIndex (n_hour,)
        Interval starts, UTC, ascending.
    label : (n_hour,)
        Such as ``"Tue 3 Nov HE19"``; the second of two equal clock hours carries a mark.
    hour_ending : (n_hour,)
        1 to 24 on the local clock.
    repeated : (n_hour,)
        True for the second of two equal clock hours.
    day_position, day_label
        Where each local day begins, and its name.
    span : str
        First and last local day in words.
    minutes : int
        Length of one interval [min].
    """

    starts: pd.DatetimeIndex
    label: tuple[str, ...]
    hour_ending: IntArray
    repeated: BoolArray
    day_position: tuple[int, ...]
    day_label: tuple[str, ...]
    span: str
    minutes: int

    @property
    def n(self) -> int:
        """Number of intervals."""
        return len(self.label)

    def position(self, times: pd.Series) -> IntArray:
        """Return the position of each time, -1 where it is not on the axis."""
        code, unique = pd.factorize(pd.to_datetime(times, utc=True))
        place = np.append(self.starts.get_indexer(pd.DatetimeIndex(unique)), -1)
        return np.asarray(place[code], dtype=np.int64)


def day_name(stamp: pd.Timestamp) -> str:
    """Return a local day such as ``"Tue 3 Nov"``, independent of the machine's language."""
    return f"{_DAYS[stamp.weekday()]} {stamp.day} {_MONTHS[stamp.month - 1]}"


def make_hours(starts: pd.DatetimeIndex, time_zone: str, minutes: int) -> Hours:
    """Return the time axis for ascending UTC starts.

    Parameters
    ----------
    starts
        Interval starts, timezone-aware.
    time_zone
        IANA name of the zone in which people speak of these hours.
    minutes
        Length of one interval [min].
    """
    starts = pd.DatetimeIndex(starts).sort_values().unique()
    local = starts.tz_convert(time_zone)
    clock = local.tz_localize(None)
    repeated = np.asarray(clock.duplicated(keep="first"), dtype=bool)
    hour_ending = np.asarray(clock.hour, dtype=np.int64) + 1
    labels = []
    for stamp, ending, again in zip(clock, hour_ending, repeated, strict=True):
        text = f"{day_name(stamp)} HE{ending:02d}"
        if minutes != 60:
            text += f" from {stamp:%H:%M}"
        labels.append(f"{text} {REPEATED_MARK}" if again else text)
    days = clock.normalize()
    first_of_day = np.flatnonzero(np.r_[True, days[1:] != days[:-1]])
    first, last = clock[0], clock[-1]
    return Hours(
        starts=starts,
        label=tuple(labels),
        hour_ending=hour_ending,
        repeated=repeated,
        day_position=tuple(int(position) for position in first_of_day),
        day_label=tuple(day_name(clock[int(position)]) for position in first_of_day),
        span=f"{day_name(first)} to {day_name(last)} {last.year}",
        minutes=minutes,
    )
