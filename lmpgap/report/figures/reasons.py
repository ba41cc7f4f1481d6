"""Why: the waterfall between two price sets, the ladder of formulations, and the components at hubs."""

from __future__ import annotations

import numpy as np
import plotly.graph_objects as go

from lmpgap.report.figures.base import floats, labels, money_unit, picture
from lmpgap.report.palette import LIGHT, colour
from lmpgap.report.text import number
from lmpgap.report.view.cube import COMPONENTS
from lmpgap.report.view.model import WeeklyView

PARTS = COMPONENTS[1:]

DRIVER_COLOURS = {
    "energy price": "energy",
    "delivery factor": "loss",
    "binds only in base": "below_1",
    "binds only in against": "congestion",
    "shadow price": "below_2",
    "shift factor": "below_3",
    "reactive": "reactive",
    "congestion": "congestion",
    "unsplit": "other",
}
"""Colour of each kind of driver; the constraint kinds share one family."""

DRIVER_PATTERNS = {
    "binds only in base": "\\",
    "binds only in against": "/",
    "shift factor": ".",
    "reactive": "x",
    "congestion": "-",
    "unsplit": "+",
}
"""Hatching of the drivers whose colours lie close together."""


def waterfall(view: WeeklyView, bus: int, hour: int) -> go.Figure:
    """Return the way from one price to the other at one bus and hour, component by component.

    The prices at both ends are level marks, not bars, so that the axis may begin where the prices are.
    Traces: the steps, the two prices, the thin joints between them.
    """
    base, against = view.main.base, view.main.against
    start = float(view.cube.get(base)[bus, hour])
    end = float(view.cube.get(against)[bus, hour])
    steps = [float(np.nan_to_num(view.cube.difference(base, against, part)[bus, hour])) for part in PARTS]
    levels = start + np.concatenate([[0.0], np.cumsum(steps)])
    categories = [base, *PARTS, against]
    figure = picture(350, top=24, bottom=46)
    figure.add_trace(
        go.Bar(
            x=list(PARTS),
            base=floats(levels[:-1]),
            y=floats(steps),
            marker={"color": [LIGHT["above_2"] if step >= 0 else LIGHT["below_2"] for step in steps]},
            text=[number(step, signed=True) for step in steps],
            textposition="outside",
            textfont={"size": 12},
            constraintext="none",
            cliponaxis=False,
            width=0.56,
            hoverinfo="skip",
            showlegend=False,
        )
    )
    figure.add_trace(
        go.Scatter(
            x=[base, against],
            y=floats([start, end]),
            mode="markers+text",
            text=[number(start), number(end)],
            textposition="top center",
            textfont={"size": 14},
            marker={"symbol": "line-ew", "size": 44, "line": {"width": 4, "color": [colour(base), colour(against)]}},
            hoverinfo="skip",
            showlegend=False,
        )
    )
    joints_x: list[str | None] = []
    joints_y: list[float | None] = []
    for place in range(len(categories) - 1):
        joints_x += [categories[place], categories[place + 1], None]
        joints_y += [float(levels[place]), float(levels[place]), None]
    figure.add_trace(
        go.Scatter(
            x=joints_x,
            y=joints_y,
            mode="lines",
            line={"color": LIGHT["soft"], "width": 1, "dash": "dot"},
            hoverinfo="skip",
            showlegend=False,
        )
    )
    low, high = float(levels.min()), float(levels.max())
    room = max(0.18 * (high - low), 0.4)
    figure.update_xaxes(categoryorder="array", categoryarray=categories, tickfont={"color": LIGHT["ink"], "size": 13})
    figure.update_yaxes(title_text=f"{money_unit(view.currency)}/MWh", range=[low - room, high + 1.6 * room])
    return figure


def ladder(view: WeeklyView) -> go.Figure:
    """Return what each step of the ladder costs: mean size of its drivers, or of its components."""
    figure = picture(290, left=110, top=44)
    steps = view.ladder
    explained = bool(steps) and all(step.drivers for step in steps)
    kinds: list[str] = []
    for step in steps:
        kinds += [kind for kind in (step.drivers if explained else step.by_component) if kind not in kinds]
    order = list(DRIVER_COLOURS) if explained else list(PARTS)
    kinds.sort(key=lambda kind: order.index(kind) if kind in order else len(order))
    rows = [f"{step.base} → {step.against}" for step in steps]
    for kind in kinds:
        values = [(step.drivers if explained else step.by_component).get(kind, 0.0) for step in steps]
        key = DRIVER_COLOURS.get(kind, kind)
        figure.add_trace(
            go.Bar(
                y=rows,
                x=floats(np.nan_to_num(values)),
                orientation="h",
                name=kind.replace("in base", "before").replace("in against", "after"),
                marker={
                    "color": LIGHT.get(key, LIGHT["other"]),
                    "line": {"color": LIGHT["paper"], "width": 1},
                    "pattern": {
                        "shape": DRIVER_PATTERNS.get(kind, ""),
                        "fillmode": "overlay",
                        "fgcolor": LIGHT["paper"],
                        "fgopacity": 0.55,
                        "size": 7,
                        "solidity": 0.25,
                    },
                },
                hovertemplate="%{x:.2f}",
            )
        )
    figure.update_layout(barmode="stack", bargap=0.45)
    figure.update_yaxes(autorange="reversed", tickfont={"color": LIGHT["ink"], "size": 13}, showgrid=False, ticks="")
    figure.update_xaxes(title_text=f"mean size of each driver, {money_unit(view.currency)}/MWh", showgrid=True)
    return figure


def hub_components(view: WeeklyView) -> go.Figure:
    """Return the week-mean components at each hub under each price set, less those of energy.

    The energy component is the same everywhere and would hide the others; it is in the table.
    """
    names = labels(view.hubs.hubs.name, 22)
    figure = picture(max(250, 110 + 30 * len(names) * len(view.cube.sets)), left=120, top=44)
    rows = [[], []]  # type: list[list[str]]
    for hub in names:
        for price_set in view.cube.sets:
            rows[0].append(hub)
            rows[1].append(price_set)
    for part in PARTS[1:]:
        values = [
            view.hubs.means[price_set][part][place] for place in range(len(names)) for price_set in view.cube.sets
        ]
        figure.add_trace(
            go.Bar(
                y=rows,
                x=floats(values),
                orientation="h",
                name=part,
                marker={"color": colour(part)},
                hovertemplate="%{x:+.2f}",
            )
        )
    figure.update_layout(barmode="relative", bargap=0.3)
    figure.update_yaxes(autorange="reversed", showgrid=False, ticks="", dividercolor=LIGHT["rule"])
    figure.update_xaxes(
        title_text=f"{money_unit(view.currency)}/MWh",
        showgrid=True,
        zeroline=True,
        zerolinecolor=LIGHT["soft"],
    )
    return figure
