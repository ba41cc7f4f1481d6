"""Compute an exhibit's figures again, and tell where they differ from what it says."""

from __future__ import annotations

import dataclasses
import tempfile
from collections.abc import Callable, Iterable, Mapping
from datetime import date
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd

from lmpgap.errors import DataError, LmpgapError
from lmpgap.progress import Progress, silent
from lmpgap.scenario.network import FloatArray
from lmpgap.scenario.settings import DcConvention, Penalties, Reference
from lmpgap.settlement.aggregate import by_account, by_reason
from lmpgap.settlement.exhibit.manifest import Finding
from lmpgap.settlement.exhibit.statement import plain_rows
from lmpgap.settlement.options import SettlementOptions
from lmpgap.settlement.positions import COUNTED, combined_interval
from lmpgap.settlement.result import Settlement
from lmpgap.settlement.rights import by_holder
from lmpgap.settlement.settle import RunTables, settle
from lmpgap.tolerances import DEFAULT_TOLERANCES, Tolerances

if TYPE_CHECKING:
    from lmpgap.scenario.scenario import Scenario

SHOWN = 20
"""Findings of one kind that are told one by one; the rest is counted."""

Reprice = Callable[..., RunTables]
"""Solves a scenario into a run folder: takes what `lmpgap.runs.price.price` takes, ``losses`` as they were recorded."""


def settle_again(
    scenario: Scenario,
    statement: Mapping[str, Any],
    intervals: pd.DatetimeIndex,
    *,
    reprice: Reprice,
    progress: Progress = silent,
) -> tuple[Settlement, pd.DataFrame]:
    """Solve the intervals of an exhibit again with its settings, and settle them again.

    Returns
    -------
    settlement
    solves
        Run table ``solves`` of the new solves.

    Raises
    ------
    LmpgapError
        When the statement's settings cannot be used, or the intervals are not in the scenario.
    """
    options = SettlementOptions.from_dict(statement["options"])
    where = pd.DatetimeIndex(scenario.interval_starts).get_indexer(intervals)
    positions = sorted(int(position) for position in where if position >= 0)
    if not positions:
        raise DataError("the inputs hold none of the intervals of the exhibit")
    accounts = statement["accounts"]
    today = statement["today"]
    with tempfile.TemporaryDirectory(prefix="lmpgap-verify-") as folder:
        run = reprice(
            scenario,
            Path(folder) / "run",
            formulations=tuple(statement["formulations"]),
            positions=positions,
            progress=progress,
            **run_settings(statement["run_settings"]),
        )
        settlement = settle(
            run,
            scenario,
            statement["claim"],
            statement["against"],
            options=options,
            today=None if today is None else date.fromisoformat(today),
            accounts=accounts,
            write=False,
            progress=progress,
        )
        return settlement, run.table("solves")


def run_settings(recorded: Mapping[str, Any]) -> dict[str, Any]:
    """Return the recorded settings of a run as arguments of a `Reprice`.

    Raises
    ------
    DataError
        When they are not what a run records.
    """
    types: dict[str, Callable[..., Any]] = {
        "reference": Reference,
        "dc": DcConvention,
        "penalties": Penalties,
        "tolerances": Tolerances,
    }
    try:
        return {
            "losses": {},
            **{
                name: types[name](**value) if name in types else tuple(value) if isinstance(value, list) else value
                for name, value in recorded.items()
            },
        }
    except TypeError as error:
        raise DataError(f"the recorded run settings are of another version of lmpgap ({error})") from error


def unusual_settings(statement: Mapping[str, Any]) -> list[str]:
    """Return which recorded tolerances and options differ from the defaults: the reader judges whether they may."""
    lines = []
    defaults = dataclasses.asdict(DEFAULT_TOLERANCES)
    for name, value in statement["run_settings"].get("tolerances", {}).items():
        if name in defaults and value != defaults[name]:
            lines.append(f"tolerance {name} is {value}, the default is {defaults[name]}")
    chosen = SettlementOptions().as_dict()
    for name, value in statement["options"].items():
        # Materiality is the analyst's own; where the posted components stand is found out.
        if name in chosen and value != chosen[name] and name not in ("materiality", "posted_reference"):
            lines.append(f"option {name} is {value}, the default is {chosen[name]}")
    return lines


def added_up(rows: pd.DataFrame, rights: pd.DataFrame, statement: Mapping[str, Any]) -> list[Finding]:
    """Add up the rows of an exhibit independently of any solve: amounts, intervals and totals.

    Parameters
    ----------
    rows, rights
        As a settlement has them.
    """
    cent = 1e-6
    findings: list[Finding] = []
    counted = rows[rows["status"] == COUNTED]
    expected = counted["mw"] * counted["hours"] * (counted["posted"] - counted["reference"])
    low, high = combined_interval(counted, str(statement["options"]["combine"]))
    for column, values in (("amount", expected), ("amount_low", low), ("amount_high", high)):
        stated = counted[column].to_numpy(float)
        values = np.asarray(values, dtype=float)
        wrong = ~(np.abs(stated - values) <= cent * (1.0 + np.abs(values)))
        findings += _line_findings(counted.index[wrong], column, stated[wrong], values[wrong])
    findings += [
        Finding(place=f"statement.json, {name}", message=f"is not the sum of {file}: {difference}")
        for name, file, again in (
            ("holders", "rights.csv", by_holder(rights)),
            ("left_out", "rows.csv", by_reason(rows)),
        )
        if (difference := first_difference(statement[name], plain_rows(again), cent))
    ]
    totals = by_account(rows, float(statement["options"]["materiality"]))
    findings += compare_tables(
        pd.DataFrame(statement["totals"], columns=totals.columns),
        totals,
        ["account", "component"],
        "statement.json, totals",
        lambda frame: np.full(len(frame), cent) * (1.0 + frame["amount"].abs().to_numpy(float)),
    )
    return findings


def compare_rows(stated: pd.DataFrame, again: pd.DataFrame, price_tolerance: float) -> list[Finding]:
    """Compare settlement rows with recomputed ones, dollar by dollar.

    Parameters
    ----------
    price_tolerance
        Difference of prices that two machines may have [$/MWh]; an amount may differ by that times its MWh and half a
        cent.
    """

    def slack(frame: pd.DataFrame) -> FloatArray:
        return np.asarray(0.005 + price_tolerance * (frame["mw"] * frame["hours"]).abs().to_numpy(float))

    return compare_tables(
        stated,
        again,
        ["account", "interval_start", "node", "component"],
        "rows.csv",
        slack,
        price_columns={
            "mw": 1e-9,
            "posted": price_tolerance,
            "reference": price_tolerance,
            "energy_claim": price_tolerance,
            "factor_claim": price_tolerance,
            "factor_reference": price_tolerance,
        },
    )


def compare_rights(stated: pd.DataFrame, again: pd.DataFrame, price_tolerance: float) -> list[Finding]:
    """Compare settled rights with recomputed ones."""

    def slack(frame: pd.DataFrame) -> FloatArray:
        return np.asarray(0.005 + 2.0 * price_tolerance * frame["mw"].abs().to_numpy(float))

    return compare_tables(
        stated,
        again,
        ["holder", "interval_start", "source", "sink", "kind"],
        "rights.csv",
        slack,
        price_columns={"mw": 1e-9, "posted": 2 * price_tolerance, "reference": 2 * price_tolerance},
    )


def compare_solves(stated: pd.DataFrame, again: pd.DataFrame) -> list[Finding]:
    """Compare the certificates: how each solve ended, its verdict and its cost."""
    names = ["interval_start", "formulation", "status", "verdict", "objective"]

    def slack(frame: pd.DataFrame) -> FloatArray:
        return np.asarray(0.01 + 1e-6 * frame["objective"].abs().fillna(0.0).to_numpy(float))

    return compare_tables(stated[names], again[names], names[:2], "solves.csv", slack)


def compare_tables(
    stated: pd.DataFrame,
    again: pd.DataFrame,
    keys: list[str],
    place: str,
    slack: Callable[[pd.DataFrame], FloatArray],
    price_columns: Mapping[str, float] | None = None,
) -> list[Finding]:
    """Compare two tables by their keys: rows on one side only, other text, figures further apart than allowed.

    Parameters
    ----------
    slack
        From the recomputed rows, how far money may be apart [$].
    price_columns
        Columns that are not money, and how far they may be apart.
    """
    findings = []
    twice = stated.duplicated(keys)
    if twice.any():
        findings += _listed(stated[twice], keys, place, "stands twice")
        stated = stated[~twice]
    both = stated.merge(again, on=keys, how="outer", suffixes=("", "_again"), indicator=True)
    findings += _listed(both[both["_merge"] == "left_only"], keys, place, "does not come out of the inputs")
    findings += _listed(both[both["_merge"] == "right_only"], keys, place, "is missing")
    both = both[both["_merge"] == "both"]
    recomputed = pd.DataFrame({name: both[f"{name}_again"] for name in again.columns if name not in keys})
    money = slack(recomputed.assign(**{key: both[key] for key in keys}))
    for name in recomputed.columns:
        if name not in stated.columns:
            findings.append(Finding(place=place, message=f"has no column {name}"))
            continue
        old, new = both[name], recomputed[name]
        if pd.api.types.is_bool_dtype(new) or not pd.api.types.is_numeric_dtype(new):
            wrong = old.astype(str).to_numpy() != new.astype(str).to_numpy()
        else:
            before, after = pd.to_numeric(old, errors="coerce").to_numpy(float), new.to_numpy(float)
            allowed = (price_columns or {}).get(name, money)
            wrong = ~((np.abs(before - after) <= allowed) | (np.isnan(before) & np.isnan(after)))
        findings += _listed(both[wrong], keys, place, f"{name} is {{{name}}}, recomputed {{{name}_again}}")
    extra = [name for name in stated.columns if name not in again.columns]
    findings += [Finding(place=place, message=f"has a column {name} that does not belong there") for name in extra]
    return findings


def first_difference(stated: Any, again: Any, allowed: float) -> str:
    """Return the first place in which two nested plain values differ, in words; empty where they agree.

    Parameters
    ----------
    allowed
        Relative and absolute difference of figures that counts as none.
    """
    if isinstance(again, Mapping) and isinstance(stated, Mapping) and stated.keys() == again.keys():
        pairs: Iterable[tuple[Any, Any, Any]] = ((key, stated[key], again[key]) for key in again)
    elif isinstance(again, list) and isinstance(stated, list) and len(stated) == len(again):
        pairs = ((number + 1, one, other) for number, (one, other) in enumerate(zip(stated, again, strict=True)))
    elif isinstance(again, float) and isinstance(stated, (int, float)) and not isinstance(stated, bool):
        return "" if abs(stated - again) <= allowed * (1.0 + abs(again)) else f"{stated:,.6g}, recomputed {again:,.6g}"
    else:
        same = type(stated) is type(again) and stated == again
        return "" if same else f"{_shown(stated)}, recomputed {_shown(again)}"
    for key, one, other in pairs:
        difference = first_difference(one, other, allowed)
        if difference:
            return f"{key}: {difference}"
    return ""


def _listed(rows: pd.DataFrame, keys: list[str], place: str, message: str) -> list[Finding]:
    """Tell about the first rows; ``{column}`` in the message stands for the row's value."""
    found = []
    for record in rows.head(SHOWN).to_dict("records"):
        row = {str(name): _shown(value) for name, value in record.items()}
        found.append(Finding(place=f"{place}, {', '.join(row[key] for key in keys)}", message=message.format_map(row)))
    if len(rows) > SHOWN:
        found.append(Finding(place=place, message=f"and {len(rows) - SHOWN} more rows like the last"))
    return found


def _line_findings(lines: pd.Index, column: str, stated: FloatArray, expected: FloatArray) -> list[Finding]:
    # Line numbers as an editor shows them; the header is line 1.
    found = [
        Finding(place=f"rows.csv, line {int(line) + 2}", message=f"{column} is {old:,.6g}, its parts give {new:,.6g}")
        for line, old, new in zip(lines[:SHOWN], stated[:SHOWN], expected[:SHOWN], strict=True)
    ]
    if len(lines) > SHOWN:
        found.append(Finding(place="rows.csv", message=f"and {len(lines) - SHOWN} more rows like the last"))
    return found


def _shown(value: Any) -> str:
    if isinstance(value, pd.Timestamp):
        return value.isoformat()
    if isinstance(value, float):
        return f"{value:,.6g}"
    text = str(value)
    return text if len(text) <= 60 else f"{text[:57]}..."


def described(error: LmpgapError) -> str:
    """Return an error in one paragraph."""
    return " ".join(str(error).split())
