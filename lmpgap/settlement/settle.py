"""Settle: what the loss component cost each account too much, and how sure that is."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace
from datetime import date
from pathlib import Path
from typing import TYPE_CHECKING, Any, Protocol

import pandas as pd

from lmpgap.dispatch.names import FORMULATIONS
from lmpgap.divergence.posted import order_posted
from lmpgap.errors import DataError, Fault
from lmpgap.progress import Progress, silent
from lmpgap.settlement.aggregate import by_account, by_day, by_reason
from lmpgap.settlement.chunk import WITH_LOSSES, Chunk, Collected
from lmpgap.settlement.deadline import DeadlineRule, days_left
from lmpgap.settlement.nodes import NodeBasket
from lmpgap.settlement.options import POSTED, SettlementOptions
from lmpgap.settlement.positions import (
    OUTSIDE,
    gather_positions,
    unsettled_rows,
)
from lmpgap.settlement.posted import published_at
from lmpgap.settlement.posted_reference import ReferenceEvidence
from lmpgap.settlement.result import Settlement
from lmpgap.settlement.rights import by_holder

if TYPE_CHECKING:
    from lmpgap.scenario.scenario import Scenario

TASK = "settling intervals"
_CHUNK_PRICES = 500_000
"""Intervals are settled in chunks of about this many prices, so that memory does not grow with their number."""


ARRIVES_LATER = ("posted", "posted_constraints", "positions", "rights", "hubs")
"""Tables that never cause a solve."""


class RunTables(Protocol):
    """What a settlement needs of a run folder."""

    @property
    def manifest(self) -> dict[str, Any]:
        """What the run was made from and with."""
        ...

    def table(self, name: str) -> pd.DataFrame:
        """Return a table of the run."""
        ...

    def write(self, name: str, frame: pd.DataFrame) -> None:
        """Replace a derived table."""
        ...


_NO_POSTED = (
    "nothing to settle: none of the posted prices is of an interval and a node of the scenario; check the times and "
    "the node names in posted"
)


def has_posted(scenario: Scenario) -> bool:
    """Return whether any posted price is of an interval and a node of the scenario."""
    posted, hubs = scenario.tables["posted"], scenario.tables["hubs"]
    nodes = {*scenario.network.buses, *hubs["hub"]}
    return bool((posted["interval_start"].isin(scenario.interval_starts) & posted["node"].isin(nodes)).any())


def settle(
    run: RunTables,
    scenario: Scenario,
    claim: str = POSTED,
    against: str = "ac",
    *,
    options: SettlementOptions | None = None,
    today: date | None = None,
    accounts: Sequence[str] | None = None,
    write: bool = True,
    progress: Progress = silent,
) -> Settlement:
    """Return the money at stake in the loss component, per account, node and interval.

    Parameters
    ----------
    run
        Run folder with the prices of ``against`` (and of other formulations, as other operating points).
    scenario
        The scenario of the run: positions, rights, posted prices, hubs, rules.
    claim
        ``"posted"`` or a formulation of the run.
    against
        Formulation with losses.
    options
        Defaults of `SettlementOptions`, with the scenario's materiality threshold.
    today
        Day from which the days left to the deadline are counted; without it deadlines have dates only.
    accounts
        Settle only these accounts and holders.
    write
        Write the run table ``settlement``.
    progress
        Told about intervals.

    Raises
    ------
    DataError
        When there are no positions, no prices of one of the sides, an account is unknown, or the run was made from
        other inputs.
    """
    chosen = options or SettlementOptions(materiality=scenario.settings.settlement.materiality)
    _check_inputs(run, scenario)
    tables = scenario.tables
    positions, rights = _of_accounts(tables["positions"], tables["rights"], accounts)
    prices, solves = run.table("prices"), run.table("solves")
    held = tuple(name for name in FORMULATIONS if (prices["formulation"] == name).any())
    _check(claim, against, held, tables["posted"], positions)

    basket = NodeBasket.of(tables["buses"], tables["hubs"], scenario.network.buses)
    intervals = pd.DatetimeIndex(scenario.interval_starts)
    posted = order_posted(tables["posted"], basket.names, intervals).latest
    if claim == POSTED and not posted["known"].any():
        raise DataError(_NO_POSTED)
    gathered = gather_positions(positions)
    outside = gathered[~gathered["interval_start"].isin(intervals)]
    involved = intervals if not rights.empty else intervals[intervals.isin(gathered["interval_start"])]
    baselines = tuple(name for name in WITH_LOSSES if name in held and name != claim)
    collected = Collected()
    size = max(1, _CHUNK_PRICES // max(1, len(basket.names)))

    def chunk_at(first: int) -> Chunk:
        part = involved[first : first + size]
        return Chunk.of(scenario, basket, part, prices, solves, posted, chosen, held)

    if claim == POSTED:
        seen = {
            name: ReferenceEvidence(name=name, agreeing=0, compared=0) for name in dict.fromkeys([against, *baselines])
        }
        for first in range(0, len(involved), size):
            chunk = chunk_at(first)
            seen = {name: evidence + chunk.evidence(name) for name, evidence in seen.items()}
        # One formulation whose factors agree is enough: the operator clears with some model, seldom with all of them.
        collected.evidence = max(seen.values(), key=lambda evidence: evidence.share)
        if chosen.posted_reference == "auto":
            chosen = replace(chosen, posted_reference="scenario" if collected.evidence.on_scenario else "unknown")
    progress(TASK, 0, len(involved))
    for first in range(0, len(involved), size):
        chunk = chunk_at(first)
        collected.add(chunk, gathered, rights, claim, against, baselines, scenario.settings.hours)
        progress(TASK, min(first + size, len(involved)), len(involved))

    rows = pd.concat([*collected.rows, unsettled_rows(outside, OUTSIDE, scenario.settings.hours)], ignore_index=True)
    rows = rows.sort_values(["account", "interval_start", "node"], kind="stable", ignore_index=True)
    settled_rights = _joined(collected.rights)
    rule = _rule(scenario)
    accounts_table = by_account(rows, chosen.materiality)
    settlement = Settlement(
        claim=claim,
        against=against,
        options=chosen,
        currency=scenario.settings.currency,
        time_zone=scenario.settings.time_zone,
        hours=scenario.settings.hours,
        rows=rows,
        accounts=accounts_table,
        baselines=_baseline_table(collected.baselines, chosen),
        left_out=by_reason(rows),
        rights=settled_rights,
        holders=by_holder(settled_rights),
        reference=_joined(collected.reference),
        rule=rule,
        today=today,
        deadlines=_deadlines(rows, chosen, rule, today, scenario.settings.time_zone, posted),
        notes=_notes(collected, chosen, claim, against, held),
    )
    if write:
        run.write("settlement", settlement.table)
    return settlement


def _of_accounts(
    positions: pd.DataFrame, rights: pd.DataFrame, accounts: Sequence[str] | None
) -> tuple[pd.DataFrame, pd.DataFrame]:
    if accounts is None:
        return positions, rights
    known = set(positions["account"]) | set(rights["holder"])
    unknown = [name for name in accounts if name not in known]
    if unknown:
        allowed = ", ".join(sorted(map(str, known))[:20])
        raise DataError(
            "unknown account",
            [
                Fault(table="positions", column="account", message="no such account", value=name, allowed=allowed)
                for name in unknown
            ],
        )
    return positions[positions["account"].isin(accounts)], rights[rights["holder"].isin(accounts)]


def _check_inputs(run: RunTables, scenario: Scenario) -> None:
    """Refuse a run whose prices were computed from other inputs than the scenario has now."""
    recorded: Mapping[str, str] = run.manifest.get("scenario", {}).get("sha256", {})
    changed = [
        name
        for name in sorted({*recorded, *scenario.hashes})
        # The settings are kept with the run; what settles may arrive and change later.
        if Path(name).stem not in ("scenario", *ARRIVES_LATER) and recorded.get(name) != scenario.hashes.get(name)
    ]
    if recorded and changed:
        raise DataError(
            "the inputs changed after the run was made: run `lmpgap price` again, it solves only what they touch",
            [Fault(table=name, message="is not the file that was solved") for name in changed],
        )


def _check(claim: str, against: str, held: Sequence[str], posted: pd.DataFrame, positions: pd.DataFrame) -> None:
    if positions.empty:
        raise DataError(
            "nothing to settle: the scenario has no positions; add positions.csv with account, interval_start, node, mw"
        )
    if against not in WITH_LOSSES:
        raise DataError(
            f"{against!r} has no loss component to hold a claim against; choose one of {', '.join(WITH_LOSSES)}"
        )
    if claim == against:
        raise DataError(f"claim and reference are both {claim!r}: nothing can differ")
    if claim == POSTED and posted.empty:
        raise DataError(
            "the scenario has no posted prices: add posted.csv, or claim against a formulation of the run "
            f"({', '.join(name for name in held if name != against) or 'none'})"
        )
    missing = [name for name in (claim, against) if name != POSTED and name not in held]
    if missing:
        raise DataError(
            f"the run holds no prices of {', '.join(missing)} (it has {', '.join(held) or 'none'}): run "
            f"`lmpgap price` with --formulations {','.join(dict.fromkeys([*held, *missing]))} first"
        )


def _baseline_table(collected: Mapping[str, list[pd.DataFrame]], options: SettlementOptions) -> pd.DataFrame:
    parts = [
        by_account(pd.concat(rows, ignore_index=True), options.materiality).assign(against=name)
        for name, rows in collected.items()
    ]
    table = pd.concat(parts, ignore_index=True)
    columns = [
        "account",
        "component",
        "against",
        *[c for c in table.columns if c not in ("account", "component", "against")],
    ]
    return table[columns].sort_values(["account", "component"], kind="stable", ignore_index=True)


def _rule(scenario: Scenario) -> DeadlineRule | None:
    settings = scenario.settings.settlement
    if settings.deadline_days is None:
        return None
    return DeadlineRule(
        days=settings.deadline_days,
        counted=settings.counted,
        counted_from=settings.counted_from,
        label=settings.label,
        holidays=tuple(settings.holidays),
    )


def _deadlines(
    rows: pd.DataFrame,
    options: SettlementOptions,
    rule: DeadlineRule | None,
    today: date | None,
    time_zone: str,
    posted: pd.DataFrame,
) -> pd.DataFrame:
    columns = ["account", "operating_date", "amount", "counted_from", "deadline", "days_left"]
    if rule is None:
        return pd.DataFrame(columns=columns)
    starts = pd.DatetimeIndex(rows["interval_start"].drop_duplicates().sort_values())
    dates = days_left(
        rule,
        starts,
        time_zone=time_zone,
        today=today,
        published_at=published_at(posted) if not posted.empty else None,
    )
    days = by_day(rows[rows["component"] == options.basis], time_zone)
    days["operating_date"] = days["operating_date"].astype(dates["operating_date"].dtype)
    return days.merge(dates, on="operating_date", how="left")[columns]


def _notes(
    collected: Collected,
    options: SettlementOptions,
    claim: str,
    against: str,
    held: Sequence[str],
) -> tuple[str, ...]:
    notes = []
    if collected.evidence is not None:
        seen = collected.evidence
        taken = (
            "they are taken as published"
            if options.posted_reference == "scenario"
            else "both sides are moved to the scenario's reference before they are compared"
        )
        notes.append(
            f"In {seen.agreeing} of {seen.compared} intervals the posted components stand on the scenario's reference "
            f"(delivery factor of the median node against {seen.name}, within rounding): {taken}."
        )
    for name, count in collected.without_alternative.items():
        if count:
            notes.append(
                f"In {count} intervals {name} has no usable solve, so the choice of operating point adds nothing to "
                "the interval of the amounts there."
            )
    if not any(name in held for name in WITH_LOSSES if name not in (claim, against)):
        notes.append(
            f"The run holds no other formulation with losses than {against}: the choice of operating point is not "
            "part of the intervals."
        )
    reference = _joined(collected.reference)
    moved = reference[reference["reference"] != "scenario"]
    if len(moved):
        notes.append(
            f"In {len(moved)} of {len(reference)} intervals not every node of the scenario's reference is priced on "
            f"both sides (coverage down to {moved['coverage'].min():.0%}); the components are compared on the nodes "
            "that are."
        )
    if against == "soc":
        notes.append("The reference is a relaxation: its price errors are part of the intervals.")
    if against == "ac":
        notes.append("The AC dispatch is a local optimum (a KKT point), the best that is known here.")
    return tuple(notes)


def _joined(parts: Sequence[pd.DataFrame]) -> pd.DataFrame:
    if not parts:
        return pd.DataFrame()
    return parts[0] if len(parts) == 1 else pd.concat(parts, ignore_index=True)
