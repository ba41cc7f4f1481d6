"""The loading sweep as a page of its own: its picture and its table."""

from __future__ import annotations

import json
from pathlib import Path

import pandas as pd
from markupsafe import Markup

from lmpgap.errors import DataError, Fault
from lmpgap.report.embed import script_hash
from lmpgap.report.figures.evidence import sweep_errors
from lmpgap.report.files import write_atomically
from lmpgap.report.render import environment, plotly_library, resource
from lmpgap.report.text import script_json
from lmpgap.report.view.losses import sweep_view

_SCRIPT = """"use strict";
const figures = JSON.parse(document.getElementById("figures").textContent);
for (const [slot, figure] of Object.entries(figures)) {
  const element = document.querySelector(`[data-slot="${slot}"]`);
  Plotly.newPlot(element, figure.data, figure.layout, { displayModeBar: false, responsive: true });
}
document.documentElement.dataset.ready = "yes";
"""


def write_sweep_page(sweep: pd.DataFrame, title: str, currency: str, path: Path | str) -> Path:
    """Write the sweep's picture and table as one self-contained HTML file, and return its path.

    Parameters
    ----------
    sweep
        Run table ``sweep``.
    title
        Name of the scenario.
    currency
        Of prices and costs.

    Raises
    ------
    DataError
        The sweep is empty, or the file cannot be written.
    """
    view = sweep_view(sweep, currency)
    if view is None:
        raise DataError("There is no sweep to draw.", [Fault(table="sweep", message="has no rows")])
    pictures = {
        "prices": ("Whole price", sweep_errors(view.factor, view.price_error, currency)),
        "losses": ("Loss component", sweep_errors(view.factor, view.loss_component_error, currency)),
    }
    library = plotly_library()
    data = script_json({slot: json.loads(figure.to_json()) for slot, (_, figure) in pictures.items()})
    text = (
        environment()
        .get_template("sweep.html.j2")
        .render(
            title=title,
            pictures={slot: (name, figure.layout.height) for slot, (name, figure) in pictures.items()},
            table=view.table,
            style=Markup(resource("report.css")),
            library=Markup(library),
            script=Markup(_SCRIPT),
            data=Markup(data),
            script_sources=" ".join((script_hash(library), script_hash(_SCRIPT))),
        )
    )
    return write_atomically(Path(path), text)
