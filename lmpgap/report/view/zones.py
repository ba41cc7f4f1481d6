"""How zone prices moved from day to day, and what of it is weight drift."""

from __future__ import annotations

import numpy as np
import pandas as pd

from lmpgap.report.text import number
from lmpgap.report.view.model import Table

_ROWS = 12


def zone_table(drift: pd.DataFrame, formulation: str, currency: str) -> Table:
    """Return the largest day-to-day changes of zone prices under one formulation, with their weight drift."""
    mine = drift[(drift["formulation"] == formulation) & (drift["component"] == "lmp")]
    figures = ["price_before", "price_after", "price_change", "weight_drift"]
    values = mine[figures].apply(pd.to_numeric, errors="coerce").to_numpy(dtype=float)
    size = np.abs(values[:, 2] + values[:, 3]) if len(mine) else np.zeros(0)
    order = [k for k in np.argsort(-size, kind="stable") if np.isfinite(size[k])][:_ROWS]
    names = mine[["zone", "before", "after"]].astype(str).to_numpy()
    return Table(
        caption=f"Zones in {formulation}: largest changes from one day to the next, {currency}/MWh",
        columns=("Zone", "From", "to", "Price before", "Price after", "Price change", "Weight drift"),
        numeric=(False, False, False, True, True, True, True),
        rows=tuple(
            (
                *(str(name) for name in names[k]),
                number(values[k, 0]),
                number(values[k, 1]),
                number(values[k, 2], signed=True),
                number(values[k, 3], signed=True),
            )
            for k in order
        ),
        note=(
            "Zones are load-weighted. Weight drift is the part of a change that comes from load moving between buses "
            f"and hours, not from prices. {len(order)} of {len(mine)} changes."
        ),
    )
