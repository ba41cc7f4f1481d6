"""Which of several posted versions counts, and when it was published."""

from __future__ import annotations

import pandas as pd

_KEY = ["interval_start", "node"]


def latest_versions(posted: pd.DataFrame) -> pd.DataFrame:
    """Return the posted rows that count: per interval and node the highest version, then the last published.

    Parameters
    ----------
    posted
        Table ``posted`` of a scenario; older versions stay there.
    """
    order = [column for column in ("version", "published_at") if column in posted.columns]
    ranked = posted.sort_values([*_KEY, *order], kind="stable", na_position="first") if order else posted
    return ranked.drop_duplicates(_KEY, keep="last").reset_index(drop=True)


def published_at(latest: pd.DataFrame) -> pd.Series | None:
    """Return per interval start when its last price was published; ``None`` where no such times are posted.

    Parameters
    ----------
    latest
        From `latest_versions`.
    """
    if "published_at" not in latest.columns or latest["published_at"].isna().all():
        return None
    return latest.groupby("interval_start")["published_at"].max()
