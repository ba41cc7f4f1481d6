"""`weekly`: the main job."""

from __future__ import annotations

from datetime import date, datetime
from pathlib import Path
from typing import Annotated

import typer

from lmpgap.cli.shared import (
    ClusterOption,
    JsonOption,
    ScenarioArgument,
    WorkersOption,
    echo,
    echo_json,
    terminal_progress,
)


def weekly(
    scenario: ScenarioArgument,
    run: Annotated[
        Path | None,
        typer.Option("--run", metavar="RUN", help="Run folder; finished solves are used again. runs/NAME by default."),
    ] = None,
    out: Annotated[
        Path | None,
        typer.Option("--out", metavar="FILE", help="HTML file to write. reports/NAME.html by default."),
    ] = None,
    workers: WorkersOption = 1,
    cluster: ClusterOption = None,
    today: Annotated[
        datetime | None,
        typer.Option("--today", formats=["%Y-%m-%d"], help="Day the days left to a deadline are counted from."),
    ] = None,
    json: JsonOption = False,
) -> None:
    """Do all of it: solve, compare, check the posted prices, settle, and write the weekly report.

    Example: lmpgap weekly scenarios/demo --run runs/demo --out reports/demo.html --workers 2
    """
    from lmpgap.weekly import weekly_report

    name = scenario.resolve().name
    with terminal_progress() as progress:
        done = weekly_report(
            scenario,
            run or Path("runs") / name,
            out or Path("reports") / f"{name}.html",
            workers=workers,
            cluster=cluster,
            today=today.date() if today else date.today(),
            progress=progress,
        )
    if json:
        echo_json({"run": done.run.path, "report": done.report, "index": done.index, "sentences": done.sentences})
        return
    for sentence in done.sentences:
        echo(sentence)
    echo(f"\nreport: {done.report}\nindex:  {done.index}")
