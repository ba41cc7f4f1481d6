"""What a scenario holds, in figures: what `lmpgap check` prints."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from lmpgap.scenario.coverage import total_load
from lmpgap.scenario.times import hour_ending_labels

if TYPE_CHECKING:
    from lmpgap.scenario.scenario import Scenario


def overview(scenario: Scenario) -> dict[str, Any]:
    """Return what would be solved, by name: counts, first and last interval, load, and what is limited.

    The values are numbers, texts, or lists of texts, so that they can be printed or written as JSON.
    """
    settings, source = scenario.settings, scenario.source
    tables = scenario.columns
    step = np.timedelta64(settings.interval_minutes, "m")
    starts = scenario.starts
    labels = hour_ending_labels(starts[[0, -1]], settings.time_zone, settings.interval_minutes)
    timed = not np.all(np.isnat(tables["loads"].time("interval_start")))
    totals = total_load(source) * settings.base_mva
    branches, resources = tables["branches"], tables["resources"]

    def distinct(table: str, column: str) -> int:
        text = tables[table].text(column)
        return int(np.unique(text.codes).size)

    return {
        "scenario": settings.name,
        "folder": str(scenario.folder),
        "currency": settings.currency,
        "time_zone": settings.time_zone,
        "intervals": scenario.n_interval,
        "interval_minutes": settings.interval_minutes,
        "first_interval": labels[0] if timed else "",
        "last_interval": labels[1] if timed else "",
        "missing_intervals": int((starts[-1] - starts[0]) / step) + 1 - scenario.n_interval if timed else 0,
        "buses": tables["buses"].n_row,
        "branches": branches.n_row,
        "branches_out_of_service": int(np.count_nonzero(~source.branch_in_service)),
        "branches_with_normal_rating": int(np.count_nonzero(np.isfinite(branches.number("normal_rating_mva")))),
        "resources": resources.n_row,
        "resources_out_of_service": int(np.count_nonzero(~source.resource_in_service)),
        "capacity_mw": float(np.maximum(resources.number("eco_max_mw"), 0.0)[source.resource_in_service].sum()),
        "lowest_load_mw": float(totals.min()),
        "highest_load_mw": float(totals.max()),
        "offer_segments": tables["offers"].n_row,
        "bids": tables["bids"].n_row,
        "availability_rows": tables["availability"].n_row,
        "outages": tables["outages"].n_row,
        "contingencies": distinct("contingencies", "contingency"),
        "monitored_branches": _monitored(scenario),
        "interfaces": distinct("interfaces", "interface"),
        "hubs": distinct("hubs", "hub"),
        "posted_prices": tables["posted"].n_row,
        "posted_nodes": distinct("posted", "node"),
        "posted_constraints": tables["posted_constraints"].n_row,
        "delivery_factors": tables["delivery_factors"].n_row,
        "positions": tables["positions"].n_row,
        "accounts": distinct("positions", "account"),
        "rights": tables["rights"].n_row,
        "penalties": {
            name: value
            for name in ("power_balance", "transmission")
            if (value := getattr(settings.penalties, name)) is not None
        },
    }


def _monitored(scenario: Scenario) -> int:
    tables = scenario.columns
    if tables["contingencies"].n_row == 0:
        return 0
    if tables["monitored"].n_row:
        return tables["monitored"].n_row
    return int(np.count_nonzero(np.isfinite(tables["branches"].number("emergency_rating_mva"))))


def overview_lines(figures: dict[str, Any]) -> list[str]:
    """Return the figures of `overview` as lines of text."""

    def count(name: str, one: str, many: str | None = None) -> str:
        number = figures[name]
        return f"{number:,} {one if number == 1 else many or one + 's'}"

    def out(name: str) -> str:
        return f" ({figures[name]:,} out of service)" if figures[name] else ""

    when = "one interval without a time"
    if figures["first_interval"]:
        when = (
            f"{count('intervals', 'interval')} of {figures['interval_minutes']} min, {figures['first_interval']} to "
            f"{figures['last_interval']}, {figures['time_zone']}"
        )
        if figures["missing_intervals"]:
            when += f" ({figures['missing_intervals']:,} missing)"
    load = f"{figures['lowest_load_mw']:,.1f} to {figures['highest_load_mw']:,.1f} MW"
    penalties = figures["penalties"]
    rows = [
        ("intervals", when),
        (
            "network",
            f"{count('buses', 'bus', 'buses')}, {count('branches', 'branch', 'branches')}"
            f"{out('branches_out_of_service')}, {figures['branches_with_normal_rating']:,} with a rating",
        ),
        (
            "supply",
            f"{count('resources', 'resource')}{out('resources_out_of_service')}, {figures['capacity_mw']:,.1f} MW, "
            f"{count('offer_segments', 'offer segment')}, {count('availability_rows', 'row')} of availability",
        ),
        ("load", f"{load}, {count('bids', 'price-sensitive bid')}"),
        (
            "security",
            f"{count('contingencies', 'contingency', 'contingencies')} on "
            f"{count('monitored_branches', 'monitored branch', 'monitored branches')}, "
            f"{count('interfaces', 'interface')}, {count('outages', 'outage')}",
        ),
        (
            "soft limits",
            ", ".join(f"{name.replace('_', ' ')} at {value:,.0f}" for name, value in penalties.items())
            or "none: every limit is hard",
        ),
        (
            "posted",
            f"{count('posted_prices', 'price')} at {count('posted_nodes', 'node')}, "
            f"{count('posted_constraints', 'constraint row')}, {count('delivery_factors', 'delivery factor')}",
        ),
        (
            "money",
            f"{count('positions', 'position row')} of {count('accounts', 'account')}, {count('rights', 'right')}, "
            f"{count('hubs', 'hub')}",
        ),
    ]
    width = max(len(name) for name, _ in rows)
    return [f"{figures['scenario']}", *(f"  {name:<{width}}  {text}" for name, text in rows)]
