"""Differences between two price sets, and whether they are divergences at all."""

from __future__ import annotations

import numpy as np
import pandas as pd

from lmpgap.divergence.price_set import PriceSet
from lmpgap.scenario.network import BoolArray
from lmpgap.tolerances import DEFAULT_TOLERANCES, Tolerances

DIFFERENCE_COLUMNS = ("interval_start", "base", "against", "bus", "difference", "inside_interval")


def differences(base: PriceSet, against: PriceSet, tolerances: Tolerances = DEFAULT_TOLERANCES) -> pd.DataFrame:
    """Return price of ``against`` minus price of ``base`` for every interval and bus that both price.

    Parameters
    ----------
    base, against
        On the same intervals and buses (`lmpgap.divergence.price_set.common_ground`).

    Returns
    -------
    DataFrame
        Columns of `DIFFERENCE_COLUMNS`; ``difference`` [$/MWh]. ``inside_interval`` is True where both prices
        could be the same: at least one of them is not unique and the intervals of admissible prices
        overlap. Such a difference is not a divergence.
    """
    difference = against.lmp - base.lmp
    row, column = np.nonzero(np.isfinite(difference))
    return pd.DataFrame(
        {
            "interval_start": base.intervals.take(row),
            "base": constant(base.name, row.size),
            "against": constant(against.name, row.size),
            "bus": base.buses.take(column).to_numpy(),
            "difference": difference[row, column],
            "inside_interval": inside_interval(base, against, tolerances)[row, column],
        }
    ).astype({"bus": "str"})


def inside_interval(base: PriceSet, against: PriceSet, tolerances: Tolerances = DEFAULT_TOLERANCES) -> BoolArray:
    """Return where prices that are not unique explain the whole difference, shape (n_interval, n_bus)."""
    width = np.maximum(base.high - base.low, against.high - against.low)
    low = np.maximum(np.minimum(base.low, base.lmp), np.minimum(against.low, against.lmp))
    high = np.minimum(np.maximum(base.high, base.lmp), np.maximum(against.high, against.lmp))
    return np.asarray((width > tolerances.interval_width) & (low <= high))


def constant(text: str, n_row: int) -> pd.Series[str]:
    """Return a column that says the same in every row."""
    return pd.Series(pd.Index([text], dtype="str").take(np.zeros(n_row, dtype=np.int64)))
