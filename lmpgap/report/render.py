"""The weekly report as one self-contained HTML file."""

from __future__ import annotations

from functools import cache
from importlib.resources import files
from pathlib import Path

from jinja2 import Environment, PackageLoader, StrictUndefined
from markupsafe import Markup

from lmpgap.report.embed import ArrayStore, script_hash
from lmpgap.report.files import write_atomically
from lmpgap.report.page import page_data
from lmpgap.report.pictures import make_pictures
from lmpgap.report.text import number, plain, script_json
from lmpgap.report.view.model import WeeklyView

SCRIPTS = ("data.js", "theme.js", "pictures.js", "controls.js")
"""Parts of the page's own script, in the order in which they are joined."""


@cache
def environment() -> Environment:
    """Return the template environment: everything escaped, and an unfilled slot is an error."""
    made = Environment(
        loader=PackageLoader("lmpgap.report", "templates"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    made.filters["plain"] = plain
    made.filters["number"] = number
    return made


def resource(name: str) -> str:
    """Return a style sheet or script that lies beside the templates."""
    return (files("lmpgap.report") / "templates" / name).read_text(encoding="utf-8")


def plotly_library() -> str:
    """Return the drawing library's script, fit to stand inside a script element."""
    from plotly.offline import get_plotlyjs

    return str(get_plotlyjs()).replace("</script", "<\\/script")


def weekly_html(view: WeeklyView) -> str:
    """Return the weekly report as HTML text that loads nothing from anywhere."""
    pictures = make_pictures(view)
    store = ArrayStore()
    data = page_data(view, pictures, store)
    library = plotly_library()
    own = '"use strict";\n(() => {\n' + "\n".join(resource(name) for name in SCRIPTS) + "\n})();\n"
    return (
        environment()
        .get_template("weekly.html.j2")
        .render(
            view=view,
            pictures=pictures,
            style=Markup(resource("report.css")),
            library=Markup(library),
            script=Markup(own),
            data=Markup(script_json(data)),
            arrays=store.blocks,
            script_sources=" ".join((script_hash(library), script_hash(own))),
        )
    )


def write_weekly_report(view: WeeklyView, path: Path | str) -> Path:
    """Write the weekly report and return its path.

    Parameters
    ----------
    view
        From `lmpgap.report.view.build_view`.
    path
        HTML file; it is replaced in one step, so that a reader never sees half a report.

    Raises
    ------
    DataError
        The file cannot be written.
    """
    return write_atomically(Path(path), weekly_html(view))
