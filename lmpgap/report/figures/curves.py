"""When: the duration curve of the divergence, and its profile over the hours of the day."""

from __future__ import annotations

import numpy as np
import plotly.graph_objects as go

from lmpgap.report.figures.base import floats, money_unit, picture
from lmpgap.report.palette import DASH, LIGHT, colour
from lmpgap.report.view.model import PairView, WeeklyView
from lmpgap.scenario.network import FloatArray

_STEPS = 201


def duration_values(view: WeeklyView, pair: PairView) -> FloatArray:
    """Return the size of the pair's difference exceeded in 0 to 100 % of the bus-hours, (201,)."""
    size = np.abs(view.cube.difference(pair.base, pair.against)).astype(float)
    size = size[np.isfinite(size)]
    share = np.linspace(0.0, 100.0, _STEPS)
    return np.percentile(size, 100.0 - share) if size.size else np.full(_STEPS, np.nan)


def duration_pairs(view: WeeklyView) -> tuple[PairView, ...]:
    """Return the pairs worth a curve: every price set against AC; without AC, the ladder."""
    against_ac = [pair for pair in view.pairs if pair.against == "ac" and pair.base != "ac"]
    return tuple(against_ac) or view.ladder or (view.main,)


def duration_curve(view: WeeklyView) -> go.Figure:
    """Return, for every price set against AC, the size of the difference over the share of bus-hours."""
    figure = picture(330, top=40)
    share = np.linspace(0.0, 100.0, _STEPS)
    for pair in duration_pairs(view):
        figure.add_trace(
            go.Scatter(
                x=floats(share),
                y=floats(duration_values(view, pair)),
                mode="lines",
                name=f"{pair.against} less {pair.base}",
                line={"color": colour(pair.base), "dash": DASH.get(pair.base, "solid"), "width": 2.2},
                hovertemplate="%{y:.2f} or more in %{x:.0f} % of bus-hours",
            )
        )
    figure.update_xaxes(title_text="share of bus-hours, %", range=[0, 100])
    figure.update_yaxes(
        title_text=f"size of difference, {money_unit(view.currency)}/MWh", type="log", range=_log_range(view), dtick=1
    )
    figure.update_layout(hovermode="x unified")
    return figure


def _log_range(view: WeeklyView) -> list[float]:
    """Return the exponents between which the curves are drawn: a cent, and the largest difference of all pairs."""
    largest = max((abs(pair.largest) for pair in duration_pairs(view) if np.isfinite(pair.largest)), default=1.0)
    return [-2.0, float(np.log10(max(largest, 0.1))) + 0.1]


def hour_profile_values(view: WeeklyView, pair: PairView) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return hour endings, mean size and mean of the difference by hour ending [currency/MWh]."""
    difference = view.cube.difference(pair.base, pair.against).astype(float)
    endings = np.unique(view.hours.hour_ending)
    size, mean = np.full(len(endings), np.nan), np.full(len(endings), np.nan)
    for place, ending in enumerate(endings):
        part = difference[:, view.hours.hour_ending == ending]
        part = part[np.isfinite(part)]
        if part.size:
            size[place], mean[place] = np.abs(part).mean(), part.mean()
    return endings.astype(float), size, mean


def _mean(values: FloatArray) -> float:
    """Return the mean of the finite values, not a number where there is none."""
    finite = values[np.isfinite(values)]
    return float(finite.mean()) if finite.size else float("nan")


def hour_profile(view: WeeklyView) -> go.Figure:
    """Return the mean difference by hour ending: its size at all buses, its mean, and one bus."""
    endings, size, mean = hour_profile_values(view, view.main)
    bus = max(view.main.worst_bus, 0)
    difference = view.cube.difference(view.main.base, view.main.against)[bus].astype(float)
    single = [_mean(difference[view.hours.hour_ending == ending]) for ending in endings]
    figure = picture(330, top=40)
    figure.add_trace(
        go.Bar(
            x=floats(endings),
            y=floats(size),
            name="mean size, all buses",
            marker={"color": LIGHT["middle"], "line": {"color": LIGHT["rule"], "width": 1}},
            hovertemplate="%{y:.2f}",
        )
    )
    for name, values, key, dash in (
        ("mean, all buses", mean, "ac", "solid"),
        ("chosen bus", np.asarray(single), "above_2", "dash"),
    ):
        figure.add_trace(
            go.Scatter(
                x=floats(endings),
                y=floats(values),
                mode="lines+markers",
                name=name,
                line={"color": LIGHT[key], "dash": dash, "width": 2},
                marker={"size": 5},
                hovertemplate="%{y:+.2f}",
            )
        )
    figure.update_xaxes(title_text="hour ending", dtick=3, tick0=3, range=[0.3, 24.7])
    figure.update_yaxes(title_text=f"{money_unit(view.currency)}/MWh", zeroline=True, zerolinecolor=LIGHT["rule"])
    figure.update_layout(hovermode="x unified", bargap=0.25)
    return figure
