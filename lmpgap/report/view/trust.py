"""May these prices be used: verdicts, residuals, uniqueness, and the hours that are left out."""

from __future__ import annotations

import numpy as np
import pandas as pd

from lmpgap.prices.certificate import USABLE_VERDICTS
from lmpgap.report.text import number, percent, plain, small
from lmpgap.report.view.cube import PriceCube
from lmpgap.report.view.hours import Hours
from lmpgap.report.view.model import Table, TrustView
from lmpgap.scenario.network import IntArray
from lmpgap.tolerances import DEFAULT_TOLERANCES

_LISTED = 40


def trust_view(solves: pd.DataFrame, prices: pd.DataFrame, cube: PriceCube, hours: Hours) -> TrustView:
    """Return the verdict of every solve and the worst residuals per formulation."""
    verdicts = solves["verdict"].astype(str)
    words = tuple(sorted(set(verdicts), key=lambda word: (word not in USABLE_VERDICTS, word)))
    position = hours.position(solves["interval_start"]) if len(solves) else np.zeros(0, dtype=np.int64)
    codes = {}
    for formulation in cube.formulations:
        code = np.full(hours.n, -1, dtype=np.int64)
        chosen = ((solves["formulation"].astype(str) == formulation) & (position >= 0)).to_numpy()
        code[position[chosen]] = [words.index(word) for word in verdicts[chosen]]
        codes[formulation] = code
    return TrustView(
        words=words,
        code=codes,
        summary=_summary(codes, words, hours),
        residuals=_residuals(solves, cube),
        left_out=_left_out(solves, codes, hours),
        uniqueness=_uniqueness(prices, cube),
    )


def _summary(codes: dict[str, IntArray], words: tuple[str, ...], hours: Hours) -> Table:
    rows = []
    for formulation, code in codes.items():
        counts = [int((code == k).sum()) for k in range(len(words))]
        rows.append((formulation, *(f"{count}" for count in counts), f"{int((code < 0).sum())}"))
    return Table(
        caption="Verdict of each solve, intervals",
        columns=("Formulation", *words, "not solved"),
        numeric=(False, *(True,) * (len(words) + 1)),
        rows=tuple(rows),
        note=f"{hours.n} intervals. Prices of solves without a usable verdict are shown but marked.",
    )


def _residuals(solves: pd.DataFrame, cube: PriceCube) -> Table:
    columns = ("primal_residual", "dual_residual", "price_residual", "loop_angle_deg", "ac_mismatch_mw")
    rows = []
    for formulation in cube.formulations:
        part = solves[solves["formulation"].astype(str) == formulation]
        if part.empty:
            continue
        worst = [small(_largest(part[column])) for column in columns]
        gap = _largest(part["cost_gap"])
        seconds = float(pd.to_numeric(part["solver_seconds"], errors="coerce").sum())
        solver = ", ".join(sorted({plain(text, 40) for text in part["solver"].dropna()}))
        rows.append((formulation, *worst, percent(gap, 3), number(seconds, 1), solver))
    return Table(
        caption="Largest residuals over the week",
        columns=(
            "Formulation",
            "Primal, MW",
            "Stationarity, /MWh",
            "Price, /MWh",
            "Loop, deg",
            "Mismatch, MW",
            "Cost gap",
            "Seconds",
            "Solver",
        ),
        numeric=(False, True, True, True, True, True, True, True, False),
        rows=tuple(rows),
        note=(
            "The price residual compares the solver's own multiplier with the price rebuilt from its components; "
            f"{DEFAULT_TOLERANCES.price_residual} per MWh is accepted."
        ),
    )


def _largest(values: pd.Series) -> float:
    figures = pd.to_numeric(values, errors="coerce").abs()
    return float(figures.max()) if figures.notna().any() else float("nan")


def _left_out(solves: pd.DataFrame, codes: dict[str, IntArray], hours: Hours) -> Table:
    """Return the stretches of intervals whose prices should not be used, each with the reasons of its worst hour."""
    reasons = solves["reasons"] if "reasons" in solves.columns else pd.Series("", index=solves.index)
    verdicts = solves["verdict"].astype(str).to_numpy()
    gap = np.nan_to_num(pd.to_numeric(solves["cost_gap"], errors="coerce").abs().to_numpy(dtype=float))
    ranked = np.append(gap, -1.0)  # position -1, no solve, comes last
    place = hours.position(solves["interval_start"]) if len(solves) else np.zeros(0, dtype=np.int64)
    formulations = solves["formulation"].astype(str).to_numpy()
    rows: list[tuple[int, tuple[str, ...]]] = []
    for formulation, code in codes.items():
        word = np.full(hours.n, "not solved", dtype=object)
        row_of = np.full(hours.n, -1)
        own = np.flatnonzero((formulations == formulation) & (place >= 0))
        word[place[own]], row_of[place[own]] = verdicts[own], own
        word[code < 0] = "not solved"
        doubtful = ~np.isin(word.astype(str), USABLE_VERDICTS)
        begins = doubtful & (np.r_[True, ~doubtful[:-1]] | np.r_[True, word[1:] != word[:-1]])
        for first in np.flatnonzero(begins).tolist():
            last = first
            while last + 1 < hours.n and doubtful[last + 1] and not begins[last + 1]:
                last += 1
            members = row_of[first : last + 1]
            worst = int(members[np.argmax(ranked[members])])
            known = worst >= 0
            rows.append(
                (
                    first,
                    (
                        hours.label[first] + (f" to {hours.label[last]}" if last > first else ""),
                        f"{last - first + 1}",
                        formulation,
                        str(word[first]),
                        str(solves["status"].iloc[worst]) if known else "",
                        _leading(reasons.iloc[worst]) if known else "no solve in the run folder",
                    ),
                )
            )
    rows.sort(key=lambda row: (row[0], row[1][2]))
    return Table(
        caption="Hours whose prices should not be used, and why",
        columns=("Hours", "Count", "Formulation", "Verdict", "Status", "Reason (of the worst hour)"),
        numeric=(False, True, False, False, False, False),
        rows=tuple(text for _, text in rows[:_LISTED]),
        note=f"{min(len(rows), _LISTED)} of {len(rows)} stretches." if rows else "",
    )


def _leading(reasons: object, clauses: int = 3) -> str:
    """Return the first clauses of the reasons; all of them are in the run folder."""
    parts = [] if pd.isna(reasons) else [part.strip() for part in str(reasons).split(";") if part.strip()]  # type: ignore[call-overload]
    return "; ".join(parts[:clauses]) + (f"; and {len(parts) - clauses} more" if len(parts) > clauses else "")


def _uniqueness(prices: pd.DataFrame, cube: PriceCube) -> Table:
    low = pd.to_numeric(prices["lmp_low"], errors="coerce").to_numpy(dtype=float)
    high = pd.to_numeric(prices["lmp_high"], errors="coerce").to_numpy(dtype=float)
    width = high - low
    formulation = prices["formulation"].astype(str)
    rows = []
    for name in cube.formulations:
        chosen = (formulation == name).to_numpy() & np.isfinite(width)
        wide = chosen & (width > DEFAULT_TOLERANCES.interval_width)
        if chosen.any():
            intervals = prices["interval_start"][wide].nunique()
            rows.append(
                (
                    name,
                    f"{int(wide.sum()):,}",
                    f"{intervals}",
                    number(float(width[wide].mean()) if wide.any() else 0.0),
                    number(float(width[chosen].max())),
                )
            )
    return Table(
        caption="Prices that the solution does not determine",
        columns=("Formulation", "Bus-hours", "Intervals", "Mean width, per MWh", "Widest, per MWh"),
        numeric=(False, True, True, True, True),
        rows=tuple(rows),
        note="A difference inside such an interval is not called a divergence.",
    )
