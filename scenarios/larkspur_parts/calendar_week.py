"""The week: Monday 26 October to Sunday 1 November 2026 in America/Boise, 169 hours.

Clocks go back on the Sunday, so that day has 25 hours and 01:00 comes twice (offsets -06:00 and -07:00).
"""

from __future__ import annotations

from datetime import UTC, datetime, timedelta
from zoneinfo import ZoneInfo

TIME_ZONE = "America/Boise"
FIRST = datetime(2026, 10, 26, tzinfo=ZoneInfo(TIME_ZONE))
LAST = datetime(2026, 11, 2, tzinfo=ZoneInfo(TIME_ZONE))  # end of the last interval
DAY_NAMES = ("Mon", "Tue", "Wed", "Thu", "Fri", "Sat", "Sun")


def interval_starts() -> list[datetime]:
    """Return the start of every hour of the week, in local time with its offset, shape (169,)."""
    zone = ZoneInfo(TIME_ZONE)
    start, end = FIRST.astimezone(UTC), LAST.astimezone(UTC)
    hours = int((end - start).total_seconds() // 3600)
    return [(start + timedelta(hours=h)).astimezone(zone) for h in range(hours)]


STARTS = interval_starts()
"""Every hour of the week, in order."""

STAMPS = [start.isoformat() for start in STARTS]
"""The same as ISO 8601 text with offset, as the tables carry them."""


def position(day: str, clock_hour: int, *, after_change: bool = False) -> int:
    """Return which hour of the week starts at a clock hour of a day.

    Parameters
    ----------
    day
        ``"Mon"`` to ``"Sun"``.
    clock_hour
        0 to 23, the hour that the interval starts in (hour ending minus one).
    after_change
        Choose the second of the two hours that start at 01:00 on the Sunday.
    """
    weekday = DAY_NAMES.index(day)
    found = [h for h, t in enumerate(STARTS) if t.weekday() == weekday and t.hour == clock_hour]
    return found[-1] if after_change else found[0]


def span(first: tuple[str, int], last: tuple[str, int]) -> range:
    """Return the hours from the one starting at ``first`` to the one starting at ``last``, both included."""
    return range(position(*first), position(*last) + 1)
