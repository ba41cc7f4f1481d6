"""The commands, in the order in which one uses them."""

from __future__ import annotations

import typer

from lmpgap.cli.areas import areas
from lmpgap.cli.check import check
from lmpgap.cli.convert import convert
from lmpgap.cli.price import compare, price
from lmpgap.cli.settle import settle
from lmpgap.cli.sweep import ageing, restate, sweep
from lmpgap.cli.verify import verify
from lmpgap.cli.weekly import weekly

COMMANDS = (check, price, compare, settle, weekly, areas, sweep, ageing, restate, verify, convert)


def register(app: typer.Typer) -> None:
    """Add every command to the application; options and help come from the functions' signatures and docstrings."""
    for command in COMMANDS:
        app.command(no_args_is_help=True)(command)
