"""One row per formulation: what a run holds, for the terminal and for other programs."""

from __future__ import annotations

import numpy as np
import pandas as pd

from lmpgap.dispatch.names import FORMULATIONS
from lmpgap.prices.certificate import USABLE_VERDICTS
from lmpgap.runs.folder import RunFolder


def summarise_run(folder: RunFolder) -> pd.DataFrame:
    """Return solves, verdicts and prices per formulation.

    Returns
    -------
    DataFrame
        formulation, intervals, usable (solves whose prices may be used), verdicts (counts in words), mean_lmp,
        lowest_lmp, highest_lmp [$/MWh], cost [$/h, mean], largest_price_residual [$/MWh], solver_seconds,
        total_seconds [s].
    """
    solves, prices = folder.table("solves"), folder.table("prices", columns=["formulation", "lmp"])
    rows = []
    for name in [f for f in FORMULATIONS if (solves["formulation"] == f).any()]:
        mine, lmp = solves[solves["formulation"] == name], prices.loc[prices["formulation"] == name, "lmp"]
        verdicts = mine["verdict"].value_counts()
        rows.append(
            {
                "formulation": name,
                "intervals": len(mine),
                "usable": int(mine["verdict"].isin(USABLE_VERDICTS).sum()),
                "verdicts": ", ".join(f"{count} {verdict}" for verdict, count in verdicts.items()),
                "mean_lmp": lmp.mean() if len(lmp) else np.nan,
                "lowest_lmp": lmp.min() if len(lmp) else np.nan,
                "highest_lmp": lmp.max() if len(lmp) else np.nan,
                "cost": mine["objective"].mean(),
                "largest_price_residual": mine["price_residual"].max(),
                "solver_seconds": mine["solver_seconds"].sum(),
                "total_seconds": mine["total_seconds"].sum(),
            }
        )
    return pd.DataFrame(rows)
