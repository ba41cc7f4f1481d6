"""Where: the network map, and the bus x hour heatmap."""

from __future__ import annotations

import numpy as np
import plotly.graph_objects as go

from lmpgap.report.figures.base import floats, labels, money_unit, picture, time_axis
from lmpgap.report.palette import ABOVE, BELOW, DEAD_BAND, LEVEL, LIGHT, diverging
from lmpgap.report.text import number
from lmpgap.report.view.cube import Matrix
from lmpgap.report.view.model import WeeklyView

FEW_BUSES = 70
"""Up to this many buses have their names in the pictures."""


def scale_bound(values: Matrix) -> float:
    """Return the bound of the two-hue scale: the 98th percentile of the size, at least 0.5 [currency/MWh].

    One bound serves the whole week, so that hours can be compared; the few larger values take the end colours.
    """
    size = np.abs(values[np.isfinite(values)])
    return max(float(np.percentile(size, 98)), 0.5) if size.size else 0.5


def sign_symbols(values: Matrix) -> list[str]:
    """Return the marker of each value by its sign, with a dead band around zero."""
    return [ABOVE if value > DEAD_BAND else BELOW if value < -DEAD_BAND else LEVEL for value in values]


def network_map(view: WeeklyView, hour: int) -> go.Figure:
    """Return the network with the main difference at one hour: hue and marker shape tell the sign.

    Traces: branches, buses, the chosen bus.
    """
    nodes, pair = view.nodes, view.main
    difference = view.cube.difference(pair.base, pair.against)
    values = difference[:, hour]
    bound = scale_bound(difference)
    figure = picture(520, left=8, right=8, bottom=8, top=8)
    gap = np.full(len(nodes.from_bus), np.nan)
    figure.add_trace(
        go.Scatter(
            x=floats(np.column_stack([nodes.x[nodes.from_bus], nodes.x[nodes.to_bus], gap]).ravel()),
            y=floats(np.column_stack([nodes.y[nodes.from_bus], nodes.y[nodes.to_bus], gap]).ravel()),
            mode="lines",
            line={"color": LIGHT["wire"], "width": 1.4 if nodes.n <= 400 else 0.6},
            hoverinfo="skip",
            showlegend=False,
            name="branches",
        )
    )
    few = nodes.n <= FEW_BUSES
    figure.add_trace(
        go.Scatter(
            x=floats(nodes.x),
            y=floats(nodes.y),
            mode="markers+text" if few else "markers",
            text=labels(nodes.name, 18) if few else None,
            textposition="bottom center",
            textfont={"size": 11, "color": LIGHT["soft"]},
            customdata=[
                [name, zone, number(float(value), signed=True)]
                for name, zone, value in zip(labels(nodes.name), labels(nodes.zone), values, strict=True)
            ],
            hovertemplate="<b>%{customdata[0]}</b><br>%{customdata[1]}<br>%{customdata[2]} "
            + f"{money_unit(view.currency)}/MWh<extra></extra>",
            marker={
                "symbol": sign_symbols(values),
                "size": marker_sizes(values, bound, nodes.n),
                "color": floats(values),
                "cmin": -bound,
                "cmid": 0.0,
                "cmax": bound,
                "colorscale": diverging(),
                "line": {"color": LIGHT["ink"], "width": 0.8 if nodes.n <= 400 else 0.3},
                "colorbar": {
                    "orientation": "h",
                    "thickness": 10,
                    "len": 0.5,
                    "x": 0.0,
                    "xanchor": "left",
                    "y": 1.02,
                    "yanchor": "bottom",
                    "outlinewidth": 0,
                    "tickfont": {"color": LIGHT["soft"], "size": 11},
                    "title": {
                        "text": f"{money_unit(view.currency)}/MWh",
                        "side": "right",
                        "font": {"color": LIGHT["soft"], "size": 11},
                    },
                },
            },
            showlegend=False,
            name="buses",
        )
    )
    figure.add_trace(
        go.Scatter(
            x=floats([nodes.x[max(pair.worst_bus, 0)]]),
            y=floats([nodes.y[max(pair.worst_bus, 0)]]),
            mode="markers",
            marker={"symbol": "circle-open", "size": 26, "color": LIGHT["ink"], "line": {"width": 2}},
            hoverinfo="skip",
            showlegend=False,
            name="chosen bus",
        )
    )
    blank = {"visible": False, "fixedrange": False}
    figure.update_xaxes(**blank)
    figure.update_yaxes(**blank)
    if not nodes.automatic:
        figure.update_yaxes(scaleanchor="x", scaleratio=1)
    return figure


def marker_sizes(values: Matrix, bound: float, n_bus: int) -> list[float]:
    """Return marker sizes that grow with the size of the value up to the bound of the scale [px]."""
    small, large = (9.0, 20.0) if n_bus <= FEW_BUSES else (6.0, 14.0) if n_bus <= 400 else (3.5, 9.0)
    share = np.minimum(np.abs(np.nan_to_num(values)) / bound, 1.0)
    return [round(float(size), 1) for size in small + (large - small) * np.sqrt(share)]


def heatmap_order(view: WeeklyView) -> list[int]:
    """Return the buses by zone, then by the size of their main difference."""
    difference = np.abs(view.cube.difference(view.main.base, view.main.against))
    size = np.nan_to_num(np.where(np.isfinite(difference), difference, 0.0).mean(axis=1))
    return sorted(range(view.nodes.n), key=lambda bus: (view.nodes.zone[bus], -size[bus], bus))


def heatmap(view: WeeklyView) -> go.Figure:
    """Return the main difference at every bus (rows) and hour (columns)."""
    nodes = view.nodes
    difference = view.cube.difference(view.main.base, view.main.against)
    bound = scale_bound(difference)
    order = heatmap_order(view)
    figure = picture(int(np.clip(90 + 17 * nodes.n, 300, 760)), left=60, top=30)
    figure.add_trace(
        go.Heatmap(
            z=floats(difference[order]),
            x0=0,
            dx=1,
            y0=0,
            dy=1,
            zmin=-bound,
            zmid=0.0,
            zmax=bound,
            colorscale=diverging(),
            hoverinfo="none",
            hoverongaps=False,
            colorbar={
                "thickness": 10,
                "outlinewidth": 0,
                "tickfont": {"color": LIGHT["soft"], "size": 11},
                "len": 0.9,
            },
        )
    )
    time_axis(figure, view.hours)
    every = max(1, int(np.ceil(nodes.n / 60)))
    figure.update_yaxes(
        autorange=False,
        range=[nodes.n - 0.5, -0.5],
        tickmode="array",
        tickvals=list(range(0, nodes.n, every)),
        ticktext=labels([nodes.name[bus] for bus in order[::every]], 20),
        showgrid=False,
        ticks="",
    )
    return figure
