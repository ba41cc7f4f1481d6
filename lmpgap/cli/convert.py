"""`convert`: an open-standard network file into a scenario folder."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from lmpgap.cli.shared import JsonOption, echo, echo_json


def convert(
    file: Annotated[Path, typer.Argument(metavar="FILE", help="CIM XML file, or a zip archive with such files.")],
    scenario: Annotated[
        Path, typer.Argument(metavar="SCENARIO", help="Scenario folder to make; it must not hold anything.")
    ],
    also: Annotated[
        list[Path] | None,
        typer.Option("--with", metavar="FILE", help="Another file of the same model (hypothesis, topology, state)."),
    ] = None,
    name: Annotated[str | None, typer.Option("--name", help="Name of the scenario.")] = None,
    json: JsonOption = False,
) -> None:
    """Make a scenario folder of a network in CIM XML (IEC 61970-301, -452, -456, -552).

    Offers have to be added: the standard has no prices.

    Example: lmpgap convert equipment.xml scenarios/mine --with hypothesis.xml --with topology.xml
    """
    from lmpgap.scenario.convert import convert as convert_files

    done = convert_files([file, *(also or [])], scenario, name=name)
    if json:
        echo_json({"scenario": str(done.folder), "rows": done.counts, "notes": list(done.notes)})
        return
    echo(", ".join(f"{count:,} {table}" for table, count in done.counts.items()))
    for note in done.notes:
        echo(f"  - {note}")
    echo(f"\nscenario folder: {done.folder}; next: add offers.csv, then lmpgap check {done.folder}")
