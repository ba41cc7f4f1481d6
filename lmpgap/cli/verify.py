"""`verify`: recompute an exhibit and say whether it stands."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from lmpgap.cli.shared import JsonOption, echo, echo_json, records, terminal_progress


def verify(
    exhibit: Annotated[Path, typer.Argument(metavar="EXHIBIT", help="Folder that `settle` wrote.")],
    scenario: Annotated[
        Path | None,
        typer.Option(
            "--scenario",
            metavar="SCENARIO",
            help="Recompute from this folder instead of the exhibit's own inputs.",
        ),
    ] = None,
    json: JsonOption = False,
) -> None:
    """Recompute an exhibit from its inputs and say whether it stands; exit status 1 when it does not.

    Compares every hash, adds up every row, makes the pages again, and solves and settles every interval again.

    Example: lmpgap verify exhibits/week-11
    """
    from lmpgap.settlement.verify import verify_exhibit

    with terminal_progress() as progress:
        result = verify_exhibit(exhibit, scenario, progress=progress)
    if json:
        echo_json(
            {
                "stands": result.stands,
                "sha256": result.digest,
                "findings": [{"place": finding.place, "message": finding.message} for finding in result.findings],
                "checks": list(result.checks),
                "notes": list(result.notes),
                "recomputed": records(result.recomputed),
            }
        )
    else:
        echo(result.sentence)
        for finding in result.findings:
            echo(f"  - {finding}")
        echo(f"checked: {'; '.join(result.checks)}")
        for note in result.notes:
            echo(f"note: {note}")
        echo(f"SHA-256 of its manifest: {result.digest}")
    if not result.stands:
        raise typer.Exit(1)
