"""Money and evidence: accounts, delivery factors, loading sweep, tracking."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
import plotly.graph_objects as go

from lmpgap.report.figures.base import floats, labels, money_unit, picture
from lmpgap.report.palette import DASH, LIGHT, SYMBOL, colour
from lmpgap.report.view.model import FactorsView, SweepView, WeeklyView
from lmpgap.scenario.network import FloatArray

MOST_ACCOUNTS = 20


def account_stakes(view: WeeklyView) -> go.Figure:
    """Return each account's money at stake as a point with its interval; zero is the line to clear."""
    accounts = view.accounts[:MOST_ACCOUNTS]
    figure = picture(90 + 36 * len(accounts), left=130, top=10)
    amounts = np.array([account.amount for account in accounts])
    low = np.array([account.low for account in accounts])
    high = np.array([account.high for account in accounts])
    keys = ["above_2" if lo > 0 else "below_2" if hi < 0 else "soft" for lo, hi in zip(low, high, strict=True)]
    marks = [
        "triangle-right" if lo > 0 else "triangle-left" if hi < 0 else "circle-open"
        for lo, hi in zip(low, high, strict=True)
    ]
    figure.add_trace(
        go.Scatter(
            x=floats(amounts),
            y=list(range(len(accounts))),
            mode="markers",
            error_x={
                "type": "data",
                "symmetric": False,
                "array": floats(high - amounts),
                "arrayminus": floats(amounts - low),
                "color": LIGHT["soft"],
                "thickness": 2,
                "width": 5,
            },
            marker={"symbol": marks, "size": 13, "color": [LIGHT[key] for key in keys]},
            hovertemplate="%{x:,.0f} " + money_unit(view.currency) + "<extra></extra>",
            showlegend=False,
        )
    )
    figure.update_xaxes(
        title_text=money_unit(view.currency),
        zeroline=True,
        zerolinecolor=LIGHT["ink"],
        showgrid=True,
        tickformat=",d",
        nticks=7,
    )
    figure.update_yaxes(
        tickmode="array",
        tickvals=list(range(len(accounts))),
        ticktext=labels([account.account for account in accounts], 26),
        range=[len(accounts) - 0.5, -0.5],
        tickfont={"color": LIGHT["ink"], "size": 13},
        showgrid=False,
        ticks="",
    )
    return figure


def factor_scatter(view: WeeklyView, factors: FactorsView) -> go.Figure:
    """Return delivery factors implied by posted prices against recomputed ones; equality is the diagonal.

    Traces: the diagonal, ordinary points, points found stale, the chosen bus.
    """
    figure = picture(430, top=40)
    both = np.concatenate([factors.posted, factors.recomputed])
    low, high = float(both.min()), float(both.max())
    room = max(0.04 * (high - low), 0.002)
    ends = [low - room, high + room]
    figure.add_trace(
        go.Scatter(
            x=floats(ends), y=floats(ends), mode="lines", line={"color": LIGHT["soft"], "width": 1, "dash": "dot"},
            hoverinfo="skip", name="equal",
        )
    )  # fmt: skip
    names = labels(view.nodes.name)
    chosen_bus = max(view.main.worst_bus, 0)
    for name, rows, symbol, key, size in (
        ("posted", ~factors.stale, "circle-open", "soft", 5),
        ("posted, found stale", factors.stale, "diamond", "above_2", 7),
        ("chosen bus", factors.bus == chosen_bus, "square-open", "ink", 9),
    ):
        figure.add_trace(
            go.Scatter(
                x=floats(factors.recomputed[rows]),
                y=floats(factors.posted[rows]),
                mode="markers",
                name=name,
                marker={"symbol": symbol, "size": size, "color": LIGHT[key], "opacity": 0.75},
                customdata=np.column_stack([factors.bus[rows], factors.hour[rows]]).astype(np.int32),
                text=[
                    f"{names[bus]}, {view.hours.label[hour]}"
                    for bus, hour in zip(factors.bus[rows], factors.hour[rows], strict=True)
                ],
                hovertemplate="<b>%{text}</b><br>posted %{y:.4f}, recomputed %{x:.4f}<extra></extra>",
            )
        )
    figure.update_xaxes(title_text=f"recomputed ({factors.recomputed_from})", range=ends, showgrid=True)
    figure.update_yaxes(title_text="implied by posted prices", range=ends)
    return figure


def loading_sweep(view: WeeklyView, sweep: SweepView) -> go.Figure:
    """Return the mean price error of each formulation against AC as load is scaled."""
    return sweep_errors(sweep.factor, sweep.price_error, view.currency)


def sweep_errors(factor: FloatArray, errors: Mapping[str, FloatArray], currency: str) -> go.Figure:
    """Return one line of errors per formulation other than AC, over the load factors.

    Parameters
    ----------
    factor : (n_factor,)
        Load factors [-].
    errors : by formulation (n_factor,)
        Mean size of the difference from AC [currency/MWh].
    """
    figure = picture(330, top=40)
    for formulation, values in errors.items():
        if formulation == "ac":
            continue
        figure.add_trace(
            go.Scatter(
                x=floats(factor),
                y=floats(values),
                mode="lines+markers",
                name=formulation,
                line={"color": colour(formulation), "dash": DASH.get(formulation, "solid"), "width": 2.2},
                marker={"symbol": SYMBOL.get(formulation, "circle"), "size": 8},
                hovertemplate="%{y:.2f}",
            )
        )
    figure.update_xaxes(title_text="load, multiple of the scenario's", showgrid=True)
    figure.update_yaxes(title_text=f"mean error against ac, {money_unit(currency)}/MWh", type="log", dtick=1)
    figure.update_layout(hovermode="x unified", showlegend=True)
    return figure
