"""`check`: every fault in the inputs, or what would be solved."""

from __future__ import annotations

import sys
from dataclasses import asdict
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from lmpgap.cli.shared import JsonOption, echo, echo_json
from lmpgap.errors import ScenarioError, fault_lines

if TYPE_CHECKING:
    from lmpgap.errors import Fault


def check(
    scenario: Annotated[
        Path | None,
        typer.Argument(metavar="SCENARIO", help="Scenario folder: scenario.toml and its tables."),
    ] = None,
    tables: Annotated[
        bool, typer.Option("--tables", help="Print what every table (of scenarios and runs) and setting means.")
    ] = False,
    json: JsonOption = False,
) -> None:
    """Tell every fault in a scenario folder, or what would be solved.

    Exit status 1 when there are faults; warnings alone leave it at 0.

    Example: lmpgap check scenarios/demo
    """
    if tables:
        _print_tables(json)
        return
    if scenario is None:
        raise typer.BadParameter("name a scenario folder, or ask for --tables", param_hint="SCENARIO")
    from lmpgap.scenario.overview import overview, overview_lines
    from lmpgap.scenario.read import read_scenario

    try:
        found = read_scenario(scenario)
    except ScenarioError as error:
        if not json:
            raise
        echo_json({"usable": False, "summary": error.summary, "faults": [_plain(fault) for fault in error.faults]})
        sys.exit(1)
    figures = overview(found)
    if json:
        echo_json({"usable": True, **figures, "warnings": [_plain(warning) for warning in found.warnings]})
        return
    for line in overview_lines(figures):
        echo(line)
    if found.warnings:
        echo(f"\n{len(found.warnings):,} {'warning' if len(found.warnings) == 1 else 'warnings'}:")
        for line in fault_lines(found.warnings):
            echo(f"  - {line}")
    echo(f"\nno faults; next: lmpgap weekly {scenario}")


def _plain(fault: Fault) -> dict[str, Any]:
    return {name: value for name, value in asdict(fault).items() if value not in (None, "")}


def _print_tables(json: bool) -> None:
    from lmpgap.scenario.settings_file import SECTIONS, settings_as_markdown
    from lmpgap.scenario.tables import TABLES, tables_as_markdown

    if json:
        echo_json(
            {
                "settings": {
                    section: {name: key.meaning for name, key in keys.items()} for section, keys in SECTIONS.items()
                },
                "tables": {name: asdict(table) for name, table in TABLES.items()},
            }
        )
        return
    from lmpgap.runs.schema import schema_as_text

    echo(tables_as_markdown())
    echo(settings_as_markdown())
    echo("## Tables of a run folder\n")
    echo(schema_as_text())
