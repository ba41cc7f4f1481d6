"""Does an exhibit stand? Hashes, arithmetic, the page, and everything solved and settled again."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path
from typing import TYPE_CHECKING, Any

import pandas as pd
from jinja2 import TemplateError

from lmpgap import __version__
from lmpgap.errors import DataError, LmpgapError, MissingExtraError
from lmpgap.progress import Progress, silent
from lmpgap.settlement.exhibit.inputs import INPUTS
from lmpgap.settlement.exhibit.manifest import (
    MANIFEST,
    Finding,
    check_files,
    read_json,
    read_manifest,
    sha256,
)
from lmpgap.settlement.exhibit.page import claim_page, method_page
from lmpgap.settlement.exhibit.rows import (
    ROW_COLUMNS,
    SOLVE_COLUMNS,
    exhibit_rights,
    exhibit_rows,
    exhibit_solves,
    from_csv,
    settlement_rows,
)
from lmpgap.settlement.exhibit.statement import certificate_summary, recomputable
from lmpgap.settlement.exhibit.workbook import rows_of_workbook
from lmpgap.settlement.recompute import (
    Reprice,
    added_up,
    compare_rights,
    compare_rows,
    compare_solves,
    compare_tables,
    described,
    first_difference,
    settle_again,
    unusual_settings,
)
from lmpgap.settlement.result import Settlement
from lmpgap.settlement.rights import RIGHTS_COLUMNS
from lmpgap.settlement.settle import RunTables
from lmpgap.tolerances import DEFAULT_TOLERANCES

if TYPE_CHECKING:
    from lmpgap.scenario.scenario import Scenario

TASK = "verifying the exhibit"
_REQUIRED = ("statement.json", "rows.csv", "solves.csv", "claim.html", "method.md")


@dataclass(frozen=True, kw_only=True)
class Verification:
    """What checking an exhibit came to.

    Attributes
    ----------
    stands
        Every check was made and nothing disagrees.
    findings
        What disagrees: files first, then arithmetic and pages, then what was recomputed.
    checks
        What was checked, in words.
    notes
        What a reader should weigh without it being wrong: settings other than the defaults, another version.
    digest
        SHA-256 of the manifest: equal digests are equal exhibits.
    recomputed
        Totals by account and component as they come out of the inputs; empty when they could not be computed.
    """

    stands: bool
    findings: tuple[Finding, ...]
    checks: tuple[str, ...]
    notes: tuple[str, ...]
    digest: str
    recomputed: pd.DataFrame

    @property
    def sentence(self) -> str:
        """The outcome in one sentence."""
        if self.stands:
            return "The exhibit stands: every figure was recomputed from the inputs."
        count = len(self.findings)
        return f"The exhibit does not stand: {count} {'thing disagrees' if count == 1 else 'things disagree'}."


def verify_exhibit(
    folder: str | Path,
    scenario: str | Path | None = None,
    *,
    reprice: Reprice | None = None,
    price_tolerance: float = DEFAULT_TOLERANCES.price_residual,
    progress: Progress = silent,
) -> Verification:
    """Recompute an exhibit from its inputs and say whether it stands.

    Parameters
    ----------
    folder
        The exhibit.
    scenario
        Folder with the inputs, for an exhibit that was written without them, or to hold it against the originals; the
        inputs in the exhibit otherwise.
    reprice
        Solves a scenario into a run folder; `lmpgap.runs.price.price` by default.
    price_tolerance
        Difference of prices allowed between two machines [$/MWh]. Never taken from the exhibit.
    progress
        Told about the intervals that are solved again.

    Raises
    ------
    DataError
        When the folder is not an exhibit at all. Anything wrong inside one is a finding, not an exception.
    """
    path = Path(folder)
    listed = read_manifest(path)
    digest = sha256((path / MANIFEST).read_bytes())
    content, findings = check_files(path, listed)
    findings += [Finding(place=name, message="is not in the manifest") for name in _REQUIRED if name not in listed]
    checks = [f"hashes of {len(listed)} files"]
    notes: list[str] = []
    recomputed = pd.DataFrame()
    try:
        exhibit = _read(content)
    except DataError as error:
        findings.append(Finding(place="exhibit", message=described(error)))
        exhibit = None
    if exhibit is not None:
        try:
            findings += _check_inside(exhibit, content, checks, notes)
            inputs = _inputs(path, scenario, exhibit, content, findings)
            if inputs is not None:
                again, solves = settle_again(
                    inputs,
                    exhibit.statement,
                    exhibit.intervals,
                    reprice=reprice or _default_reprice(),
                    progress=progress,
                )
                recomputed = again.accounts
                findings += _compare(exhibit, again, solves, inputs, price_tolerance)
                checks.append(f"{len(exhibit.intervals)} intervals solved and settled again")
        except LmpgapError as error:
            findings.append(Finding(place="recomputation", message=described(error)))
        except (KeyError, TypeError, ValueError, AttributeError, IndexError, TemplateError) as error:
            # A statement that was tampered with may hold anything in any place.
            findings.append(
                Finding(
                    place="statement.json",
                    message=f"does not hold what an exhibit states ({type(error).__name__}: {error})",
                )
            )
    return Verification(
        stands=not findings,
        findings=tuple(dict.fromkeys(findings)),
        checks=tuple(checks),
        notes=tuple(notes),
        digest=digest,
        recomputed=recomputed,
    )


@dataclass(frozen=True, kw_only=True)
class _Content:
    """The tables of an exhibit."""

    statement: dict[str, Any]
    rows: pd.DataFrame
    solves: pd.DataFrame
    rights: pd.DataFrame

    @property
    def intervals(self) -> pd.DatetimeIndex:
        """Intervals that the figures rest on."""
        starts = [self.rows["interval_start"]]
        if not self.rights.empty:
            starts.append(self.rights["interval_start"])
        return pd.DatetimeIndex(pd.concat(starts).drop_duplicates().sort_values())


def _read(content: Mapping[str, bytes]) -> _Content:
    missing = [name for name in ("statement.json", "rows.csv", "solves.csv") if name not in content]
    if missing:
        raise DataError(f"nothing can be recomputed without {', '.join(missing)}")
    return _Content(
        statement=read_json(content["statement.json"], "statement.json"),
        rows=from_csv(content["rows.csv"], "rows.csv", (*ROW_COLUMNS, "hour_ending")),
        solves=from_csv(content["solves.csv"], "solves.csv", SOLVE_COLUMNS),
        rights=from_csv(content["rights.csv"], "rights.csv", RIGHTS_COLUMNS)
        if "rights.csv" in content
        else pd.DataFrame(columns=list(RIGHTS_COLUMNS)),
    )


def _check_inside(
    exhibit: _Content, content: Mapping[str, bytes], checks: list[str], notes: list[str]
) -> list[Finding]:
    """Check an exhibit against itself: the rows add up, and the pages say what the rows say."""
    statement = exhibit.statement
    findings = added_up(settlement_rows(exhibit.rows), exhibit.rights, statement)
    if statement["certificate"] != certificate_summary(exhibit.solves):
        findings.append(Finding(place="statement.json, certificate", message="does not summarise solves.csv"))
    datetime.fromisoformat(statement["written_at"])
    checks.append(f"arithmetic of {len(exhibit.rows):,} rows and {len(statement['totals'])} totals")
    written_by = str(statement["versions"]["lmpgap"])
    remark = ""
    if written_by != __version__:
        remark = f" (it names lmpgap {written_by} as its writer, this is {__version__}: verify it with that one)"
        notes.append(f"written by lmpgap {written_by}, checked by {__version__}")
    for name, page in (("claim.html", claim_page), ("method.md", method_page)):
        if name in content and content[name] != page(statement, exhibit.rows).encode("utf-8"):
            message = f"does not show what statement.json and rows.csv hold{remark}"
            findings.append(Finding(place=name, message=message))
    checks.append("claim.html and method.md made again from statement.json and rows.csv")
    if "claim.xlsx" in content:
        try:
            sheet = rows_of_workbook(content["claim.xlsx"])
            findings += _check_workbook(sheet, exhibit.rows)
            checks.append("claim.xlsx against rows.csv")
        except MissingExtraError:
            notes.append("claim.xlsx was not compared with rows.csv: that needs the `xlsx` extra")
        except DataError as error:
            findings.append(Finding(place="claim.xlsx", message=described(error)))
    notes += unusual_settings(statement)
    return findings


def _check_workbook(sheet: pd.DataFrame, rows: pd.DataFrame) -> list[Finding]:
    figures = ["mw", "posted", "reference", "amount", "amount_low", "amount_high"]
    lacking = [name for name in figures if name not in sheet.columns]
    if lacking or len(sheet) != len(rows):
        return [Finding(place="claim.xlsx", message="its rows are not those of rows.csv")]
    for name in figures:
        inside = pd.to_numeric(sheet[name], errors="coerce").to_numpy(float)
        outside = rows[name].to_numpy(float)
        wrong = ~((abs(inside - outside) <= 1e-9 * (1 + abs(outside))) | (pd.isna(inside) & pd.isna(outside)))
        if wrong.any():
            line = int(wrong.argmax())
            return [
                Finding(
                    place=f"claim.xlsx, row {line + 2}",
                    message=f"{name} is {inside[line]:,.6g}, rows.csv has {outside[line]:,.6g}",
                )
            ]
    return []


def _inputs(
    path: Path,
    scenario: str | Path | None,
    exhibit: _Content,
    content: Mapping[str, bytes],
    findings: list[Finding],
) -> Scenario | None:
    """Return the scenario to recompute from, telling where its files are not those the exhibit was made from."""
    from lmpgap.scenario.read import read_scenario

    statement = exhibit.statement
    recorded: dict[str, str] = statement["inputs"]
    reduced = {Path(name).stem for name in statement["filtered"]}
    inside = {name.removeprefix(f"{INPUTS}/") for name in content if name.startswith(f"{INPUTS}/")}
    if inside != {*statement["included"], *statement["filtered"]}:
        findings.append(Finding(place=INPUTS, message="does not hold the files that statement.json lists"))
    if scenario is None and any(
        name not in statement["included"] and Path(name).stem not in reduced for name in recorded
    ):
        findings.append(
            Finding(
                place=INPUTS,
                message="the exhibit was written without all inputs, so nothing was recomputed: give the folder of the "
                "scenario with --scenario",
            )
        )
        return None
    read = read_scenario(path / INPUTS if scenario is None else Path(scenario))
    for name in sorted({*recorded, *read.hashes}):
        if scenario is None and Path(name).stem in reduced:
            continue
        if recorded.get(name) != read.hashes.get(name):
            findings.append(
                Finding(
                    place=f"{INPUTS}/{name}" if scenario is None else f"{scenario}, {name}",
                    message="is not the file whose hash statement.json records",
                )
            )
    return read


def _compare(
    exhibit: _Content, again: Settlement, solves: pd.DataFrame, inputs: Scenario, price_tolerance: float
) -> list[Finding]:
    """Compare what an exhibit states with what came out of its inputs."""
    statement = exhibit.statement
    rows = exhibit_rows(again.rows, inputs.hour_ending(again.rows["interval_start"]))
    findings = compare_rows(settlement_rows(exhibit.rows), settlement_rows(rows), price_tolerance)
    if len(exhibit.rights) or len(again.rights):
        rights = exhibit_rights(again.rights) if len(again.rights) else exhibit.rights.head(0)
        findings += compare_rights(exhibit.rights, rights, price_tolerance)
    solved = exhibit_solves(solves, exhibit.intervals, again.formulations)
    findings += compare_solves(exhibit.solves, solved)
    mwh = (again.rows["mw"] * again.rows["hours"]).abs()
    size = mwh.groupby([again.rows["account"], again.rows["component"]]).sum()

    def slack(frame: pd.DataFrame) -> Any:
        keys = pd.MultiIndex.from_frame(frame[["account", "component"]])
        return 0.005 + price_tolerance * size.reindex(keys).fillna(0.0).to_numpy(float)

    stated = pd.DataFrame(statement["baselines"], columns=again.baselines.columns)
    findings += compare_tables(
        stated, again.baselines, ["account", "component", "against"], "statement.json, baselines", slack
    )
    # Sums of money per day and the like: their rows are compared one by one above, each with its own tolerance.
    allowed = 0.01 + price_tolerance * float(mwh.sum())
    for name, value in recomputable(again, inputs, statement["included"]).items():
        difference = first_difference(statement[name], value, 1e-9 if name != "deadlines" else allowed)
        if name not in ("holders", "left_out") and difference:
            findings.append(Finding(place=f"statement.json, {name}", message=difference))
    return findings


def _default_reprice() -> Reprice:
    # The run stands above the settlement in the house; only this check reaches up to it, and only when it is made.
    from lmpgap.runs.given_losses import FactorTable
    from lmpgap.runs.price import price

    def reprice(scenario: Scenario, run: Path, *, losses: Mapping[str, Any], **arguments: Any) -> RunTables:
        kind = losses.get("kind", "own")
        if kind == "frozen":
            raise DataError(
                f"the losses of dc-loss were frozen at the operating points of another run ({losses.get('source')}), "
                "which is not in the exhibit: settle a run without --factors-from to have it verified"
            )
        given = FactorTable(scenario) if kind == "table" else None
        return price(scenario, run, losses=given, **arguments)

    return reprice
