"""The main job: from a scenario folder to the weekly price-divergence report.

Each step is a function of the run folder and leaves its table there; `weekly_report` chains them. Steps that have
nothing to work on (no posted prices, no positions) are left out, and the report says so.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import date
from itertools import pairwise
from pathlib import Path
from tempfile import TemporaryFile
from typing import Any

import numpy as np
import pandas as pd

from lmpgap.dispatch.names import FORMULATIONS
from lmpgap.divergence.check_posted import PostedCheck, check_posted
from lmpgap.divergence.compare import Comparison, compare_run
from lmpgap.divergence.labels import IntervalLabels
from lmpgap.divergence.posted import POSTED
from lmpgap.divergence.price_set import PriceSet
from lmpgap.divergence.sentences import Wording
from lmpgap.divergence.week import weekly_sentences
from lmpgap.errors import DataError
from lmpgap.progress import Progress, silent
from lmpgap.report.index import update_index
from lmpgap.report.render import write_weekly_report
from lmpgap.report.view import build_view
from lmpgap.runs.areas import write_areas
from lmpgap.runs.folder import RunFolder
from lmpgap.runs.price import price
from lmpgap.runs.schema import RUN_TABLES
from lmpgap.runs.sweep import sweep
from lmpgap.scenario.read import read_scenario
from lmpgap.scenario.scenario import Scenario
from lmpgap.settlement.result import Settlement
from lmpgap.settlement.settle import has_posted, settle

TASK = "weekly report"
_STEPS = ("checking posted prices", "comparing", "settling", "sweeping load", "writing")
SWEEP_FACTORS = np.linspace(0.5, 1.1, 7)
"""Load factors of the sweep in the report, at the hour with the highest load."""


@dataclass(frozen=True, kw_only=True)
class Weekly:
    """What a weekly run leaves behind.

    Attributes
    ----------
    run
        Run folder with every table.
    report
        The HTML file.
    index
        Index page over the weeks written so far, next to the report.
    sentences
        What happened this week, in five sentences with figures.
    """

    run: RunFolder
    report: Path
    index: Path
    sentences: tuple[str, ...]


def weekly_report(
    scenario: Scenario | str | Path,
    run: str | Path,
    out: str | Path,
    *,
    workers: int = 1,
    cluster: str | None = None,
    today: date | None = None,
    progress: Progress = silent,
    **settings: Any,
) -> Weekly:
    """Solve what is missing, compare, check posted prices, settle, and write the report.

    Parameters
    ----------
    scenario
        Scenario or its folder.
    run
        Run folder; finished solves in it are used again.
    out
        HTML file to write; the index of weeks is kept in its folder.
    today
        Day the days left to a dispute deadline are counted from.
    settings
        As for `lmpgap.runs.price.price`.

    Raises
    ------
    LmpgapError
        Data or solve errors, in words. An hour without a solution is not an error: the report lists it.
    """
    if not isinstance(scenario, Scenario):
        scenario = read_scenario(scenario)
    _check_writable(Path(out))
    folder = price(scenario, run, workers=workers, cluster=cluster, progress=progress, **settings)
    with folder.writing():
        progress(TASK, 0, len(_STEPS))
        check = check_run(scenario, folder)
        progress(TASK, 1, len(_STEPS))
        comparison = compare_all(scenario, folder, extra=() if check.prices is None else (check.prices,))
        progress(TASK, 2, len(_STEPS))
        settlement = settle_run(scenario, folder, today)
        progress(TASK, 3, len(_STEPS))
        write_areas(scenario, folder)
        folder.write("sweep", sweep(scenario, SWEEP_FACTORS, formulations=tuple(formulations_of(folder))))
        progress(TASK, 4, len(_STEPS))
    tables = {name: folder.table(name) for name in RUN_TABLES}
    sentences = tuple(
        weekly_sentences(
            prices=tables["prices"],
            solves=tables["solves"],
            differences=comparison.differences,
            drivers=comparison.drivers,
            findings=check.findings,
            claims=None if settlement is None else settlement.claims,
            other_claims=None if settlement is None else _other_claims(settlement),
            currency=currency_sign(scenario),
            wording=wording(scenario),
            n_posted=len(scenario.tables["posted"]),
            n_position=len(scenario.tables["positions"]),
        )
    )
    view = build_view(tables, scenario, folder.manifest, sentences, posted=check.prices, settlement=settlement)
    report = write_weekly_report(view, out)
    index = update_index(report.parent, view, report)
    progress(TASK, len(_STEPS), len(_STEPS))
    return Weekly(run=folder, report=report, index=index, sentences=sentences)


def _check_writable(out: Path) -> None:
    """Tell before hours of solving, not after, that the report cannot be written.

    Raises
    ------
    DataError
        When the path is a folder, or its folder cannot be made or written.
    """
    if out.is_dir():
        raise DataError(f"{out} is a folder; name the HTML file to write")
    try:
        out.parent.mkdir(parents=True, exist_ok=True)
        with TemporaryFile(dir=out.parent):
            pass
    except OSError as error:
        raise DataError(f"the report cannot be written to {out}: {error.strerror or error}") from error


def check_run(scenario: Scenario, folder: RunFolder) -> PostedCheck:
    """Check the posted prices against the run and store the findings."""
    check = check_posted(scenario, {"operating_point": folder.table("operating_point")})
    folder.write("findings", check.findings)
    return check


def compare_all(scenario: Scenario, folder: RunFolder, extra: Sequence[PriceSet] = ()) -> Comparison:
    """Compare every step of the ladder, every formulation with AC, and posted prices with all of them."""
    return compare_run(
        folder,
        comparison_pairs(formulations_of(folder), posted=bool(extra)),
        extra=extra,
        hubs=scenario.tables["hubs"],
        reference_weights=reference_weights(scenario) if extra else None,
    )


def compare_one(
    folder: RunFolder, base: str, against: str, scenario: Scenario | str | Path | None = None
) -> Comparison:
    """Compare one pair of price sets of a run and store it beside the pairs that are there.

    Parameters
    ----------
    base, against
        A formulation of the run, or ``"posted"``.
    scenario
        The run's scenario or its folder; read from where the run found it by default.

    Raises
    ------
    DataError
        When a price set does not exist or both are the same.
    """
    if base == against:
        raise DataError(f"{base} is compared with itself; choose two price sets")
    held = formulations_of(folder)
    wrong = [name for name in (base, against) if name not in (*held, POSTED)]
    if wrong:
        raise DataError(f"the run has no prices of {' and '.join(wrong)}; it holds {', '.join(held)}")
    extra: tuple[PriceSet, ...] = ()
    read: Scenario | None = None
    if POSTED in (base, against):
        read = scenario if isinstance(scenario, Scenario) else read_scenario(scenario or folder.scenario_folder)
        posted = check_posted(read, {"operating_point": folder.table("operating_point")}).prices
        if posted is None:
            raise DataError(f"the scenario in {read.folder} has no posted prices of known nodes")
        extra = (posted,)
    with folder.writing():
        others = {name: folder.table(name) for name in ("differences", "drivers")}
        made = compare_run(
            folder,
            [(base, against)],
            extra=extra,
            hubs=None if read is None else read.tables["hubs"],
            reference_weights=None if read is None else reference_weights(read),
        )
        for name, own in (("differences", made.differences), ("drivers", made.drivers)):
            old = others[name]
            kept = old[(old["base"] != base) | (old["against"] != against)]
            folder.write(name, pd.concat([kept, own], ignore_index=True) if len(kept) else own)
    return made


def comparison_pairs(formulations: Sequence[str], *, posted: bool) -> list[tuple[str, str]]:
    """Return the pairs worth explaining, each once: steps of the ladder, then everything against the last of it."""
    ladder = [name for name in FORMULATIONS if name in formulations]
    pairs = [*pairwise(ladder), *((name, ladder[-1]) for name in ladder[:-1])]
    if posted:
        pairs += [(POSTED, name) for name in ladder]
    return list(dict.fromkeys(pairs))


def formulations_of(folder: RunFolder) -> list[str]:
    """Return the formulations with prices in a run.

    Raises
    ------
    DataError
        When there is no price at all.
    """
    found = set(folder.table("prices", columns=["formulation"])["formulation"])
    if not found:
        reasons = folder.table("solves")["reasons"].value_counts()
        why = f": {reasons.index[0]}" if len(reasons) else ""
        raise DataError(f"no interval of {folder.path} has a solution{why}")
    return [name for name in FORMULATIONS if name in found]


def settle_run(scenario: Scenario, folder: RunFolder, today: date | None = None) -> Settlement | None:
    """Settle the posted prices against the best formulation with losses; ``None`` where there is nothing to settle."""
    formulations = formulations_of(folder)
    against = next((name for name in ("ac", "dc-loss", "soc") if name in formulations), None)
    nothing = not has_posted(scenario) or scenario.tables["positions"].empty or against is None
    if nothing or against is None:
        folder.write("settlement", RUN_TABLES["settlement"].empty())
        return None
    return settle(folder, scenario, POSTED, against, today=today)


def _other_claims(settlement: Settlement) -> dict[str, pd.DataFrame]:
    """Return the claims held against the linear dispatch with losses, which is what a market clears."""
    own = settlement.baselines[settlement.baselines["component"] == settlement.options.basis]
    others = {name: own[own["against"] == name] for name in ("dc-loss",) if name != settlement.against}
    return {name: frame for name, frame in others.items() if len(frame)}


def reference_weights(scenario: Scenario) -> pd.DataFrame:
    """Return the reference weights, one row per interval start and one column per bus [-]."""
    return pd.DataFrame(
        [scenario.reference_weights(position) for position in range(scenario.n_interval)],
        index=scenario.interval_starts,
        columns=list(scenario.network.buses),
    )


def wording(scenario: Scenario) -> Wording:
    """Return how intervals, buses and money are called in sentences about this scenario."""
    settings = scenario.settings
    buses = scenario.tables["buses"]
    names = dict(zip(buses["bus"], buses["name"], strict=True)) if "name" in buses else {}
    return Wording(
        labels=IntervalLabels.of(scenario.interval_starts, settings.time_zone, settings.interval_minutes),
        names={bus: name for bus, name in names.items() if isinstance(name, str) and name},
        unit=f"{currency_sign(scenario)}/MWh",
    )


def currency_sign(scenario: Scenario) -> str:
    """Return how amounts of the scenario's currency are marked in sentences."""
    return "$" if scenario.settings.currency == "USD" else scenario.settings.currency
