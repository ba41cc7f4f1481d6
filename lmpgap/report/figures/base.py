"""What all pictures share: a quiet frame, day ticks, number formats, and colours by key."""

from __future__ import annotations

from typing import Any

import numpy as np
import plotly.graph_objects as go
from numpy.typing import NDArray

from lmpgap.report.palette import LIGHT
from lmpgap.report.text import plot_text
from lmpgap.report.view.hours import Hours

FONT = 'system-ui, -apple-system, "Segoe UI", Roboto, "Helvetica Neue", "Liberation Sans", Arial, sans-serif'


def picture(height: int, *, left: int = 56, bottom: int = 40, top: int = 12, right: int = 16) -> go.Figure:
    """Return an empty picture in the report's frame.

    Parameters
    ----------
    height
        [px]; the width follows the page.
    left, bottom, top, right
        Margins [px].
    """
    axis = {
        "gridcolor": LIGHT["grid"],
        "linecolor": LIGHT["rule"],
        "zeroline": False,
        "ticks": "outside",
        "tickcolor": LIGHT["rule"],
        "ticklen": 4,
        "tickfont": {"color": LIGHT["soft"], "size": 12},
        "title": {"font": {"color": LIGHT["soft"], "size": 12}, "standoff": 8},
        "automargin": True,
        "separatethousands": True,
        "fixedrange": True,
    }
    return go.Figure(
        layout={
            "template": go.layout.Template(),
            "height": height,
            "margin": {"l": left, "r": right, "t": top, "b": bottom},
            "paper_bgcolor": "rgba(0,0,0,0)",
            "plot_bgcolor": "rgba(0,0,0,0)",
            "font": {"family": FONT, "size": 13, "color": LIGHT["ink"]},
            "hoverlabel": {
                "bgcolor": LIGHT["paper"],
                "bordercolor": LIGHT["rule"],
                "font": {"family": FONT, "size": 13, "color": LIGHT["ink"]},
                "namelength": 60,
                "align": "left",
            },
            "legend": {
                "orientation": "h",
                "x": 0,
                "y": 1.02,
                "xanchor": "left",
                "yanchor": "bottom",
                "font": {"color": LIGHT["ink"], "size": 12},
                "itemclick": "toggle",
                "bgcolor": "rgba(0,0,0,0)",
            },
            "xaxis": {**axis, "showgrid": False},
            "yaxis": axis,
            "dragmode": False,
            "separators": ".,",
        }
    )


def time_axis(figure: go.Figure, hours: Hours) -> None:
    """Give the horizontal axis day ticks; positions are interval numbers from 0."""
    figure.update_xaxes(
        tickmode="array",
        tickvals=list(hours.day_position),
        ticktext=list(hours.day_label),
        range=[-0.5, hours.n - 0.5],
        showgrid=True,
        tickangle=0,
        ticklabelposition="outside right",
        ticklabelshift=2,
    )


def hour_line(figure: go.Figure, hour: int) -> None:
    """Mark the chosen interval; the page moves the first shape of the picture."""
    figure.add_shape(
        type="line", x0=hour, x1=hour, y0=0, y1=1, yref="paper", line={"color": LIGHT["ink"], "width": 1, "dash": "dot"}
    )


def floats(values: Any) -> NDArray[np.float32]:
    """Return figures in the precision in which the page keeps them."""
    return np.asarray(values, dtype=np.float32)


def money_unit(currency: str) -> str:
    """Return the currency as it may stand in a title or a hover text, where ``%{`` would begin a placeholder."""
    return plot_text(currency, 12).replace("%", "&#37;")


def labels(names: Any, limit: int = 36) -> list[str]:
    """Return names that are safe in a plotly label."""
    return [plot_text(name, limit) for name in names]
