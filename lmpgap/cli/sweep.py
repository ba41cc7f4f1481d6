"""`sweep`, `ageing` and `restate`: growth with loading, age of loss factors, and a second opinion."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from lmpgap.cli.shared import (
    FORMULATIONS_HELP,
    JsonOption,
    RunArgument,
    ScenarioArgument,
    echo,
    echo_json,
    echo_table,
    parse_formulations,
    records,
    terminal_progress,
)


def sweep(
    scenario: ScenarioArgument,
    lowest: Annotated[float, typer.Option("--from", min=0.01, help="Smallest load factor.")] = 0.5,
    highest: Annotated[float, typer.Option("--to", min=0.01, help="Largest load factor.")] = 1.2,
    steps: Annotated[int, typer.Option("--steps", min=2, max=200, help="How many load factors.")] = 8,
    intervals: Annotated[
        str,
        typer.Option(
            "--intervals", help="`peak` (the hour with the highest load), `all`, or positions such as 0,12,18."
        ),
    ] = "peak",
    formulations: Annotated[str, typer.Option("--formulations", help=FORMULATIONS_HELP)] = "dc,dc-loss,soc,ac",
    out: Annotated[
        Path | None, typer.Option("--out", metavar="FILE", help="Write the picture as an HTML file.")
    ] = None,
    json: JsonOption = False,
) -> None:
    """Scale all load and show how generation, cost, price and loss-component differences to the AC dispatch grow.

    Example: lmpgap sweep scenarios/demo --from 0.5 --to 1.2 --out sweep.html
    """
    chosen = parse_formulations(formulations)
    if highest <= lowest:
        raise typer.BadParameter("--to must be larger than --from")
    import numpy as np

    from lmpgap.runs.sweep import sweep as sweep_load
    from lmpgap.scenario.read import read_scenario

    loaded = read_scenario(scenario)
    positions = _positions(intervals, len(loaded.interval_starts))
    with terminal_progress() as progress:
        table = sweep_load(
            loaded,
            np.linspace(lowest, highest, steps),
            positions=positions,
            formulations=chosen,
            progress=progress,
        )
    if out is not None:
        from lmpgap.report.sweep_page import write_sweep_page

        write_sweep_page(table, loaded.settings.name, loaded.settings.currency, out)
    if json:
        echo_json(records(table))
        return
    echo_table(table)
    if out is not None:
        echo(f"\npicture: {out}")


def ageing(
    run: RunArgument,
    ages: Annotated[str, typer.Option("--ages", help="Ages of the operating points in hours.")] = "0,1,3,6,12,24",
    scenario: Annotated[
        Path | None, typer.Option("--scenario", metavar="SCENARIO", help="Scenario folder, if it moved since the run.")
    ] = None,
    json: JsonOption = False,
) -> None:
    """Show how dc-loss prices move with the age of the operating point behind the loss factors.

    Example: lmpgap ageing runs/demo --ages 0,1,6,24
    """
    try:
        chosen = [float(part) for part in ages.split(",")]
    except ValueError:
        raise typer.BadParameter(f"{ages!r} is not a list of hours such as 0,1,6,24", param_hint="--ages") from None
    if min(chosen) < 0.0:
        raise typer.BadParameter("ages are hours before the interval and not negative", param_hint="--ages")
    from lmpgap.runs.factor_age import factor_age
    from lmpgap.runs.folder import RunFolder
    from lmpgap.scenario.read import read_scenario

    folder = RunFolder(run)
    with terminal_progress() as progress:
        table = factor_age(read_scenario(scenario or folder.scenario_folder), folder, chosen, progress=progress)
    if json:
        echo_json(records(table))
        return
    echo_table(table)


def restate(
    scenario: ScenarioArgument,
    intervals: Annotated[
        str, typer.Option("--intervals", help="`peak`, `all`, or positions such as 0,12,18.")
    ] = "peak",
    formulations: Annotated[
        str, typer.Option("--formulations", help="Comma-separated: dc, dc-loss, soc.")
    ] = "dc,dc-loss,soc",
    json: JsonOption = False,
) -> None:
    """Solve some intervals again from an independent statement of the problem, and compare cost and prices.

    Exit status 1 when a restated solve disagrees.

    Example: lmpgap restate scenarios/demo --intervals 0,12,18
    """
    chosen = parse_formulations(formulations)
    from lmpgap.runs.second_opinion import second_opinion
    from lmpgap.runs.sweep import peak_position
    from lmpgap.scenario.read import read_scenario

    loaded = read_scenario(scenario)
    positions = _positions(intervals, loaded.n_interval)
    with terminal_progress() as progress:
        table = second_opinion(
            loaded, [peak_position(loaded)] if positions is None else positions, formulations=chosen, progress=progress
        )
    if json:
        echo_json(records(table))
    else:
        echo_table(table, decimals=6)
    if not (table["agrees"] | (table["remark"] != "")).all():
        raise typer.Exit(1)


def _positions(text: str, n_interval: int) -> list[int] | None:
    if text == "peak":
        return None
    if text == "all":
        return list(range(n_interval))
    try:
        chosen = [int(part) for part in text.split(",")]
    except ValueError:
        raise typer.BadParameter(f"{text!r} is neither `peak`, `all` nor positions such as 0,12,18") from None
    wrong = [str(p) for p in chosen if not 0 <= p < n_interval]
    if wrong:
        raise typer.BadParameter(f"there is no interval {', '.join(wrong)}; the scenario has 0 to {n_interval - 1}")
    return chosen
