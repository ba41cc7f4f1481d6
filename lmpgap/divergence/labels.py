"""How intervals are called in sentences: local weekday and hour ending."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
import pandas as pd

from lmpgap.scenario.network import IntArray


@dataclass(frozen=True, kw_only=True)
class IntervalLabels:
    """Names of intervals in the time zone of the market.

    Attributes
    ----------
    time_zone : str
        IANA name.
    interval_minutes : int
        Hours are told as hour ending; shorter intervals by their start.
    with_date : bool
        Add the day of the month; needed where a week does not tell.
    """

    time_zone: str = "UTC"
    interval_minutes: int = 60
    with_date: bool = False

    @staticmethod
    def of(intervals: pd.DatetimeIndex, time_zone: str, interval_minutes: int) -> IntervalLabels:
        """Return labels that tell all the given intervals apart."""
        long = len(intervals) > 0 and intervals.max() - intervals.min() >= pd.Timedelta(days=7, hours=1)
        return IntervalLabels(time_zone=time_zone, interval_minutes=interval_minutes, with_date=bool(long))

    def day(self, start: pd.Timestamp) -> str:
        """Return the local day, e.g. ``"Tue"`` or ``"Tue 27 Oct"``."""
        local = start.tz_convert(self.time_zone)
        return f"{local:%a} {local.day} {local:%b}" if self.with_date else f"{local:%a}"

    def clock(self, start: pd.Timestamp) -> str:
        """Return the hour ending, e.g. ``"HE19"``; the second of two equal hours in autumn is marked."""
        local = start.tz_convert(self.time_zone)
        text = f"HE{local.hour + 1:02d}" if self.interval_minutes == 60 else f"{local:%H:%M}"
        earlier = (start - pd.Timedelta(hours=1)).tz_convert(self.time_zone)
        repeated = (earlier.hour, earlier.minute, earlier.day) == (local.hour, local.minute, local.day)
        return f"{text} (second)" if repeated else text

    def label(self, start: pd.Timestamp) -> str:
        """Return day and clock, e.g. ``"Tue HE19"``."""
        return f"{self.day(start)} {self.clock(start)}"

    def stretch(self, first: pd.Timestamp, last: pd.Timestamp) -> str:
        """Return the name of a stretch of intervals, e.g. ``"Tue HE11 to HE16"``."""
        if first == last:
            return self.label(first)
        end = self.clock(last) if self.day(first) == self.day(last) else self.label(last)
        return f"{self.label(first)} to {end}"

    def hour_ending(self, starts: pd.Series[pd.Timestamp] | pd.DatetimeIndex) -> IntArray:
        """Return the local hour ending, 1 to 24, of each start."""
        return np.asarray(pd.DatetimeIndex(starts).tz_convert(self.time_zone).hour + 1, dtype=np.int64)


def stretches(positions: IntArray) -> Iterator[tuple[int, int]]:
    """Yield first and last of each run of consecutive integers; the input need not be sorted."""
    ordered = np.unique(positions)
    if ordered.size == 0:
        return
    breaks = np.flatnonzero(np.diff(ordered) > 1)
    firsts = np.concatenate([ordered[:1], ordered[breaks + 1]])
    lasts = np.concatenate([ordered[breaks], ordered[-1:]])
    yield from zip(firsts.tolist(), lasts.tolist(), strict=True)


def listed(names: list[str], most: int = 4) -> str:
    """Return names as a list in words: ``"A, B and C"``, ``"A, B and 3 others"``."""
    shown = names if len(names) <= most else [*names[: most - 1], f"{len(names) - most + 1} others"]
    return shown[0] if len(shown) == 1 else f"{', '.join(shown[:-1])} and {shown[-1]}"
