"""A second opinion: the same hours stated again, independently, and held against the run's own solves.

The convex formulations fill their matrices themselves. `lmpgap.dispatch.restatement` states them a second time in a
modelling language, shares no matrix with them, and takes another solver path. Where both agree, an error would have to
be in both.
"""

from __future__ import annotations

import numpy as np
import pandas as pd

from lmpgap.dispatch.restatement import restate
from lmpgap.dispatch.result import DispatchResult
from lmpgap.errors import LmpgapError
from lmpgap.prices.components import multiplier_to_price
from lmpgap.progress import Progress, silent
from lmpgap.runs.fingerprint import fingerprint
from lmpgap.runs.interval import solve_planned, workspace
from lmpgap.runs.plan import Plan, RunSettings
from lmpgap.scenario.scenario import Scenario

TASK = "second opinion"
RESTATED = ("dc", "dc-loss", "soc")
"""Formulations with an independent statement; the AC dispatch is certified by its own optimality conditions."""


def second_opinion(
    scenario: Scenario,
    positions: list[int],
    *,
    formulations: tuple[str, ...] = RESTATED,
    progress: Progress = silent,
) -> pd.DataFrame:
    """Solve some intervals a second time from an independent statement, and compare cost and prices.

    Parameters
    ----------
    positions
        Intervals to look at.
    formulations
        Some of `RESTATED`.

    Returns
    -------
    DataFrame
        interval_start, formulation, cost, restated_cost [$/h], cost_difference (relative) [-],
        largest_price_difference [$/MWh], agrees, remark. Agreement: cost within 1e-6, prices within the tolerance
        that marks a price as not unique (two solvers may pick different prices of one interval).

    Raises
    ------
    LmpgapError
        For a formulation without an independent statement.
    """
    unknown = [name for name in formulations if name not in RESTATED]
    if unknown:
        raise LmpgapError(
            f"there is no independent statement of {', '.join(unknown)}; choose from {', '.join(RESTATED)}"
        )
    plan = Plan(scenario, formulations, RunSettings.of(scenario, uniqueness=False, audit=False), positions)
    network, network_key = scenario.network, fingerprint(scenario.network)
    rows: list[dict[str, object]] = []
    progress(TASK, 0, len(positions))
    for count, position in enumerate(positions, start=1):
        planned = plan.interval(position)
        space = workspace(network, planned.inputs, plan.settings, network_key)
        for name in plan.formulations:
            result, limits = solve_planned(space, name, planned)
            row = {"interval_start": scenario.interval_starts[position], "formulation": name, "cost": result.objective}
            remark = _not_restated(result)
            if remark:
                rows.append({**row, **_NOTHING, "remark": remark})
                continue
            other = restate(name, network, planned.inputs, limits, plan.settings.dc)
            price = multiplier_to_price(result.multipliers.active, network.base_mva)
            apart = float(np.nanmax(np.abs(price - other.price)))
            relative = abs(other.objective - result.objective) / max(1.0, abs(result.objective))
            tolerances = plan.settings.tolerances
            rows.append(
                {
                    **row,
                    "restated_cost": other.objective,
                    "cost_difference": relative,
                    "largest_price_difference": apart,
                    "agrees": relative <= tolerances.restated_cost and apart <= tolerances.interval_width,
                    "remark": "" if other.status.has_solution else f"restated: {other.status.value}",
                }
            )
        progress(TASK, count, len(positions))
    return pd.DataFrame(rows)


_NOTHING: dict[str, object] = {
    "restated_cost": np.nan,
    "cost_difference": np.nan,
    "largest_price_difference": np.nan,
    "agrees": False,
}


def _not_restated(result: DispatchResult) -> str:
    """Return why a solve cannot be restated, in words; empty when it can."""
    if not result.status.has_solution:
        return f"no solution: {result.message}"
    gave_way = float(np.nansum(result.unserved) + np.nansum(result.surplus))
    if result.constraints.at_penalty.any() or gave_way > 1e-6:
        return "a limit or the balance gave way at its penalty; the restatement knows hard limits only"
    if result.loss_slack_open:
        return "losses were frozen because the relaxed ones were not physical"
    return ""
