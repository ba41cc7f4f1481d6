"""From the tables of a run to the view model of the weekly report."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import pandas as pd

from lmpgap.divergence.price_set import PriceSet
from lmpgap.errors import DataError, Fault
from lmpgap.prices.certificate import USABLE_VERDICTS
from lmpgap.report.text import number, percent
from lmpgap.report.view.columns import checked_tables
from lmpgap.report.view.constraints import constraints_view
from lmpgap.report.view.cube import POSTED, PriceCube, make_cube
from lmpgap.report.view.drivers import driver_blocks, room_for_drivers, why_table
from lmpgap.report.view.hours import Hours, make_hours
from lmpgap.report.view.inputs import ReportScenario
from lmpgap.report.view.losses import audit_table, factors_view, hub_view, losses_view, sweep_view
from lmpgap.report.view.model import AccountTotal, PairView, Table, Tile, TrustView, WeeklyView
from lmpgap.report.view.nodes import Nodes, make_hubs, make_nodes
from lmpgap.report.view.pairs import (
    inside_cells,
    ladder_keys,
    pair_keys,
    pair_view,
    tracking_table,
    when_table,
    where_table,
)
from lmpgap.report.view.posted import latest_posted, posted_matrices
from lmpgap.report.view.prose import CAUTIONS, conventions
from lmpgap.report.view.stakes import (
    account_totals,
    deadlines_table,
    exposure_table,
    findings_table,
    rights_table,
    settlement_table,
    stakes_table,
)
from lmpgap.report.view.trust import trust_view
from lmpgap.report.view.zones import zone_table
from lmpgap.settlement.result import Settlement

_ELSEWHERE = ("scenario", "inputs", "hashes", "sha256")
"""Parts of a manifest that other sections show already."""


def build_view(
    tables: Mapping[str, pd.DataFrame],
    scenario: ReportScenario,
    manifest: Mapping[str, Any],
    sentences: Sequence[str],
    posted: PriceSet | None = None,
    settlement: Settlement | None = None,
) -> WeeklyView:
    """Return everything the weekly report shows.

    Parameters
    ----------
    tables
        Run tables by name; missing or empty ones make their section say that there is nothing to report.
        `lmpgap.report.view.columns.EXPECTED` lists them.
    scenario
        The scenario that was solved.
    manifest
        The run's manifest: versions and settings are shown as they stand there.
    sentences
        What happened this week, in words with figures.
    posted
        Posted prices as the checks left them (signs put right); without it the scenario's own table is taken.
    settlement
        The settled claims, with deadlines and rights; without it the run table is summed.

    Raises
    ------
    DataError
        There are no prices or no sentences, or a table lacks columns.
    """
    if not any(sentence.strip() for sentence in sentences):
        raise DataError(
            "The report has no summary.",
            [Fault(table="sentences", message="no sentence was given", allowed="at least one sentence")],
        )
    checked = checked_tables(tables)
    settings = scenario.settings
    currency = settings.currency
    starts = pd.DatetimeIndex(pd.to_datetime(checked["prices"]["interval_start"], utc=True))
    hours = make_hours(
        starts.union(pd.DatetimeIndex(scenario.interval_starts)), settings.time_zone, settings.interval_minutes
    )
    nodes = make_nodes(scenario, checked["operating_point"])
    cube = make_cube(checked["prices"], posted_matrices(scenario, posted, nodes, hours), nodes, hours)
    blocks = driver_blocks(checked["drivers"], nodes, hours, room_for_drivers(cube))
    inside = inside_cells(checked["differences"], nodes, hours)
    views = {
        key: pair_view(key, cube, inside, blocks)
        for key in dict.fromkeys((*pair_keys(cube, checked["differences"]), *ladder_keys(cube)))
    }
    main = next(iter(views.values()))
    accounts = account_totals(checked["settlement"], settlement)
    trust = trust_view(checked["solves"], checked["prices"], cube, hours)
    exposure = exposure_table(cube, checked["operating_point"], nodes, hours, currency, settings.hours)
    return WeeklyView(
        title=settings.name,
        currency=currency,
        time_zone=settings.time_zone,
        sentences=tuple(sentence.strip() for sentence in sentences if sentence.strip()),
        tiles=_tiles(main, nodes, hours, cube, trust, accounts, exposure, currency),
        nodes=nodes,
        hours=hours,
        cube=cube,
        hubs=hub_view(cube, make_hubs(scenario, nodes), latest_posted(scenario)),
        pairs=tuple(views.values()),
        main=main,
        ladder=tuple(views[key] for key in ladder_keys(cube)),
        tracking=tracking_table(cube, nodes.load_mw, trust, currency),
        inside=inside,
        drivers=tuple(blocks.values()),
        stakes=stakes_table(accounts, currency),
        exposure=exposure,
        accounts=accounts,
        where=where_table(main, cube, nodes, hours, currency),
        when=when_table(main, cube, nodes, hours, currency),
        why=why_table(blocks.get((main.base, main.against)), main, currency),
        constraints=constraints_view(checked["constraints"], cube, hours, currency),
        losses=losses_view(checked["solves"], checked["money"], cube, hours, currency, settings.hours),
        factors=factors_view(cube, checked["findings"], nodes, hours),
        zones=zone_table(checked["drift"], main.against, currency),
        audit=audit_table(checked["audit"], hours),
        findings=findings_table(checked["findings"], hours),
        settlement=settlement_table(checked["settlement"], currency),
        deadlines=deadlines_table(settlement, currency),
        rights=rights_table(settlement, currency),
        settlement_notes=() if settlement is None else settlement.notes,
        sweep=sweep_view(checked["sweep"], currency),
        trust=trust,
        conventions=conventions(settings),
        cautions=(*CAUTIONS, *(str(warning) for warning in scenario.warnings)),
        inputs=_inputs(scenario),
        produced_by=_produced_by(manifest),
    )


def _tiles(
    main: PairView,
    nodes: Nodes,
    hours: Hours,
    cube: PriceCube,
    trust: TrustView,
    accounts: tuple[AccountTotal, ...],
    exposure: Table,
    currency: str,
) -> tuple[Tile, ...]:
    tiles = []
    if main.counted and main.base != main.against:
        tiles.append(
            Tile(
                label=f"Largest gap, {main.against} less {main.base}",
                figure=number(main.largest, signed=True),
                note=f"{currency}/MWh at {nodes.name[main.worst_bus]}, {hours.label[main.worst_hour]}",
            )
        )
        tiles.append(
            Tile(
                label="Typical gap",
                figure=number(main.mean_absolute),
                note=f"{currency}/MWh on average, {number(main.typical_95)} at the 95th percentile",
            )
        )
    if accounts:
        total = sum(abs(account.amount) for account in accounts)
        sure = sum(account.low > 0 or account.high < 0 for account in accounts)
        tiles.append(
            Tile(
                label="Loss component in dispute",
                figure=number(total, 0),
                note=f"{currency} over {len(accounts)} accounts, {sure} with an interval clear of zero",
            )
        )
    elif exposure.rows:
        row = exposure.rows[0]
        tiles.append(
            Tile(label=f"Load pays more under {row[0]}", figure=row[2] or row[1], note=f"{currency} over the week")
        )
    solved = sum(int((code >= 0).sum()) for code in trust.code.values())
    usable = sum(
        int((code == position).sum())
        for code in trust.code.values()
        for position, word in enumerate(trust.words)
        if word in USABLE_VERDICTS
    )
    tiles.append(
        Tile(
            label="Solves with a usable verdict",
            figure=percent(usable / solved) if solved else "none",
            note=f"{usable:,} of {solved:,}; {', '.join(cube.formulations)}"
            + (", posted" if POSTED in cube.sets else ""),
        )
    )
    return tuple(tiles)


def _inputs(scenario: ReportScenario) -> Table:
    rows = tuple((name, digest) for name, digest in sorted(scenario.hashes.items()))
    return Table(
        caption="Inputs and their SHA-256",
        columns=("File", "SHA-256"),
        numeric=(False, False),
        rows=rows,
        note="A file with another hash is another input; figures of this report belong to these.",
    )


def _produced_by(manifest: Mapping[str, Any]) -> tuple[tuple[str, str], ...]:
    """Return versions and settings of the run as flat text, in the manifest's order.

    The scenario's own settings and the input hashes stand in sections of their own; folders belong to one machine.
    """
    lines: list[tuple[str, str]] = []

    def walk(words: tuple[str, ...], value: Any) -> None:
        if isinstance(value, Mapping):
            for key, inner in value.items():
                if key not in _ELSEWHERE:
                    walk((*words, str(key)), inner)
            return
        text = ", ".join(str(item) for item in value) if isinstance(value, (list, tuple)) else str(value)
        if text:
            lines.append((" ".join(word.replace("_", " ") for word in words if word != "settings"), text))

    walk((), manifest)
    return tuple(lines)
