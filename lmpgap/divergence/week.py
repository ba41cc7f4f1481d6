"""What happened in a week, in five sentences with figures."""

from __future__ import annotations

import numpy as np
import pandas as pd

from lmpgap.divergence.drivers import BINDS_ONLY_IN_AGAINST, BINDS_ONLY_IN_BASE
from lmpgap.divergence.findings import KINDS
from lmpgap.divergence.ladder import closest_to
from lmpgap.divergence.posted import POSTED
from lmpgap.divergence.ranking import divergence, rank_constraints
from lmpgap.divergence.sentences import Wording, driver_sentences
from lmpgap.prices.certificate import USABLE_VERDICTS

_FINDING_WORDS: dict[str, tuple[str, str]] = {
    "identity": ("price that is not the sum of its parts", "prices that are not the sum of their parts"),
    "sign": ("stretch with the sign of congestion reversed", "stretches with the sign of congestion reversed"),
    "stale-factors": ("node with delivery factors that stood still", "nodes with delivery factors that stood still"),
    "unexplained-congestion": ("stretch of unexplained congestion", "stretches of unexplained congestion"),
    "reversed-constraint": ("constraint that seems reversed", "constraints that seem reversed"),
    "unknown-node": ("unknown node", "unknown nodes"),
    "missing-interval": ("stretch of missing intervals", "stretches of missing intervals"),
    "repeated-interval": ("repeated interval", "repeated intervals"),
    "revised": ("revision", "revisions"),
}
"""One and several findings of each kind."""


def weekly_sentences(
    *,
    prices: pd.DataFrame,
    solves: pd.DataFrame,
    differences: pd.DataFrame,
    drivers: pd.DataFrame,
    findings: pd.DataFrame,
    claims: pd.DataFrame | None = None,
    other_claims: dict[str, pd.DataFrame] | None = None,
    currency: str = "$",
    wording: Wording | None = None,
    n_posted: int = 0,
    n_position: int = 0,
) -> list[str]:
    """Return the week in five sentences: how close, where furthest, why, the posted prices, the money.

    Parameters
    ----------
    prices, solves, differences, drivers, findings
        Run tables; any but ``prices`` and ``solves`` may be empty, and its sentence says that there is nothing to tell.
    claims
        Loss-component error per account: account, amount, amount_low, amount_high [currency], material. ``None`` where
        there was nothing to settle.
    other_claims
        The same held against other formulations, by name: how far the figure depends on what it is held against.
    currency
        Sign or code before amounts.
    n_posted, n_position
        Rows of the scenario's tables: where there are some and nothing came of them, the sentence says that.
    """
    wording = wording or Wording()
    return [
        _closeness(prices, solves, wording),
        _furthest(differences, drivers, wording),
        _cause(differences, drivers, wording),
        _posted(differences, findings, wording, n_posted),
        _money(claims, other_claims or {}, currency, n_position),
    ]


def _closeness(prices: pd.DataFrame, solves: pd.DataFrame, wording: Wording) -> str:
    held = list(dict.fromkeys(solves["formulation"]))
    usable = solves["verdict"].isin(USABLE_VERDICTS)
    apart = solves.loc[~usable, "formulation"].value_counts()
    trust = (
        "every solve may be used as a price"
        if usable.all()
        else "not to be used as a price: "
        + ", ".join(
            f"{count} of {(solves['formulation'] == name).sum()} solves of {name}" for name, count in apart.items()
        )
    )
    errors = closest_to(prices, solves)
    if errors.empty:
        return f"{len(solves)} solves of {', '.join(held)} were made and none could be held against ac; {trust}."
    told = ", ".join(
        f"{name} by {error:,.2f} {wording.unit}" + (f" ({relative:.1%})" if np.isfinite(relative) else "")
        for name, error, relative in zip(
            errors["formulation"],
            errors["mean_absolute_error"].astype(float),
            errors["relative"].astype(float),
            strict=True,
        )
    )
    best = errors["formulation"].iloc[0]
    hours = int(errors["intervals"].iloc[0])
    return (
        f"Over {_intervals(hours, wording)} {best} stayed closest to ac; on average prices missed it: {told}; {trust}."
    )


def _main_pair(differences: pd.DataFrame) -> tuple[str, str] | None:
    """Return the pair the week is told by: the simplest formulation against the most exact."""
    if differences.empty:
        return None
    pairs = differences[["base", "against"]].drop_duplicates()
    told = [tuple(row) for row in pairs.itertuples(index=False) if row.base != POSTED]
    return ("dc", "ac") if ("dc", "ac") in told else (told[-1] if told else None)


def _furthest(differences: pd.DataFrame, drivers: pd.DataFrame, wording: Wording) -> str:
    pair = _main_pair(differences)
    if pair is None:
        return "No two price sets could be compared."
    rows = differences[(differences["base"] == pair[0]) & (differences["against"] == pair[1])]
    size = divergence(rows).abs()
    if not (size > 0.005).any():
        if (rows["difference"].abs() > 0.005).any():
            return (
                f"The prices of {pair[0]} and {pair[1]} differ only where several prices are right: every difference "
                "lies inside the interval of prices that the dispatch admits."
            )
        return f"The prices of {pair[0]} and {pair[1]} agree to the cent at every bus in every {_noun(wording)}."
    (sentence,) = driver_sentences(rows.loc[[size.idxmax()]], drivers, wording)
    return f"The largest divergence: {sentence[0].lower()}{sentence[1:]}"


def _cause(differences: pd.DataFrame, drivers: pd.DataFrame, wording: Wording) -> str:
    pair = _main_pair(differences)
    if pair is None or drivers.empty:
        return "No drivers of a difference are known."
    rows = drivers[(drivers["base"] == pair[0]) & (drivers["against"] == pair[1])]
    count = int(((differences["base"] == pair[0]) & (differences["against"] == pair[1])).sum())
    # Within one driver the sources of one price are netted before sizes are taken.
    net = rows.groupby(["interval_start", "bus", "driver"], observed=True, sort=False)["amount"].sum().abs()
    means = (net.groupby("driver", observed=True).sum() / max(count, 1)).sort_values(ascending=False)
    means = means[means >= 0.005]
    if means.empty:
        return f"Nothing drives {pair[0]} and {pair[1]} apart by a cent on average."
    words = {
        BINDS_ONLY_IN_BASE: f"limits that bind only in {pair[0]}",
        BINDS_ONLY_IN_AGAINST: f"limits that bind only in {pair[1]}",
    }
    told = ", ".join(f"{words.get(str(driver), driver)} {amount:,.2f}" for driver, amount in means.head(4).items())
    constraints = rank_constraints(rows, count)
    text = f"What drives {pair[0]} and {pair[1]} apart, on average in {wording.unit}: {told}"
    if constraints.empty or constraints["mean_absolute"].iloc[0] < 0.005:
        return f"{text}; no single limit stands out."
    top = constraints.iloc[0]
    return (
        f"{text}; the limit that matters most is {wording.name(str(top['constraint']))} "
        f"({top['mean_absolute']:,.2f} on average, in {_intervals(int(top['intervals']), wording)})."
    )


def _posted(differences: pd.DataFrame, findings: pd.DataFrame, wording: Wording, n_posted: int) -> str:
    rows = differences[(differences["base"] == POSTED) & (differences["against"] == "ac")]
    if rows.empty:
        rows = differences[differences["base"] == POSTED]
    counts = findings["kind"].value_counts()
    ordered = [(kind, int(counts[kind])) for kind in KINDS if kind in counts]
    found = (
        "the checks found nothing"
        if not ordered
        else f"the checks found {len(findings)} matter{'s' if len(findings) > 1 else ''}: "
        + ", ".join(f"{count} {_FINDING_WORDS[kind][count > 1]}" for kind, count in ordered)
    )
    if rows.empty:
        # Findings without a comparison: the prices are there, but none of an interval and a node that were solved.
        return (
            f"No posted price could be held against a computed one; {found}."
            if ordered or n_posted
            else "There are no posted prices to check."
        )
    against = rows["against"].iloc[-1]
    rows = rows[rows["against"] == against]
    size = divergence(rows).abs()
    return (
        f"Posted prices differ from {against} by {size.mean():,.2f} {wording.unit} on average and by up to "
        f"{size.max():,.2f}; {found}."
    )


def _noun(wording: Wording) -> str:
    return "hour" if wording.labels.interval_minutes == 60 else "interval"


def _intervals(count: int, wording: Wording) -> str:
    """Return a number of intervals in words; only an interval of an hour is called one."""
    return f"{count} {_noun(wording)}{'' if count == 1 else 's'}"


def _money(claims: pd.DataFrame | None, others: dict[str, pd.DataFrame], currency: str, n_position: int) -> str:
    if claims is None or claims.empty:
        return (
            f"None of the {n_position:,} position rows could be settled: there is no posted price to hold them against."
            if n_position
            else "There are no positions to settle."
        )
    without = ""
    if "left_out" in claims:
        left_out, held = int(claims["left_out"].sum()), int(claims["rows"].sum() + claims["left_out"].sum())
        claims = claims[claims["rows"] > 0]
        if claims.empty:
            return f"None of the {held:,} position rows could be settled; the tables say why."
        if left_out:
            without = f"; without {left_out:,} of {held:,} position rows, which could not be settled"
    order = claims["amount"].abs().sort_values(ascending=False, kind="stable").index
    largest = claims.loc[order].head(3)
    figures = largest[["amount", "amount_low", "amount_high"]].to_numpy(float).tolist()
    told = "; ".join(
        f"{account} {_amount(amount, currency)} (between {_amount(low, currency)} and {_amount(high, currency)}"
        + "".join(_against(account, name, frame, currency) for name, frame in others.items())
        + ")"
        for account, (amount, low, high) in zip(largest["account"], figures, strict=True)
    )
    verdict = _certainty(claims)
    return f"Loss component at stake, positive to the account's disadvantage: {told}{without}; {verdict}."


def _certainty(claims: pd.DataFrame) -> str:
    """Return for how many accounts the error is certain, told apart by whom it hurts."""
    too_much = int((claims["material"] & (claims["amount"] > 0.0)).sum())
    too_little = int((claims["material"] & (claims["amount"] < 0.0)).sum())
    told = [
        f"{count} {words}" for count, words in ((too_much, "paid too much"), (too_little, "paid too little")) if count
    ]
    if not told:
        return "none of it is certain enough to claim"
    accounts = f"{len(claims)} account{'s' if len(claims) > 1 else ''}"
    return f"certain and material for {too_much + too_little} of {accounts}: {' and '.join(told)}"


def _against(account: str, name: str, claims: pd.DataFrame, currency: str) -> str:
    mine = claims.loc[claims["account"] == account, "amount"]
    return f"; against {name} {_amount(float(mine.iloc[0]), currency)}" if len(mine) else ""


def _amount(value: float, currency: str) -> str:
    sign = "-" if round(value) < 0 else ""
    return f"{sign}{currency}{'' if len(currency) == 1 else ' '}{abs(value):,.0f}"
