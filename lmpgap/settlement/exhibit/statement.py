"""The statement of an exhibit: everything that is claimed and how, as plain values.

The page, the workbook and the verification are made from it and from the rows alone, so that no figure on the page can
differ from what is recomputed.
"""

from __future__ import annotations

import json
import math
from collections.abc import Mapping, Sequence
from datetime import date, datetime
from importlib.metadata import version
from pathlib import Path
from typing import TYPE_CHECKING, Any

import pandas as pd

from lmpgap import __version__
from lmpgap.settlement.exhibit.inputs import SETTLEMENT_FILES
from lmpgap.settlement.positions import COUNTED
from lmpgap.settlement.result import Settlement
from lmpgap.settlement.settle import RunTables

if TYPE_CHECKING:
    from lmpgap.scenario.scenario import Scenario

CAUTIONS = (
    "Not settlement-grade: metered quantities, loss distribution, make-whole and other charges are the operator's. "
    "The tariff governs.",
    "Filings need counsel or a licensed engineer.",
    "Network data can be confidential. This folder holds {contents}; check who may receive it.",
    "Re-solved prices rest on the offers, loads, outages and ratings in the inputs; a reading by delivery factors does "
    "not rest on the offers.",
    "A dispatch of the linear model assumes small resistance against reactance, flat voltages and small angles.",
)


def build_statement(
    settlement: Settlement,
    run: RunTables,
    scenario: Scenario,
    solves: pd.DataFrame,
    *,
    accounts: Sequence[str] | None,
    included: Sequence[str],
    filtered: Sequence[str],
    written_at: datetime,
) -> dict[str, Any]:
    """Return the statement of a settlement.

    Parameters
    ----------
    solves
        Certificates behind the rows.
    accounts
        Accounts the exhibit is limited to; ``None`` is all of them.
    included
        Names of the input files in the exhibit.
    filtered
        Those of them that were reduced to the accounts.
    """
    manifest = run.manifest
    return {
        "claim": settlement.claim,
        "against": settlement.against,
        "accounts": None if accounts is None else list(accounts),
        "options": settlement.options.as_dict(),
        "today": None if settlement.today is None else settlement.today.isoformat(),
        "written_at": written_at.isoformat(timespec="seconds"),
        "totals": plain_rows(settlement.accounts),
        "baselines": plain_rows(settlement.baselines),
        "certificate": certificate_summary(solves),
        "run_settings": manifest.get("settings", {}),
        "versions": {**manifest.get("versions", {}), "lmpgap": __version__, "jinja2": version("jinja2")},
        "inputs": dict(scenario.hashes),
        "included": list(included),
        "filtered": list(filtered),
        **recomputable(settlement, scenario, included),
    }


def recomputable(settlement: Settlement, scenario: Scenario, included: Sequence[str]) -> dict[str, Any]:
    """Return what of a statement follows from the settlement, the scenario and the files that are included."""
    settings = scenario.settings
    starts = settlement.rows["interval_start"]
    has_network = any(Path(name).stem not in SETTLEMENT_FILES for name in included)
    contents = "the network, offers and loads of the scenario" if has_network else "no network, offers or loads"
    reference = settlement.reference.groupby("reference", as_index=False).agg(
        intervals=("coverage", "size"), coverage=("coverage", "min")
    )
    return {
        "scenario": {
            "name": settings.name,
            "currency": settings.currency,
            "time_zone": settings.time_zone,
            "interval_minutes": settings.interval_minutes,
            "reference": {"kind": settings.reference.kind, "bus": settings.reference.bus},
            "susceptance": settings.dc.susceptance,
            "taps": settings.dc.taps,
        },
        "formulations": list(settlement.formulations),
        "first_interval": starts.min().isoformat(),
        "last_interval": starts.max().isoformat(),
        "intervals": int(starts.nunique()),
        "left_out": plain_rows(settlement.left_out),
        "holders": plain_rows(settlement.holders),
        "deadlines": plain_rows(settlement.deadlines),
        "rule": None if settlement.rule is None else settlement.rule.sentence,
        "reference": plain_rows(reference),
        "notes": list(settlement.notes),
        "cautions": [text.format(contents=contents) for text in CAUTIONS],
    }


def certificate_summary(solves: pd.DataFrame) -> list[dict[str, Any]]:
    """Return per formulation: number of solves, verdicts, and the worst figures."""
    summary = []
    for name, own in solves.groupby("formulation", sort=True):
        verdicts = own["verdict"].value_counts().sort_index()
        summary.append(
            {
                "formulation": name,
                "solves": len(own),
                "verdicts": {str(verdict): int(count) for verdict, count in verdicts.items()},
                "solver": ", ".join(sorted({str(solver) for solver in own["solver"].dropna()})),
                **{
                    column: plain(float(own[column].abs().max()))
                    for column in ("price_residual", "primal_residual", "dual_residual", "cost_gap")
                },
            }
        )
    return summary


def to_json(statement: Mapping[str, Any]) -> bytes:
    """Return the statement as UTF-8 JSON."""
    return (json.dumps(statement, indent=1, ensure_ascii=False, allow_nan=False) + "\n").encode("utf-8")


def plain_rows(frame: pd.DataFrame) -> list[dict[str, Any]]:
    """Return a table as a list of rows of plain values."""
    return [{str(key): plain(value) for key, value in row.items()} for row in frame.to_dict("records")]


def plain(value: Any) -> Any:
    """Return a value as JSON has it: dates as ISO 8601, what does not exist as ``None``."""
    if value is None or value is pd.NaT or value is pd.NA:
        return None
    if isinstance(value, pd.Timestamp):
        return value.date().isoformat() if value.tz is None else value.isoformat()
    if isinstance(value, date):
        return value.isoformat()
    if hasattr(value, "item"):
        value = value.item()
    if isinstance(value, float) and not math.isfinite(value):
        return None
    return value


def largest_rows(rows: pd.DataFrame, component: str, count: int) -> pd.DataFrame:
    """Return the counted rows with the largest amounts of one component, ties in the order of the table."""
    own = rows[(rows["component"] == component) & (rows["status"] == COUNTED)]
    order = own["amount"].abs().sort_values(ascending=False, kind="stable").index
    return own.loc[order[:count]]
