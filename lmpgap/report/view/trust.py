"""May these prices be used: verdicts, residuals, uniqueness, and the hours that are left out."""

from __future__ import annotations

import numpy as np
import pandas as pd

from lmpgap.report.text import number, percent, plain, small
from lmpgap.report.view.cube import PriceCube
from lmpgap.report.view.hours import Hours
from lmpgap.report.view.model import Table, TrustView
from lmpgap.scenario.network import IntArray
from lmpgap.tolerances import DEFAULT_TOLERANCES

USABLE = ("certified", "exact", "close")
"""Verdicts under which a price may be used."""

_LISTED = 40


def trust_view(solves: pd.DataFrame, prices: pd.DataFrame, cube: PriceCube, hours: Hours) -> TrustView:
    """Return the verdict of every solve and the worst residuals per formulation."""
    verdicts = solves["verdict"].astype(str)
    words = tuple(sorted(set(verdicts), key=lambda word: (word not in USABLE, word)))
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
    rows = []
    reasons = solves["reasons"] if "reasons" in solves.columns else pd.Series("", index=solves.index)
    doubtful = ~solves["verdict"].astype(str).isin(USABLE)
    for index in solves.index[doubtful]:
        place = int(hours.position(solves.loc[[index], "interval_start"])[0])
        if place < 0:
            continue
        reason = reasons[index]
        rows.append(
            (
                place,
                (
                    hours.label[place],
                    str(solves.at[index, "formulation"]),
                    str(solves.at[index, "verdict"]),
                    str(solves.at[index, "status"]),
                    "" if pd.isna(reason) else str(reason),
                ),
            )
        )
    for formulation, code in codes.items():
        for missing in np.flatnonzero(code < 0).tolist():
            rows.append((missing, (hours.label[missing], formulation, "not solved", "", "no solve in the run folder")))
    rows.sort(key=lambda row: (row[0], row[1][1]))
    return Table(
        caption="Hours whose prices should not be used, and why",
        columns=("Hour", "Formulation", "Verdict", "Status", "Reason"),
        numeric=(False, False, False, False, False),
        rows=tuple(text for _, text in rows[:_LISTED]),
        note=f"{min(len(rows), _LISTED)} of {len(rows)}." if rows else "",
    )


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
