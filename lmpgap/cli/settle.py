"""`settle`: what the loss component cost each account too much, and the exhibit that proves it."""

from __future__ import annotations

from datetime import date, datetime
from pathlib import Path
from typing import Annotated

import typer

from lmpgap.cli.shared import JsonOption, RunArgument, echo, echo_json, echo_table, records, terminal_progress

_BASES = ("delivery-factor", "loss")
_COMBINATIONS = ("worst-case", "root-sum-square")
_POSTED_REFERENCES = ("auto", "scenario", "unknown")


def settle(
    run: RunArgument,
    claim: Annotated[str, typer.Option("--claim", help="Prices that are claimed wrong: posted, or a formulation.")] = (
        "posted"
    ),
    against: Annotated[
        str, typer.Option("--against", help="Formulation with losses that they are held against: ac, dc-loss or soc.")
    ] = "ac",
    out: Annotated[
        Path | None, typer.Option("--out", metavar="FOLDER", help="Folder of the exhibit; RUN-exhibit by default.")
    ] = None,
    scenario: Annotated[
        Path | None,
        typer.Option("--scenario", metavar="SCENARIO", help="Scenario folder, if it moved since the run."),
    ] = None,
    account: Annotated[
        list[str] | None,
        typer.Option("--account", help="Settle only this account; repeat for more. Others stay out of the exhibit."),
    ] = None,
    basis: Annotated[
        str,
        typer.Option(
            "--basis",
            help="What is claimed: delivery-factor (posted energy price, own delivery factors: needs no offers) or "
            "loss (re-solved loss component).",
        ),
    ] = "delivery-factor",
    materiality: Annotated[
        float | None,
        typer.Option("--materiality", min=0.0, help="Threshold in money; that of scenario.toml by default."),
    ] = None,
    combine: Annotated[
        str, typer.Option("--combine", help="Sources of uncertainty of a row: worst-case or root-sum-square.")
    ] = "worst-case",
    posted_reference: Annotated[
        str,
        typer.Option(
            "--posted-reference",
            help="Reference of the posted components: auto, scenario (as published) or unknown (moved first).",
        ),
    ] = "auto",
    today: Annotated[
        datetime | None,
        typer.Option("--today", formats=["%Y-%m-%d"], help="Day the days left are counted from; today by default."),
    ] = None,
    xlsx: Annotated[bool, typer.Option("--xlsx", help="Write claim.xlsx too (extra `xlsx`).")] = False,
    without_network: Annotated[
        bool,
        typer.Option(
            "--without-network",
            help="Leave network, offers and loads out of the exhibit; `verify` then needs --scenario.",
        ),
    ] = False,
    no_exhibit: Annotated[bool, typer.Option("--no-exhibit", help="Only the figures, no folder.")] = False,
    json: JsonOption = False,
) -> None:
    """Put money on the loss component of posted prices, and write the exhibit.

    Withdrawal pays, injection is paid; a positive amount is to the account's disadvantage.

    Example: lmpgap settle runs/demo --claim posted --against ac --out exhibits/week-11
    """
    for name, value, allowed in (
        ("--basis", basis, _BASES),
        ("--combine", combine, _COMBINATIONS),
        ("--posted-reference", posted_reference, _POSTED_REFERENCES),
    ):
        if value not in allowed:
            raise typer.BadParameter(f"{value!r}; choose from {', '.join(allowed)}", param_hint=name)
    from lmpgap.runs.folder import RunFolder
    from lmpgap.scenario.read import read_scenario
    from lmpgap.settlement.exhibit.write import write_exhibit
    from lmpgap.settlement.options import SettlementOptions
    from lmpgap.settlement.settle import settle as settle_run

    folder = RunFolder(run)
    read = read_scenario(scenario or folder.scenario_folder)
    options = SettlementOptions.from_dict(
        {
            **SettlementOptions().as_dict(),
            "basis": basis,
            "combine": combine,
            "posted_reference": posted_reference,
            "materiality": read.settings.settlement.materiality if materiality is None else materiality,
        }
    )
    with folder.writing(), terminal_progress() as progress:
        settlement = settle_run(
            folder,
            read,
            claim,
            against,
            options=options,
            today=today.date() if today else date.today(),
            accounts=account or None,
            progress=progress,
        )
    exhibit = None
    if not no_exhibit:
        exhibit = write_exhibit(
            settlement,
            folder,
            read,
            out or run.resolve().with_name(f"{run.resolve().name}-exhibit"),
            accounts=account or None,
            with_network=not without_network,
            xlsx=xlsx,
        )
    if json:
        echo_json(
            {
                "claim": claim,
                "against": against,
                "options": settlement.options.as_dict(),
                "claims": records(settlement.claims),
                "totals": records(settlement.accounts),
                "baselines": records(settlement.baselines),
                "left_out": records(settlement.left_out),
                "holders": records(settlement.holders),
                "deadlines": records(settlement.deadlines),
                "notes": list(settlement.notes),
                "exhibit": None if exhibit is None else {"folder": exhibit.folder, "sha256": exhibit.digest},
            }
        )
        return
    echo(f"{claim} held against {against}, {settlement.currency}; positive is to the account's disadvantage")
    echo_table(settlement.claims.drop(columns=["component", "mwh"]))
    if not settlement.holders.empty:
        echo("\nrights: congestion only, losses are left open")
        echo_table(settlement.holders)
    if not settlement.deadlines.empty:
        echo(f"\ndeadlines: {settlement.rule.sentence if settlement.rule else ''}")
        echo_table(settlement.deadlines)
    for note in settlement.notes:
        echo(f"note: {note}")
    if exhibit is not None:
        echo(f"\nexhibit: {exhibit.folder}\nSHA-256 of its manifest: {exhibit.digest}")
        if not without_network:
            echo("It holds network, offers and loads, which can be confidential: --without-network leaves them out.")
