"""Values that are allowed and yet look like a slip of units; each rule warns with its reason.

The limits are far outside what transmission networks have: a slip is a factor of a hundred or a thousand.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from lmpgap.scenario.coverage import total_load
from lmpgap.scenario.faults import FaultLog, as_rows
from lmpgap.scenario.intervals import IntervalSource
from lmpgap.scenario.network import BoolArray, FloatArray
from lmpgap.scenario.settings import ScenarioSettings
from lmpgap.scenario.typed import ColumnTable

HIGHEST_KV = 1500.0
"""The highest transmission voltage in service is 1,100 kV; a distribution voltage in volts is above 1,500."""
HIGHEST_BUS_PU = 2.0
HIGHEST_MEDIAN_X = 1.0
"""Series reactances of transmission branches are 0.001 to 0.5 pu; in percent or ohms the median is above 1."""
RADIANS = 1.6
"""Angle limits are 5 to 180 deg; all of them below pi/2 looks like radians."""
LARGEST_BUS_MW = 1e5
LARGEST_RATING_MVA = 5e4
DELIVERY_FACTORS = (0.5, 1.5)


@dataclass(frozen=True)
class _Rule:
    """One rule on one column: which rows are odd, given all values of the column that are there."""

    table: str
    column: str
    odd: Callable[[FloatArray], BoolArray]
    reason: str


def _median_above(limit: float) -> Callable[[FloatArray], BoolArray]:
    """Mark large values when they are the rule rather than the exception."""

    def odd(values: FloatArray) -> BoolArray:
        size = np.abs(values)
        return size > limit if size.size and float(np.median(size)) > limit else np.zeros(size.size, dtype=bool)

    return odd


def _above(limit: float) -> Callable[[FloatArray], BoolArray]:
    return lambda values: np.abs(values) > limit


def _outside(low: float, high: float) -> Callable[[FloatArray], BoolArray]:
    return lambda values: (values < low) | (values > high)


def _all_radians(values: FloatArray) -> BoolArray:
    size = np.abs(values)
    small = bool(size.size) and 0 < float(size.max()) < RADIANS
    return size > 0 if small else np.zeros(size.size, dtype=bool)


def _radian_fractions(values: FloatArray) -> BoolArray:
    """Mark phase shifts that are a twelfth or sixth of pi: 15 or 30 degrees written in radians."""
    size = np.abs(values)
    return (np.abs(size - np.pi / 6) < 1e-3) | (np.abs(size - np.pi / 12) < 1e-3)


_RULES: Sequence[_Rule] = (
    _Rule("buses", "base_kv", _above(HIGHEST_KV), "no grid has such a voltage in kV: is it in V?"),
    _Rule(
        "buses",
        "v_min_pu",
        _above(HIGHEST_BUS_PU),
        "twice nominal voltage and more: is it in percent or kV instead of pu?",
    ),
    _Rule(
        "buses",
        "v_max_pu",
        _above(HIGHEST_BUS_PU),
        "twice nominal voltage and more, which is no limit: is it in percent or kV instead of pu?",
    ),
    _Rule(
        "branches",
        "x_pu",
        _median_above(HIGHEST_MEDIAN_X),
        "half of all branches have more than 1 pu: are they in percent or ohms instead of pu on base_mva?",
    ),
    _Rule(
        "branches",
        "r_pu",
        _median_above(HIGHEST_MEDIAN_X),
        "half of all branches have more than 1 pu: are they in percent or ohms instead of pu on base_mva?",
    ),
    _Rule("branches", "r_pu", lambda values: values < 0, "a negative resistance creates power"),
    _Rule(
        "branches",
        "charging_pu",
        _median_above(10.0),
        "half of all branches have more than 10 pu: is it in Mvar or microsiemens instead of pu on base_mva?",
    ),
    _Rule(
        "branches",
        "tap_ratio",
        _outside(0.5, 1.5),
        "is far from 1: is it in percent, or a ratio of kV instead of per-unit voltages?",
    ),
    _Rule("branches", "angle_min_deg", _all_radians, "all limits are below pi/2: are they in radians?"),
    _Rule("branches", "angle_max_deg", _all_radians, "all limits are below pi/2: are they in radians?"),
    _Rule(
        "branches",
        "angle_min_deg",
        lambda values: (values <= -90) & (values > -180),
        "is taken as no limit: a quarter turn is beyond what a branch can carry",
    ),
    _Rule(
        "branches",
        "angle_max_deg",
        lambda values: (values >= 90) & (values < 180),
        "is taken as no limit: a quarter turn is beyond what a branch can carry",
    ),
    _Rule("branches", "phase_shift_deg", _radian_fractions, "is pi/6 or pi/12: is it in radians?"),
    _Rule(
        "branches",
        "normal_rating_mva",
        _median_above(LARGEST_RATING_MVA),
        "half of all ratings are above 50,000 MVA: are they in kVA?",
    ),
    _Rule(
        "branches",
        "normal_rating_mva",
        lambda values: values == 0,
        "a rating of zero lets nothing through; leave the cell empty if there is no limit",
    ),
    _Rule(
        "branches",
        "emergency_rating_mva",
        lambda values: values == 0,
        "a rating of zero lets nothing through; leave the cell empty if there is no limit",
    ),
    _Rule("resources", "eco_max_mw", _above(LARGEST_BUS_MW), "is more than any plant has: is it in kW?"),
    _Rule("loads", "mw", _above(LARGEST_BUS_MW), "is more than any single bus takes: is it in kW?"),
    _Rule("bids", "mw", _above(LARGEST_BUS_MW), "is more than any single bus takes: is it in kW?"),
    _Rule(
        "offers",
        "price",
        _median_above(5000.0),
        "half of all prices are beyond 5,000 per MWh: are they in cents, or per GWh?",
    ),
    _Rule(
        "posted",
        "lmp",
        _median_above(5000.0),
        "half of all prices are beyond 5,000 per MWh: are they in cents, or per GWh?",
    ),
    _Rule(
        "delivery_factors",
        "delivery_factor",
        _outside(*DELIVERY_FACTORS),
        "is far from 1: is it a loss factor (1 - delivery factor), or in percent?",
    ),
    _Rule("positions", "mw", _above(LARGEST_BUS_MW), "is more than any single bus takes: is it in kW?"),
)


def check_plausibility(
    tables: Mapping[str, ColumnTable],
    source: IntervalSource,
    settings: ScenarioSettings,
    log: FaultLog,
) -> None:
    """Add a warning for each column that looks like a slip of units, at its first row."""
    for rule in _RULES:
        table = tables[rule.table]
        values = table.number(rule.column)
        there = np.flatnonzero(np.isfinite(values))
        _warn_rows(table, rule.column, there[as_rows(rule.odd(values[there]))], rule.reason, log)
    _check_against_each_other(tables, source, settings, log)


def _warn_rows(
    table: ColumnTable, column: str, rows: np.ndarray[tuple[int], np.dtype[np.int64]], reason: str, log: FaultLog
) -> None:
    if rows.size == 0:
        return
    first = rows[:1]
    others = f" ({rows.size:,} rows like it)" if rows.size > 1 else ""
    log.warn(
        table.file,
        reason + others,
        row=int(table.lines(first)[0]),
        column=column,
        value=f"{table.number(column)[first[0]]:g}",
        kind="plausibility",
    )


def _check_against_each_other(
    tables: Mapping[str, ColumnTable],
    source: IntervalSource,
    settings: ScenarioSettings,
    log: FaultLog,
) -> None:
    branches, resources, loads, offers = (tables[name] for name in ("branches", "resources", "loads", "offers"))
    with np.errstate(invalid="ignore"):
        r, x = np.abs(branches.number("r_pu")), np.abs(branches.number("x_pu"))
        if branches.n_row >= 3 and float(np.median(r / x)) > 2:
            log.warn(
                branches.file,
                "half of all branches have more than twice as much resistance as reactance: are r_pu and x_pu swapped?",
                column="r_pu",
                kind="plausibility",
            )
        weak = branches.number("emergency_rating_mva") < branches.number("normal_rating_mva")
    _warn_rows(branches, "emergency_rating_mva", as_rows(weak), "is below the normal rating", log)
    totals = total_load(source) * settings.base_mva
    peak = float(totals.max(initial=0.0))
    on = source.resource_in_service
    capacity = float(np.maximum(resources.number("eco_max_mw"), 0)[on].sum())
    if peak > 0 and capacity > 200 * peak:
        log.warn(
            resources.file,
            f"resources can give {capacity:,.0f} MW and the highest load is {peak:,.0f} MW: "
            "is one of the two not in MW?",
            column="eco_max_mw",
            kind="plausibility",
        )
    elif capacity > 0 and peak > 20 * capacity:
        log.warn(
            loads.file,
            f"the highest load is {peak:,.0f} MW and resources can give {capacity:,.0f} MW: "
            "is one of the two not in MW?",
            column="mw",
            kind="plausibility",
        )
    elif peak > capacity and offers.n_row:
        short = int(np.count_nonzero(totals > capacity))
        log.warn(
            loads.file,
            f"the load is above everything the resources can give ({capacity:,.0f} MW) in {short:,} of "
            f"{totals.size:,} intervals, at most {peak:,.0f} MW",
            column="mw",
            kind="plausibility",
        )
    reactive = float(np.abs(loads.number("mvar")).sum())
    active = float(np.abs(loads.number("mw")).sum())
    if active > 0 and reactive > 3 * active:
        log.warn(
            loads.file,
            "reactive load is more than three times the active load: are mw and mvar swapped, or mvar in kvar?",
            column="mvar",
            kind="plausibility",
        )
    rating = branches.number("normal_rating_mva")
    rating = rating[np.isfinite(rating) & (rating > 0)]
    if rating.size >= 3 and peak > 0 and float(rating.max()) < 0.005 * peak:
        log.warn(
            branches.file,
            f"the largest rating is {rating.max():g} MVA where the load is {peak:,.0f} MW: are ratings in kA or pu?",
            column="normal_rating_mva",
            kind="plausibility",
        )
    prices = np.abs(np.concatenate([offers.number("price"), offers.number("end_price")]))
    if prices.size >= 3 and 0 < float(prices.max()) < 1:
        log.warn(
            offers.file,
            f"the highest price is {prices.max():g} per MWh: is it per kWh?",
            column="price",
            kind="plausibility",
        )
    dearest = float(prices.max(initial=0.0))
    for name in ("power_balance", "transmission"):
        penalty = getattr(settings.penalties, name)
        if penalty is not None and penalty < dearest:
            log.warn(
                "scenario.toml",
                f"is below the highest offer, {dearest:g}: the limit gives way before that offer is used",
                column=f"[penalties] {name}",
                value=f"{penalty:g}",
                kind="plausibility",
            )
