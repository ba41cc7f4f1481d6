"""`areas`: prices of hubs and zones, and what of a zone's change is weight drift."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from lmpgap.cli.shared import JsonOption, RunArgument, echo, echo_json, echo_table, records


def areas(
    run: RunArgument,
    scenario: Annotated[
        Path | None, typer.Option("--scenario", metavar="SCENARIO", help="Scenario folder, if it moved since the run.")
    ] = None,
    earlier: Annotated[
        Path | None,
        typer.Option("--earlier", metavar="RUN", help="Drift from this run instead of from each day to the next."),
    ] = None,
    json: JsonOption = False,
) -> None:
    """Show prices of hubs and zones with their components, and how much of a zone's change is weight drift.

    Price change and weight drift add up to the change of the zone's load-weighted price. The prices of every interval
    are stored in the table `areas` of the run, the drift from day to day in `drift`.

    Example: lmpgap areas runs/demo
    """
    from lmpgap.runs.areas import drift_between_runs, summarise_areas, write_areas
    from lmpgap.runs.folder import RunFolder
    from lmpgap.scenario.read import read_scenario

    folder = RunFolder(run)
    read = read_scenario(scenario or folder.scenario_folder)
    with folder.writing():
        made = write_areas(read, folder)
    drift = made.drift if earlier is None else drift_between_runs(read, RunFolder(earlier), folder)
    summary = summarise_areas(made.areas)
    if json:
        echo_json({"areas": records(summary), "drift": records(drift)})
        return
    echo("hubs and zones")
    echo_table(summary)
    echo("\nchange of zone prices")
    echo_table(drift[drift["component"] == "lmp"].drop(columns="component"))
