"""When the posted prices that count were published."""

from __future__ import annotations

import pandas as pd


def published_at(latest: pd.DataFrame) -> pd.Series | None:
    """Return per interval start when its last price was published; ``None`` where no such times are posted.

    Parameters
    ----------
    latest
        Posted rows that count, one per interval and node: `lmpgap.divergence.posted.PostedPrices.latest`.
    """
    if "published_at" not in latest.columns or latest["published_at"].isna().all():
        return None
    return latest.groupby("interval_start")["published_at"].max()
