"""What all commands share: argument types, progress on the terminal, tables, and errors told in words."""

from __future__ import annotations

import json
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from lmpgap.progress import Progress

if TYPE_CHECKING:
    import pandas as pd

ScenarioArgument = Annotated[
    Path, typer.Argument(metavar="SCENARIO", help="Scenario folder: scenario.toml and its tables.")
]
RunArgument = Annotated[Path, typer.Argument(metavar="RUN", help="Run folder made by `price` or `weekly`.")]
JsonOption = Annotated[bool, typer.Option("--json", help="Print JSON instead of a table.")]
WorkersOption = Annotated[
    int, typer.Option("--workers", min=1, help="Worker processes; a second one pays off above a few seconds.")
]
ClusterOption = Annotated[
    str | None,
    typer.Option("--cluster", metavar="ADDRESS", help="Scheduler of a Dask cluster, e.g. tcp://SCHEDULER:8786."),
]
FORMULATIONS_HELP = "Comma-separated: dc, dc-loss, soc, ac."


def echo(text: str = "") -> None:
    """Print to standard output."""
    typer.echo(text)


def echo_json(value: Any) -> None:
    """Print a value as JSON; times as ISO 8601, figures that do not exist as null."""
    typer.echo(json.dumps(plain(value), indent=2, ensure_ascii=False))


def plain(value: Any) -> Any:
    """Return the value with nothing in it that JSON does not know."""
    import math

    if isinstance(value, dict):
        return {str(key): plain(item) for key, item in value.items()}
    if isinstance(value, (list, tuple)):
        return [plain(item) for item in value]
    if hasattr(value, "isoformat"):
        return value.isoformat()
    if hasattr(value, "item"):
        return plain(value.item())
    if isinstance(value, float) and not math.isfinite(value):
        return None
    if value is None or isinstance(value, (str, int, float, bool)):
        return value
    return str(value)


def records(frame: pd.DataFrame) -> list[dict[str, Any]]:
    """Return a table as a list of rows that JSON can carry."""
    return [plain(row) for row in frame.to_dict("records")]


def echo_table(frame: pd.DataFrame, decimals: int = 2) -> None:
    """Print a table for people: aligned, without index, figures with a fixed number of decimals."""
    if frame.empty:
        typer.echo("(nothing)")
        return
    typer.echo(frame.to_string(index=False, float_format=lambda x: f"{x:,.{decimals}f}"))


@contextmanager
def terminal_progress() -> Iterator[Progress]:
    """Show progress bars with the remaining time on standard error; nothing when that is not a terminal."""
    if not sys.stderr.isatty():
        with _line_progress() as report:
            yield report
        return
    from rich.console import Console
    from rich.progress import BarColumn, MofNCompleteColumn, TextColumn, TimeElapsedColumn, TimeRemainingColumn
    from rich.progress import Progress as Bars

    bars = Bars(
        TextColumn("{task.description}"),
        BarColumn(),
        MofNCompleteColumn(),
        TextColumn("elapsed"),
        TimeElapsedColumn(),
        TextColumn("left"),
        TimeRemainingColumn(),
        console=Console(stderr=True),
    )
    with bars:
        known: dict[str, Any] = {}

        def report(task: str, done: int, total: int) -> None:
            if task not in known:
                known[task] = bars.add_task(task, total=total)
            bars.update(known[task], completed=done, total=total)

        yield report


@contextmanager
def _line_progress() -> Iterator[Progress]:
    """Report each tenth of a task as a line, for logs."""
    import time

    started: dict[str, float] = {}
    shown: dict[str, int] = {}

    def report(task: str, done: int, total: int) -> None:
        now = time.monotonic()
        started.setdefault(task, now)
        tenth = 10 if total == 0 else done * 10 // total
        if shown.get(task) == tenth or (done == 0 and total > 0):
            shown.setdefault(task, 0)
            return
        shown[task] = tenth
        elapsed = now - started[task]
        left = elapsed / done * (total - done) if done else 0.0
        typer.echo(f"{task}: {done}/{total}, {elapsed:.0f} s elapsed, {left:.0f} s left", err=True)

    yield report


def parse_formulations(text: str) -> tuple[str, ...]:
    """Return the chosen formulations in the order of the ladder.

    Raises
    ------
    typer.BadParameter
        For an unknown or missing name.
    """
    from lmpgap.dispatch.names import FORMULATIONS

    chosen = [name.strip() for name in text.split(",") if name.strip()]
    unknown = [name for name in chosen if name not in FORMULATIONS]
    if unknown or not chosen:
        raise typer.BadParameter(
            f"{', '.join(unknown) or 'nothing'} is not a formulation; choose from {', '.join(FORMULATIONS)}"
        )
    return tuple(name for name in FORMULATIONS if name in chosen)
