"""How far the formulations drift apart as load grows."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import pandas as pd

from lmpgap.dispatch.names import FORMULATIONS
from lmpgap.errors import LmpgapError
from lmpgap.progress import Progress, silent
from lmpgap.runs.fingerprint import fingerprint
from lmpgap.runs.interval import solve_interval
from lmpgap.runs.plan import Plan, PlannedInterval, RunSettings
from lmpgap.runs.rows import SolvedInterval
from lmpgap.runs.schema import RUN_TABLES
from lmpgap.scenario.network import FloatArray, Network
from lmpgap.scenario.scenario import Scenario

TASK = "sweeping load"


def sweep(
    scenario: Scenario,
    factors: FloatArray,
    *,
    positions: list[int] | None = None,
    formulations: tuple[str, ...] = FORMULATIONS,
    progress: Progress = silent,
) -> pd.DataFrame:
    """Solve some intervals with all load multiplied, and measure the distance to the AC dispatch.

    Parameters
    ----------
    factors : (n_factor,)
        Load factors [-]; active and reactive load of every bus is multiplied, bids are left alone.
    positions
        Intervals to solve; by default the one with the highest load.
    formulations
        ``ac`` is always solved: the others are held against it.

    Returns
    -------
    DataFrame
        Run table ``sweep``: one row per factor and formulation. Where a formulation has no solution, its hour is
        left out of every formulation's means, so that the rows of one factor compare the same hours; ``hours``
        counts those that are left. Without any the figures are missing.
    """
    if not np.all(np.asarray(factors) > 0.0):
        raise LmpgapError("load factors must be positive")
    chosen = tuple(name for name in FORMULATIONS if name in formulations or name == "ac")
    hours = [peak_position(scenario)] if positions is None else positions
    plan = Plan(scenario, chosen, RunSettings.of(scenario, uniqueness=False, audit=False), hours)
    network, network_key = scenario.network, fingerprint(scenario.network)
    rows: list[dict[str, object]] = []
    total = len(factors) * len(hours)
    progress(TASK, 0, total)
    for number, factor in enumerate(factors):
        measured: list[dict[str, Measure]] = []
        for count, position in enumerate(hours, start=1):
            interval = _scaled(plan.interval(position), float(factor))
            solved = {
                item.formulation: item
                for item in solve_interval(network, interval, plan.settings, scenario.settings.hours, network_key)
            }
            if all(item.split is not None for item in solved.values()):
                reference = solved["ac"]
                measured.append({name: _measure(network, item, reference) for name, item in solved.items()})
            progress(TASK, number * len(hours) + count, total)
        rows += [_row(float(factor), name, [m[name] for m in measured], len(hours)) for name in chosen]
    return pd.DataFrame(rows, columns=[column.name for column in RUN_TABLES["sweep"].columns])


def peak_position(scenario: Scenario) -> int:
    """Return the position of the interval with the highest load."""
    loads = [float(scenario.inputs(k).load_p.sum()) for k in range(scenario.n_interval)]
    return int(np.argmax(loads))


@dataclass(frozen=True, kw_only=True)
class Measure:
    """One solved interval, summed up; units as in the run table ``sweep``."""

    load_mw: float
    generation_mw: float
    losses_mw: float
    cost: float
    mean_price: float
    price_error: float
    loss_component_error: float
    cost_error: float
    angle_error_deg: float


def _scaled(interval: PlannedInterval, factor: float) -> PlannedInterval:
    inputs = interval.inputs
    return replace(interval, inputs=replace(inputs, load_p=factor * inputs.load_p, load_q=factor * inputs.load_q))


def _measure(network: Network, item: SolvedInterval, reference: SolvedInterval) -> Measure:
    split, true = item.split, reference.split
    assert split is not None and true is not None  # noqa: PT018 - the caller has checked; told to the type checker
    base = network.base_mva
    load = item.inputs.load_p
    priced = np.where(np.isfinite(split.lmp), load, 0.0)
    # The mean on load; on buses where there is none.
    weight = priced if priced.sum() > 0.0 else np.isfinite(split.lmp).astype(float)
    served = float((load - item.result.unserved).sum() + item.result.bid_served.sum())
    angle, true_angle = item.result.point.angle, reference.result.point.angle
    across = [x[network.from_bus] - x[network.to_bus] for x in (angle, true_angle)]
    on = item.inputs.branch_in_service
    return Measure(
        load_mw=served * base,
        generation_mw=float(item.result.p.sum()) * base,
        losses_mw=float(item.result.point.loss.sum()) * base,
        cost=item.result.objective,
        mean_price=float(np.nansum(weight * split.lmp) / weight.sum()),
        price_error=float(np.nanmean(np.abs(split.lmp - true.lmp))),
        loss_component_error=float(np.nanmean(np.abs(split.loss - true.loss))),
        cost_error=item.result.objective - reference.result.objective,
        angle_error_deg=float(np.rad2deg(np.nanmax(np.abs(across[0] - across[1])[on], initial=0.0))),
    )


def _row(factor: float, name: str, measured: list[Measure], asked: int) -> dict[str, object]:
    def mean(field: str) -> float:
        return float(np.mean([getattr(m, field) for m in measured])) if measured else float("nan")

    return {
        "load_factor": factor,
        "formulation": name,
        "hours": len(measured),
        "hours_asked": asked,
        **{field: mean(field) for field in Measure.__dataclass_fields__},
    }
