"""The claim on one page, and the method behind it, from the statement and the rows alone."""

from __future__ import annotations

import math
from collections.abc import Mapping
from functools import cache
from typing import Any

import pandas as pd
from jinja2 import Environment, PackageLoader, StrictUndefined, Template

from lmpgap.settlement.exhibit.statement import largest_rows
from lmpgap.settlement.options import FACTOR_COMPONENT

ACCOUNTS_SHOWN = 8
LARGEST_ROWS = 8
BASELINES_SHOWN = 8
REASONS_SHOWN = 4
"""What one page of A4 holds; each account beyond the third takes the place of one of the largest rows."""

NAME_LENGTH = 42
"""Longer names are shortened on the page; the tables have them in full."""

READINGS = {
    FACTOR_COMPONENT: "delivery factors, posted energy price",
    "loss": "re-solved loss component",
}


def claim_page(statement: Mapping[str, Any], rows: pd.DataFrame) -> str:
    """Return the claim as a self-contained HTML page.

    Parameters
    ----------
    statement
        From `lmpgap.settlement.exhibit.statement.build_statement`.
    rows
        As in rows.csv.
    """
    return _template("claim.html").render(**_view(statement, rows))


def method_page(statement: Mapping[str, Any], rows: pd.DataFrame) -> str:
    """Return method, conventions, certificate, versions, tolerances and cautions as Markdown."""
    return _template("method.md").render(**_view(statement, rows))


def _view(statement: Mapping[str, Any], rows: pd.DataFrame) -> dict[str, Any]:
    """Return what the templates show: every figure as text, so that a template only places it."""
    basis = statement["options"]["basis"]
    totals = [row for row in statement["totals"] if row["component"] == basis]
    totals.sort(key=lambda row: -abs(row["amount"]))
    deadlines = _first_deadlines(statement["deadlines"])
    left_out = [row for row in statement["left_out"] if row["component"] == basis]
    shown = min(len(totals), ACCOUNTS_SHOWN)
    largest = largest_rows(rows, basis, LARGEST_ROWS - max(0, shown - 3))
    return {
        "statement": statement,
        "currency": statement["scenario"]["currency"],
        "basis": READINGS[basis],
        "readings": READINGS,
        "accounts": [
            {
                "name": short(row["account"]),
                "amount": money(row["amount"]),
                "worst": span(row["amount_low"], row["amount_high"]),
                "likely": span(row["independent_low"], row["independent_high"]),
                "material": "yes" if row["material"] else "no",
                "rows": f"{row['rows']:,}",
                "left_out": f"{row['left_out']:,}",
                "deadline": deadlines.get(row["account"], "not known"),
            }
            for row in totals[:ACCOUNTS_SHOWN]
        ],
        "accounts_more": max(0, len(totals) - ACCOUNTS_SHOWN),
        "sentences": [_sentence(row, statement) for row in totals[:3]],
        "largest": [
            {
                "account": short(row["account"]),
                "hour": row["hour_ending"],
                "node": short(row["node"]),
                "mw": f"{row['mw']:,.1f}",
                "posted": f"{row['posted']:.3f}",
                "reference": f"{row['reference']:.3f}",
                "factors": f"{row['factor_claim']:.4f} / {row['factor_reference']:.4f}",
                "amount": money(row["amount"]),
                "span": span(row["amount_low"], row["amount_high"]),
            }
            for row in largest.to_dict("records")
        ],
        "baselines": [
            {
                "account": short(row["account"]),
                "reading": READINGS[row["component"]],
                "against": row["against"],
                "amount": money(row["amount"]),
                "worst": span(row["amount_low"], row["amount_high"]),
            }
            for row in _baselines(statement["baselines"], totals)
        ],
        "certificate": [
            {
                **row,
                "verdict_text": ", ".join(f"{count} {verdict}" for verdict, count in row["verdicts"].items()),
                "price_residual_text": figure(row["price_residual"]),
                "primal_residual_text": figure(row["primal_residual"]),
                "cost_gap_text": figure(row["cost_gap"]),
            }
            for row in statement["certificate"]
        ],
        "left_out": left_out[:REASONS_SHOWN],
        "left_out_more": max(0, len(left_out) - REASONS_SHOWN),
        "hashes": [{"name": name, "short": digest[:12]} for name, digest in sorted(statement["inputs"].items())],
        "settings": [{"name": name, "value": value} for name, value in flattened(statement["run_settings"])],
        "chosen": [{"name": name, "value": _text(value)} for name, value in statement["options"].items()],
    }


def _baselines(baselines: list[dict[str, Any]], totals: list[dict[str, Any]]) -> list[dict[str, Any]]:
    """Return the baselines of the accounts with the largest amounts, as many accounts as fit, one at least."""
    chosen: list[dict[str, Any]] = []
    for total in totals:
        own = [row for row in baselines if row["account"] == total["account"]]
        if chosen and len(chosen) + len(own) > BASELINES_SHOWN:
            break
        chosen += own
    return chosen


def short(name: str) -> str:
    """Return a name that fits a line; a long one loses its middle, so that names that differ at either end still do."""
    return name if len(name) <= NAME_LENGTH else f"{name[: NAME_LENGTH - 17]}…{name[-16:]}"


def money(value: float | None) -> str:
    """Return an amount with thousands and cents."""
    return "n/a" if value is None or not math.isfinite(value) else f"{value:,.2f}".replace("-0.00", "0.00")


def span(low: float | None, high: float | None) -> str:
    """Return an interval of money."""
    return f"{money(low)} to {money(high)}"


def figure(value: float | None) -> str:
    """Return a small figure with two digits."""
    return "n/a" if value is None else f"{value:.1e}"


def flattened(settings: Mapping[str, Any], prefix: str = "") -> list[tuple[str, str]]:
    """Return nested settings as dotted names and text."""
    lines: list[tuple[str, str]] = []
    for name, value in settings.items():
        if isinstance(value, Mapping):
            lines += flattened(value, f"{prefix}{name}.")
        else:
            lines.append((f"{prefix}{name}", _text(value)))
    return lines


def _text(value: Any) -> str:
    return ", ".join(map(str, value)) if isinstance(value, list) else str(value)


def _sentence(row: Mapping[str, Any], statement: Mapping[str, Any]) -> dict[str, str]:
    """Return the claim of one account in words, split around the name so that the page can isolate its direction."""
    currency = statement["scenario"]["currency"]
    amount, low, high = row["amount"], row["amount_low"], row["amount_high"]
    side = "disadvantage" if amount > 0 else "advantage"
    size = f"{money(abs(amount))} {currency}"
    bounds = sorted((abs(low), abs(high)))
    if low <= 0.0 <= high:
        sure = f"but the interval from {span(low, high)} {currency} does not exclude zero"
    else:
        sure = f"at least {money(bounds[0])} and at most {money(bounds[1])} {currency}"
    verdict = "Material." if row["material"] else "Not material."
    return {
        "name": short(row["account"]),
        "rest": f"{size} to the account's {side}, {sure}. {verdict}",
    }


def _first_deadlines(deadlines: list[dict[str, Any]]) -> dict[str, str]:
    """Return per account the first deadline that has not passed, or that all have."""
    text: dict[str, str] = {}
    by_account: dict[str, list[dict[str, Any]]] = {}
    for row in deadlines:
        if row["deadline"] is not None:
            by_account.setdefault(row["account"], []).append(row)
    for account, own in by_account.items():
        own.sort(key=lambda row: row["deadline"])
        if own[0]["days_left"] is None:
            text[account] = f"from {own[0]['deadline']}"
            continue
        open_ones = [row for row in own if row["days_left"] >= 0]
        passed = len(own) - len(open_ones)
        if not open_ones:
            text[account] = f"all passed, the last on {own[-1]['deadline']}"
        else:
            first = open_ones[0]
            days = "last day" if first["days_left"] == 0 else f"{first['days_left']} left"
            text[account] = f"{first['deadline']} ({days})" + (f", {passed} passed" if passed else "")
    return text


@cache
def _template(name: str) -> Template:
    environment = Environment(
        loader=PackageLoader("lmpgap.settlement", "templates"),
        autoescape=name.endswith(".html"),
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
        keep_trailing_newline=True,
    )
    environment.filters["markdown_text"] = markdown_text
    environment.filters["short"] = short
    return environment.get_template(name)


def markdown_text(text: object) -> str:
    """Return text that Markdown shows as it stands: names from the data cannot become markup, links or new lines."""
    escaped = "".join(f"\\{c}" if c in "\\`*_{}[]()#+!|~-" else c for c in str(text))
    return escaped.replace("&", "&amp;").replace("<", "&lt;").replace(">", "&gt;").replace("\n", " ").replace("\r", " ")
