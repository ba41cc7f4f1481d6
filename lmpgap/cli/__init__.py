"""The command line: one thin file per command group, wired together here.

Each command parses, makes one library call and prints. Exit status: 0 done, 1 a data or solve error told in words,
2 wrong usage, 130 stopped from the keyboard.
"""

from __future__ import annotations

import sys

import typer

from lmpgap import __version__
from lmpgap.errors import LmpgapError

STOPPED = 130
"""Exit status of a program that was stopped from the keyboard; typer ends with it on its own, without a word."""

app = typer.Typer(
    name="lmpgap",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    help=(
        "Where and why nodal prices of a linear dispatch diverge from AC ones and from the posted ones, "
        "and what that is worth.\n\n"
        "Start with: lmpgap check SCENARIO, then lmpgap weekly SCENARIO.\n\n"
        "Not settlement-grade: the tariff governs; filings need counsel or a licensed engineer."
    ),
)


def _version(wanted: bool) -> None:
    if wanted:
        typer.echo(f"lmpgap {__version__}")
        raise typer.Exit


@app.callback()
def _root(
    version: bool = typer.Option(False, "--version", callback=_version, is_eager=True, help="Print the version."),
) -> None:
    """Take the options that stand before a command."""


def main() -> None:
    """Run the command line; an error that lmpgap raised on purpose is told in words, without a traceback."""
    from lmpgap.cli.commands import register

    register(app)
    try:
        app()
    except LmpgapError as error:
        typer.echo(f"lmpgap: {error}", err=True)
        sys.exit(1)
    except KeyboardInterrupt:
        _stopped()
    except SystemExit as ended:
        if ended.code != STOPPED:
            raise
        _stopped()
    except MemoryError:
        typer.echo("lmpgap: out of memory; try fewer --workers or a smaller network", err=True)
        sys.exit(1)
    except OSError as error:
        typer.echo(f"lmpgap: {error.strerror or error}: {error.filename or ''}".rstrip(": "), err=True)
        sys.exit(1)


def _stopped() -> None:
    typer.echo("lmpgap: stopped; what was stored is kept, run the same command again to go on", err=True)
    sys.exit(STOPPED)
