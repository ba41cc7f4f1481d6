"""Days left to dispute: the analyst's own rule, counted from a day that is given.

No operator's rule is built in: the number of days, what they are counted from and whether they are business days come
from the scenario's settings.
"""

from __future__ import annotations

from dataclasses import dataclass
from datetime import date
from typing import Literal

import numpy as np
import pandas as pd

from lmpgap.errors import DataError

Counted = Literal["calendar", "business"]
CountedFrom = Literal["interval", "published"]


@dataclass(frozen=True, kw_only=True)
class DeadlineRule:
    """How long a settled day may be disputed.

    Attributes
    ----------
    days
        Days after the day counted from; the last of them still counts. A calendar deadline on a day off is not moved.
    counted
        ``"calendar"`` or ``"business"`` days (Monday to Friday without ``holidays``).
    counted_from
        ``"interval"``: the local operating date; ``"published"``: the local date of the latest posted version.
    label
        The analyst's own name of the rule, e.g. the paragraph of the tariff.
    holidays
        Days that are not business days.
    """

    days: int
    counted: Counted = "calendar"
    counted_from: CountedFrom = "interval"
    label: str = ""
    holidays: tuple[date, ...] = ()

    def __post_init__(self) -> None:
        if self.days < 0:
            raise DataError(f"a deadline of {self.days} days lies before the day it is counted from: use 0 or more")
        if self.counted not in ("calendar", "business"):
            raise DataError(f"deadline days counted as {self.counted!r}; allowed: calendar, business")
        if self.counted_from not in ("interval", "published"):
            raise DataError(f"deadline counted from {self.counted_from!r}; allowed: interval, published")

    @property
    def sentence(self) -> str:
        """The rule in words."""
        unit = {"calendar": "calendar day", "business": "business day"}[self.counted]
        start = {"interval": "the operating date", "published": "the date the price was last published"}
        name = f"{self.label}: " if self.label else ""
        plural = "" if self.days == 1 else "s"
        return f"{name}{self.days} {unit}{plural} after {start[self.counted_from]}"

    def deadline(self, day: date) -> date:
        """Return the last day on which a settled day may be disputed."""
        return pd.Timestamp(self._last_days(np.array([day], dtype="datetime64[D]"))[0]).date()

    def days_left(self, day: date, today: date) -> int:
        """Return the days left today, in the unit of the rule; 0 on the last day, negative when it has passed."""
        last = self._last_days(np.array([day], dtype="datetime64[D]"))
        return int(self._days_between(np.datetime64(today, "D"), last)[0])

    def _last_days(self, days: np.ndarray) -> np.ndarray:
        if self.counted == "calendar":
            return np.asarray(days + np.timedelta64(self.days, "D"))
        # Rolling back first makes the first business day after a day off the first that counts.
        return np.asarray(np.busday_offset(days, self.days, roll="backward", holidays=self._holidays()))

    def _days_between(self, today: np.datetime64, last: np.ndarray) -> np.ndarray:
        if self.counted == "calendar":
            return (last - today).astype(int)
        one = np.timedelta64(1, "D")
        holidays = self._holidays()
        ahead = np.busday_count(today + one, last + one, holidays=holidays)
        behind = np.busday_count(last + one, today + one, holidays=holidays)
        # A last day that is past stays past even when only days off lie in between.
        return np.where(last >= today, ahead, -np.maximum(behind, 1))

    def _holidays(self) -> np.ndarray:
        return np.array(sorted(self.holidays), dtype="datetime64[D]")


def days_left(
    rule: DeadlineRule,
    interval_starts: pd.DatetimeIndex,
    *,
    time_zone: str,
    today: date | None,
    published_at: pd.Series | None = None,
) -> pd.DataFrame:
    """Return one row per operating date: until when it may be disputed.

    Parameters
    ----------
    interval_starts
        Settled intervals, UTC; intervals, not dates, so that days of 23 and 25 hours need no care.
    time_zone
        IANA name; operating and publishing dates are local.
    today
        Day the days left are counted from; ``None`` leaves them open.
    published_at
        With a rule that counts from publication: by interval start, when its latest version was posted. The earliest
        of a date's intervals counts; a date without one has no deadline.

    Returns
    -------
    DataFrame
        ``operating_date, intervals, counted_from, deadline, days_left``, in order of date; ``deadline`` is ``NaT`` and
        ``days_left`` ``<NA>`` where the day counted from is not known.
    """
    local = pd.DatetimeIndex(interval_starts).tz_convert(time_zone).tz_localize(None).normalize()
    if rule.counted_from == "interval":
        start = pd.Series(local)
    else:
        if published_at is None:
            start = pd.Series(pd.NaT, index=range(len(local)), dtype="datetime64[us]")
        else:
            known = pd.to_datetime(published_at.reindex(interval_starts), utc=True)
            start = known.dt.tz_convert(time_zone).dt.tz_localize(None).dt.normalize().reset_index(drop=True)
    frame = (
        pd.DataFrame({"operating_date": local, "counted_from": start})
        .groupby("operating_date", sort=True)
        .agg(intervals=("operating_date", "size"), counted_from=("counted_from", "min"))
        .reset_index()
    )
    frame["counted_from"] = frame["counted_from"].astype("datetime64[us]")
    frame["deadline"] = pd.Series(pd.NaT, index=frame.index, dtype="datetime64[us]")
    frame["days_left"] = pd.Series(pd.NA, index=frame.index, dtype="Int64")
    known_rows = frame["counted_from"].notna()
    if known_rows.any():
        last = rule._last_days(frame.loc[known_rows, "counted_from"].to_numpy().astype("datetime64[D]"))
        frame.loc[known_rows, "deadline"] = last.astype("datetime64[us]")
        if today is not None:
            frame.loc[known_rows, "days_left"] = rule._days_between(np.datetime64(today, "D"), last)
    return frame
