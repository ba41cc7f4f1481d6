"""Over the week: shadow prices, which formulations bind, losses, and verdicts."""

from __future__ import annotations

import numpy as np
import plotly.graph_objects as go

from lmpgap.prices.certificate import USABLE_VERDICTS
from lmpgap.report.figures.base import floats, hour_line, labels, money_unit, picture, time_axis
from lmpgap.report.palette import DASH, LIGHT, SYMBOL, colour
from lmpgap.report.view.model import WeeklyView

LEAST_LOSS_MW = 1e-3
"""Smaller losses are a solver's dust [MW]."""

STRIP_ROWS = 12
"""Constraints in the strip of binding hours."""


def binding_strip(view: WeeklyView, hour: int) -> go.Figure:
    """Return one line per constraint with a mark for each hour and formulation in which it binds."""
    constraints = view.constraints
    shown = min(len(constraints.name), STRIP_ROWS)
    figure = picture(80 + 44 * max(shown, 1), left=130, top=40)
    hour_line(figure, hour)
    formulations = view.cube.formulations
    for place, formulation in enumerate(formulations):
        row, column = np.nonzero(constraints.shadow[formulation][:shown] > 0)
        offset = (place - (len(formulations) - 1) / 2.0) * 0.19
        figure.add_trace(
            go.Scatter(
                x=floats(column),
                y=floats(row + offset),
                mode="markers",
                name=formulation,
                marker={
                    "symbol": SYMBOL.get(formulation, "circle"),
                    "size": 5.5,
                    "color": colour(formulation),
                    "line": {"width": 1.3, "color": colour(formulation)},
                },
                customdata=floats(constraints.shadow[formulation][row, column]),
                hovertemplate="%{customdata:.2f}",
            )
        )
    time_axis(figure, view.hours)
    figure.update_yaxes(
        tickmode="array",
        tickvals=list(range(shown)),
        ticktext=labels(constraints.name[:shown], 26),
        range=[shown - 0.5, -0.5],
        tickfont={"color": LIGHT["ink"], "size": 12},
        showgrid=False,
        ticks="",
    )
    for boundary in range(1, shown):
        figure.add_shape(
            type="line",
            x0=0,
            x1=1,
            xref="paper",
            y0=boundary - 0.5,
            y1=boundary - 0.5,
            line={"color": LIGHT["grid"], "width": 1},
        )
    figure.update_layout(hovermode="closest", showlegend=True)
    return figure


def shadow_timeline(view: WeeklyView, constraint: int, hour: int) -> go.Figure:
    """Return the shadow price of one constraint over the week under each formulation."""
    figure = picture(300, top=40)
    hour_line(figure, hour)
    for formulation in view.cube.formulations:
        figure.add_trace(
            go.Scatter(
                x=floats(np.arange(view.hours.n)),
                y=floats(view.constraints.shadow[formulation][constraint]),
                mode="lines",
                name=formulation,
                line={
                    "color": colour(formulation),
                    "dash": DASH.get(formulation, "solid"),
                    "width": 2,
                    "shape": "hvh",
                },
                hovertemplate="%{y:.2f}",
            )
        )
    time_axis(figure, view.hours)
    unit = view.constraints.unit[constraint] or "unit"
    figure.update_yaxes(title_text=f"{money_unit(view.currency)} per {unit} and hour", rangemode="tozero")
    figure.update_layout(hovermode="x unified")
    return figure


def losses_timeline(view: WeeklyView, hour: int) -> go.Figure:
    """Return total losses over the week under each formulation that has them."""
    figure = picture(280, top=40)
    hour_line(figure, hour)
    for formulation, losses in view.losses.losses_mw.items():
        if np.abs(np.nan_to_num(losses)).max(initial=0.0) < LEAST_LOSS_MW:
            continue
        figure.add_trace(
            go.Scatter(
                x=floats(np.arange(view.hours.n)),
                y=floats(losses),
                mode="lines",
                name=formulation,
                line={"color": colour(formulation), "dash": DASH.get(formulation, "solid"), "width": 1.8},
                hovertemplate="%{y:.1f} MW",
            )
        )
    time_axis(figure, view.hours)
    figure.update_yaxes(title_text="losses, MW", rangemode="tozero")
    figure.update_layout(hovermode="x unified")
    return figure


VERDICT_SYMBOLS = {
    "certified": "circle",
    "exact": "circle",
    "close": "circle-open",
    "not verified": "diamond-open",
    "not a price": "x-thin",
    "uncertified": "x-thin",
}


def verdict_strip(view: WeeklyView, hour: int) -> go.Figure:
    """Return the verdict of every solve: filled or open circles may be used, crosses may not."""
    formulations = list(view.trust.code)
    figure = picture(90 + 34 * max(len(formulations), 1), left=70, top=40)
    hour_line(figure, hour)
    for position, word in enumerate(view.trust.words):
        xs, ys = [], []
        for row, formulation in enumerate(formulations):
            columns = np.flatnonzero(view.trust.code[formulation] == position)
            xs.append(columns)
            ys.append(np.full(len(columns), row))
        usable = word in USABLE_VERDICTS
        key = "soft" if usable else "above_2"
        figure.add_trace(
            go.Scatter(
                x=floats(np.concatenate(xs)),
                y=floats(np.concatenate(ys)),
                mode="markers",
                name=word,
                marker={
                    "symbol": VERDICT_SYMBOLS.get(word, "diamond-open"),
                    "size": 5 if usable else 8,
                    "color": LIGHT[key],
                    "line": {"width": 1 if usable else 2.2, "color": LIGHT[key]},
                },
                hovertemplate=word + "<extra></extra>" if word in VERDICT_SYMBOLS else "<extra></extra>",
            )
        )
    time_axis(figure, view.hours)
    figure.update_yaxes(
        tickmode="array",
        tickvals=list(range(len(formulations))),
        ticktext=formulations,
        range=[len(formulations) - 0.5, -0.5],
        tickfont={"color": LIGHT["ink"], "size": 13},
        showgrid=False,
        ticks="",
    )
    figure.update_layout(showlegend=True)
    return figure
