"""The loading sweep as a page of its own: how the formulations drift apart as load grows."""

from __future__ import annotations

from pathlib import Path

import pandas as pd
from markupsafe import Markup
from plotly import graph_objects as go
from plotly.subplots import make_subplots

from lmpgap.report.figures.base import floats
from lmpgap.report.files import write_atomically
from lmpgap.report.palette import DASH, LIGHT, SYMBOL
from lmpgap.report.render import environment, resource
from lmpgap.report.text import number

_PANELS = (
    ("price_error", "mean price difference from ac, {currency}/MWh"),
    ("loss_component_error", "mean loss-component difference from ac, {currency}/MWh"),
    ("cost_error", "cost less that of ac, {currency}/h"),
    ("losses_mw", "losses (generation less load), MW"),
    ("angle_error_deg", "largest branch angle difference from ac, deg"),
    ("mean_price", "load-weighted price, {currency}/MWh"),
)
_TABLE = ("load_factor", "formulation", "hours", "load_mw", "generation_mw", *(name for name, _ in _PANELS))


def sweep_figure(table: pd.DataFrame, currency: str) -> go.Figure:
    """Return one panel per figure, one line per formulation, over the load factor.

    Parameters
    ----------
    table
        Run table ``sweep``.
    """
    figure = make_subplots(
        rows=3,
        cols=2,
        subplot_titles=[title.format(currency=currency) for _, title in _PANELS],
        shared_xaxes=True,
        vertical_spacing=0.09,
        horizontal_spacing=0.1,
    )
    for panel, (column, _) in enumerate(_PANELS):
        for name, part in table.groupby("formulation", sort=False):
            figure.add_trace(
                go.Scatter(
                    x=floats(part["load_factor"]),
                    y=floats(part[column]),
                    mode="lines+markers",
                    name=str(name),
                    legendgroup=str(name),
                    showlegend=panel == 0,
                    line={
                        "color": LIGHT.get(str(name), LIGHT["other"]),
                        "dash": DASH.get(str(name), "solid"),
                        "width": 2,
                    },
                    marker={"symbol": SYMBOL.get(str(name), "circle"), "size": 7},
                    hovertemplate="load x %{x:.2f}: %{y:.4g}<extra>" + str(name) + "</extra>",
                ),
                row=panel // 2 + 1,
                col=panel % 2 + 1,
            )
    figure.update_xaxes(title_text="load factor", row=3)
    figure.update_annotations(font_size=13)
    figure.update_layout(
        height=900,
        template="none",
        paper_bgcolor="rgba(0,0,0,0)",
        plot_bgcolor="rgba(0,0,0,0)",
        margin={"l": 64, "r": 24, "t": 60, "b": 56},
        legend={"orientation": "h", "y": 1.07},
        font={"family": "system-ui, sans-serif", "color": LIGHT["ink"]},
    )
    return figure


def write_sweep_page(table: pd.DataFrame, name: str, currency: str, path: Path | str) -> Path:
    """Write the sweep as one self-contained HTML file and return its path.

    Raises
    ------
    DataError
        The file cannot be written.
    """
    picture = sweep_figure(table, currency).to_html(
        full_html=False, include_plotlyjs=True, config={"displayModeBar": False, "responsive": True}
    )
    rows = [
        [str(value) if isinstance(value, str) else number(float(value)) for value in row]
        for row in table[list(_TABLE)].itertuples(index=False)
    ]
    page = (
        environment()
        .get_template("sweep.html.j2")
        .render(
            title=name,
            style=Markup(resource("report.css")),
            picture=Markup(picture),
            columns=[column.replace("_", " ") for column in _TABLE],
            rows=rows,
        )
    )
    return write_atomically(Path(path), page)
