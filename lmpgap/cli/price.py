"""`price` and `compare`: solve a scenario, and hold one price set against another."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from lmpgap.cli.shared import (
    FORMULATIONS_HELP,
    ClusterOption,
    JsonOption,
    RunArgument,
    ScenarioArgument,
    WorkersOption,
    echo,
    echo_json,
    echo_table,
    parse_formulations,
    records,
    terminal_progress,
)


def price(
    scenario: ScenarioArgument,
    run: Annotated[
        Path, typer.Option("--run", metavar="RUN", help="Run folder to write; an existing one is continued.")
    ],
    formulations: Annotated[str, typer.Option("--formulations", help=FORMULATIONS_HELP)] = "dc,dc-loss,soc,ac",
    workers: WorkersOption = 1,
    cluster: ClusterOption = None,
    uniqueness: Annotated[
        bool, typer.Option("--uniqueness/--no-uniqueness", help="Search price intervals where prices are not unique.")
    ] = True,
    losses: Annotated[
        str,
        typer.Option(
            "--losses", help="Losses of dc-loss: `own` (of its own flows) or `table` (the scenario's delivery_factors)."
        ),
    ] = "own",
    factors_from: Annotated[
        Path | None,
        typer.Option(
            "--factors-from", metavar="RUN", help="Freeze the losses of dc-loss at this run's operating points."
        ),
    ] = None,
    factors_age: Annotated[
        float,
        typer.Option("--factors-age", min=0.0, help="With --factors-from: how old the operating point is, in hours."),
    ] = 0.0,
    voltages_from: Annotated[
        Path | None,
        typer.Option(
            "--voltages-from", metavar="RUN", help="Losses of dc-loss at this run's voltages; at 1 pu without it."
        ),
    ] = None,
    json: JsonOption = False,
) -> None:
    """Solve every interval, split and certify every price, and store all of it in a run folder.

    A run that was stopped goes on where it stopped; after a change of inputs only the intervals it touches are
    solved again.

    Example: lmpgap price scenarios/demo --formulations dc,soc,ac --run runs/demo --workers 2
    """
    chosen = parse_formulations(formulations)
    if losses not in ("own", "table") or (losses == "table" and factors_from is not None):
        raise typer.BadParameter("`own` or `table`, and not together with --factors-from", param_hint="--losses")
    import pandas as pd

    from lmpgap.runs.folder import RunFolder
    from lmpgap.runs.given_losses import FactorTable, FrozenPoints, LossSource, VoltageProfiles
    from lmpgap.runs.price import price as price_scenario
    from lmpgap.runs.summary import summarise_run
    from lmpgap.scenario.read import read_scenario

    read = read_scenario(scenario)
    source: LossSource | None = FactorTable(read) if losses == "table" else None
    if factors_from is not None:
        source = FrozenPoints(read, RunFolder(factors_from), age=pd.Timedelta(hours=factors_age))
    if voltages_from is not None:
        source = VoltageProfiles(read, RunFolder(voltages_from), source)
    with terminal_progress() as progress:
        folder = price_scenario(
            read,
            run,
            formulations=chosen,
            workers=workers,
            cluster=cluster,
            progress=progress,
            uniqueness=uniqueness,
            losses=source,
        )
    summary = summarise_run(folder)
    if json:
        echo_json({"run": folder.path, "formulations": records(summary)})
        return
    echo_table(summary)
    echo(f"\nrun folder: {folder.path}")


def compare(
    run: RunArgument,
    base: Annotated[str, typer.Option("--base", help="Price set to explain: a formulation, or posted.")] = "dc",
    against: Annotated[str, typer.Option("--against", help="Price set it is held against.")] = "ac",
    scenario: Annotated[
        Path | None, typer.Option("--scenario", metavar="SCENARIO", help="Scenario folder, if it moved since the run.")
    ] = None,
    top: Annotated[int, typer.Option("--top", min=1, help="How many rows of each ranking to print.")] = 10,
    json: JsonOption = False,
) -> None:
    """Show where two price sets differ, by how much, and why, and store the differences and their drivers.

    A difference is the price of AGAINST minus the price of BASE; its drivers add up to it.

    Example: lmpgap compare runs/demo --base dc --against ac
    """
    from lmpgap.runs.folder import RunFolder
    from lmpgap.scenario.read import read_scenario
    from lmpgap.weekly import compare_one

    folder = RunFolder(run)
    read = read_scenario(scenario or folder.scenario_folder)
    rankings = compare_one(folder, base, against, read).rankings(
        top, positions=read.tables["positions"], hours=read.settings.hours, hubs=read.tables["hubs"]
    )
    if json:
        echo_json({"base": base, "against": against, **{name: records(frame) for name, frame in rankings.items()}})
        return
    for title, frame in rankings.items():
        for column in [c for c in ("interval_start", "largest_at") if c in frame and frame[c].dtype.kind == "M"]:
            frame = frame.assign(**{column: read.hour_ending(frame[column]).to_numpy()})
        echo(f"\n{title}")
        echo_table(frame)
