"""Money: what accounts may claim, what load would pay, findings of the posted-price checks."""

from __future__ import annotations

import numpy as np
import pandas as pd

from lmpgap.report.text import NO_VALUE, number
from lmpgap.report.view.cube import PriceCube
from lmpgap.report.view.hours import Hours
from lmpgap.report.view.model import AccountTotal, Table
from lmpgap.report.view.nodes import Nodes
from lmpgap.scenario.network import FloatArray
from lmpgap.settlement.result import Settlement

_ROWS = 30


def account_totals(table: pd.DataFrame, settlement: Settlement | None) -> tuple[AccountTotal, ...]:
    """Return what each account has at stake in the loss component over the week, the largest size first.

    Parameters
    ----------
    table
        Run table ``settlement``; summed row by row where there is no settlement.
    settlement
        The claims as they were settled, with the intervals and the materiality that belong to a whole week.
    """
    if settlement is not None:
        claims = settlement.claims
        figures = claims[["amount", "amount_low", "amount_high"]].to_numpy(dtype=float)
        names = [str(account) for account in claims["account"]]
        material: list[bool | None] = [bool(flag) for flag in claims["material"]]
    else:
        if table.empty:
            return ()
        present = set(table["component"].astype(str))
        basis = next((name for name in ("delivery-factor", "loss") if name in present), None)
        frame = table if basis is None else table[table["component"].astype(str) == basis]
        totals = (
            frame.assign(account=frame["account"].astype(str))
            .groupby("account")[["amount", "amount_low", "amount_high"]]
            .sum(min_count=1)
        )
        figures = totals.to_numpy(dtype=float)
        names = [str(account) for account in totals.index]
        material = [None] * len(names)
    return tuple(
        AccountTotal(
            account=names[row],
            amount=float(figures[row, 0]),
            low=float(figures[row, 1]),
            high=float(figures[row, 2]),
            material=material[row],
        )
        for row in np.argsort(-np.abs(figures[:, 0]), kind="stable")
    )


def stakes_table(accounts: tuple[AccountTotal, ...], currency: str) -> Table:
    """Return what each account has at stake in the loss component, with its interval."""
    rows = tuple(
        (
            total.account,
            number(total.amount, 0, signed=True),
            number(total.low, 0, signed=True),
            number(total.high, 0, signed=True),
            ("charged too much" if total.low > 0 else "charged too little" if total.high < 0 else "not certain")
            + {True: ", material", False: ", not material", None: ""}[total.material],
        )
        for total in accounts[:_ROWS]
    )
    return Table(
        caption=f"Loss component, posted against recomputed, {currency} over the week",
        columns=("Account", "At stake", "At least", "At most", "Reading"),
        numeric=(False, True, True, True, False),
        rows=rows,
        note=(
            "Positive: the posted prices charged the account more than the recomputed loss components would. "
            "The interval covers rounding, price intervals, relaxation gap and choice of operating point."
        ),
    )


def exposure_table(
    cube: PriceCube, operating_point: pd.DataFrame, nodes: Nodes, hours: Hours, currency: str, interval_hours: float
) -> Table:
    """Return what the served load would pay under each price set, against AC (or the fullest) prices."""
    rows: list[tuple[str, ...]] = []
    base = "ac" if "ac" in cube.sets else cube.formulations[-1]
    load = _load_matrix(operating_point, base, nodes, hours)
    payments = {name: load * cube.get(name).astype(float) * interval_hours for name in cube.sets}
    for name in cube.sets:
        both = np.isfinite(payments[name]) & np.isfinite(payments[base])
        paid = float(payments[name][both].sum())
        gap = payments[name][both] - payments[base][both]
        rows.append(
            (
                name,
                number(paid, 0) if both.any() else NO_VALUE,
                number(float(gap.sum()), 0, signed=True) if name != base else "",
                number(float(np.abs(gap).sum()), 0) if name != base else "",
                f"{int(both.sum()):,}",
            )
        )
    if not load.any():
        rows = []
    return Table(
        caption=f"What load would pay under each price set, {currency} over the week",
        columns=("Price set", "Load pays", f"More than under {base}", "Shifted between buses and hours", "Bus-hours"),
        numeric=(False, True, True, True, True),
        rows=tuple(rows),
        note=f"Load as served in {base}; sums over bus-hours that both price sets cover.",
    )


def _load_matrix(operating_point: pd.DataFrame, formulation: str, nodes: Nodes, hours: Hours) -> FloatArray:
    load = np.zeros((nodes.n, hours.n))
    if operating_point.empty:
        return load
    part = operating_point[operating_point["formulation"].astype(str) == formulation]
    row, column = nodes.position(part["bus"]), hours.position(part["interval_start"])
    known = (row >= 0) & (column >= 0)
    load[row[known], column[known]] = part["load_mw"].to_numpy(dtype=float)[known]
    return np.nan_to_num(load)


FINDING_WORDS = {
    "identity": "Components do not add up",
    "sign": "Congestion with the other sign",
    "stale-factors": "Delivery factors stand still",
    "unexplained-congestion": "Congestion no constraint explains",
    "reversed-constraint": "Constraint with its direction reversed",
    "unknown-node": "Node that the scenario does not know",
    "missing-interval": "Interval without posted prices",
    "repeated-interval": "Interval posted twice",
    "revised": "Price revised after publication",
}


def findings_table(findings: pd.DataFrame, hours: Hours) -> Table:
    """Return the findings by kind: how many, where first, and the sentence of the largest."""
    rows = []
    if not findings.empty:
        frame = findings.assign(
            place=hours.position(findings["interval_start"]),
            size=pd.to_numeric(findings["amount"], errors="coerce").abs(),
        )
        for kind, part in frame.groupby("kind", sort=False, observed=True):
            worst = part.iloc[int(np.nan_to_num(part["size"].to_numpy(dtype=float), nan=-1.0).argmax())]
            amount = pd.to_numeric(worst["amount"], errors="coerce")
            unit = "" if pd.isna(worst["unit"]) else str(worst["unit"])
            rows.append(
                (
                    FINDING_WORDS.get(str(kind), str(kind)),
                    f"{len(part):,}",
                    f"{part['node'].replace('', np.nan).nunique()}",
                    f"{part.loc[part['place'] >= 0, 'place'].nunique()}",
                    _sized(float(amount), unit),
                    hours.label[int(worst["place"])] if worst["place"] >= 0 else "whole week",
                    str(worst["sentence"]),
                )
            )
    return Table(
        caption="What the checks of the posted prices found",
        columns=("Finding", "Rows", "Nodes", "Intervals", "Largest", "in hour", "In words"),
        numeric=(False, True, True, True, True, False, False),
        rows=tuple(rows),
    )


def _sized(amount: float, unit: str) -> str:
    """Return a size with its unit; counts have no decimals, and a bare figure no unit."""
    if not np.isfinite(amount):
        return ""
    places = 2 if "/" in unit else 0 if float(amount).is_integer() else 4
    return f"{number(amount, places)} {'' if unit == '-' else unit}".strip()


COMPONENT_WORDS = {
    "lmp": "whole price",
    "loss": "loss, against re-solved prices",
    "delivery-factor": "loss, against own delivery factors",
}


def settlement_table(settlement: pd.DataFrame, currency: str) -> Table:
    """Return money by account and component, posted against recomputed."""
    rows = []
    if not settlement.empty:
        sums = settlement.assign(
            account=settlement["account"].astype(str), component=settlement["component"].astype(str)
        ).groupby(["account", "component"], sort=False)
        for (account, component), part in sums:
            rows.append(
                (
                    str(account),
                    COMPONENT_WORDS.get(str(component), str(component).replace("_", " ")),
                    number(float(part["mw"].abs().sum()), 0),
                    number(float(part["amount"].sum()), 0, signed=True),
                    number(float(part["amount_low"].sum()), 0, signed=True),
                    number(float(part["amount_high"].sum()), 0, signed=True),
                )
            )
    shown = rows[: 4 * _ROWS]
    return Table(
        caption=f"Settlement by account and component, {currency} over the week",
        columns=("Account", "Component", "Rows' MW, summed", "Posted less recomputed", "At least", "At most"),
        numeric=(False, False, True, True, True, True),
        rows=tuple(shown),
        note=f"{len(shown)} of {len(rows)}; withdrawal pays, injection is paid." if rows else "",
    )


def deadlines_table(settlement: Settlement | None, currency: str) -> Table:
    """Return until when each account may dispute, by the analyst's own rule: first and last deadline of the week."""
    rows = []
    note = ""
    if settlement is not None and settlement.rule is not None and not settlement.deadlines.empty:
        note = settlement.rule.sentence
        for account, part in settlement.deadlines.groupby("account", sort=False):
            ordered = part.sort_values("deadline", kind="stable")
            first = ordered.iloc[0]
            same = ordered["deadline"] == first["deadline"]
            left = first["days_left"]
            rows.append(
                (
                    str(account),
                    f"{pd.Timestamp(first['deadline']):%Y-%m-%d}",
                    NO_VALUE if pd.isna(left) else f"{int(left)}",
                    number(float(ordered.loc[same, "amount"].sum()), 0, signed=True),
                    f"{pd.Timestamp(ordered.iloc[-1]['deadline']):%Y-%m-%d}",
                    number(float(ordered["amount"].sum()), 0, signed=True),
                )
            )
    return Table(
        caption=f"Days left to dispute, {currency}",
        columns=("Account", "First deadline", "Days left", "Amount then", "Last deadline", "Whole week"),
        numeric=(False, True, True, True, True, True),
        rows=tuple(rows),
        note=note,
    )


def rights_table(settlement: Settlement | None, currency: str) -> Table:
    """Return what rights are paid on posted and on recomputed congestion, and the losses they leave open."""
    rows: list[tuple[str, ...]] = []
    if settlement is not None:
        columns = ["amount_posted", "amount_reference", "difference", "losses_left_open"]
        figures = settlement.holders[columns].to_numpy(dtype=float)
        rows = [
            (str(holder), *(number(value, 0, signed=True) for value in line))
            for holder, line in zip(settlement.holders["holder"], figures, strict=True)
        ]
    return Table(
        caption=f"Rights, {currency} over the week",
        columns=("Holder", "Paid as posted", "Paid on recomputed congestion", "Difference", "Losses left open"),
        numeric=(False, True, True, True, True),
        rows=tuple(rows[:_ROWS]),
        note="Rights are settled on congestion components; what losses cost between their ends stays open.",
    )
