"""Writing an exhibit: all of it or nothing."""

from __future__ import annotations

import os
import shutil
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING
from uuid import uuid4

import pandas as pd

from lmpgap.errors import DataError
from lmpgap.settlement.exhibit.inputs import INPUTS, input_files
from lmpgap.settlement.exhibit.manifest import (
    MANIFEST,
    foreign_files,
    is_exhibit,
    manifest_text,
    read_json,
    read_manifest,
    sha256,
)
from lmpgap.settlement.exhibit.page import claim_page, method_page
from lmpgap.settlement.exhibit.rows import exhibit_rights, exhibit_rows, exhibit_solves, to_csv
from lmpgap.settlement.exhibit.statement import build_statement, to_json
from lmpgap.settlement.exhibit.workbook import ROWS_SHEET, workbook
from lmpgap.settlement.result import Settlement
from lmpgap.settlement.settle import RunTables

if TYPE_CHECKING:
    from lmpgap.scenario.scenario import Scenario


@dataclass(frozen=True, kw_only=True)
class Exhibit:
    """A written exhibit.

    Attributes
    ----------
    folder
    digest
        SHA-256 of its manifest: who knows it knows every file.
    files
        Names of its files.
    """

    folder: Path
    digest: str
    files: tuple[str, ...]


def write_exhibit(
    settlement: Settlement,
    run: RunTables,
    scenario: Scenario,
    folder: str | Path,
    *,
    accounts: Sequence[str] | None = None,
    with_network: bool = True,
    xlsx: bool = False,
    written_at: datetime | None = None,
) -> Exhibit:
    """Write a settlement as a folder that stands on its own.

    Parameters
    ----------
    settlement
        From `lmpgap.settlement.settle.settle`.
    folder
        Made anew; an exhibit that stands there is replaced, anything else is refused.
    accounts
        The accounts the settlement was limited to: positions and rights of others are not copied.
    with_network
        ``False`` leaves network, offers and loads out; verification then needs the path of the scenario.
    xlsx
        Write claim.xlsx as well.
    written_at
        Time on the page; now by default.

    Raises
    ------
    DataError
        When the folder holds something else, an input changed meanwhile, or nothing was settled.
    MissingExtraError
        For ``xlsx`` without openpyxl.
    """
    target = Path(folder)
    _check_target(target)
    if settlement.rows.empty:
        raise DataError("nothing was settled, so there is no claim to write")
    inputs, included, filtered = input_files(scenario, accounts, with_network)
    # The relaxation's verdict needs the AC solve, so certificates of all formulations involved are shown.
    intervals = pd.DatetimeIndex(settlement.rows["interval_start"].unique())
    solves = exhibit_solves(run.table("solves"), intervals, settlement.formulations)
    rows = exhibit_rows(settlement.rows, scenario.hour_ending(settlement.rows["interval_start"]))
    statement = build_statement(
        settlement,
        run,
        scenario,
        solves,
        accounts=accounts,
        included=included,
        filtered=filtered,
        written_at=written_at or datetime.now(UTC),
    )
    encoded = to_json(statement)
    # The pages are made from what a reader will find in the file, so that they can be made again from it.
    stated = read_json(encoded, "statement.json")
    tables = {ROWS_SHEET: rows, "Solves": solves}
    files = {
        "statement.json": encoded,
        "rows.csv": to_csv(rows),
        "solves.csv": to_csv(solves),
        "claim.html": claim_page(stated, rows).encode("utf-8"),
        "method.md": method_page(stated, rows).encode("utf-8"),
        **{f"{INPUTS}/{name}": content for name, content in inputs.items()},
    }
    if not settlement.rights.empty:
        tables["Rights"] = exhibit_rights(settlement.rights)
        files["rights.csv"] = to_csv(tables["Rights"])
    if xlsx:
        files["claim.xlsx"] = workbook(stated, tables)
    files[MANIFEST] = manifest_text(files)
    _replace_folder(target, files)
    return Exhibit(folder=target, digest=sha256(files[MANIFEST]), files=tuple(sorted(files)))


def _check_target(target: Path) -> None:
    if target.is_symlink() or (target.exists() and not target.is_dir()):
        raise DataError(f"{target} is not a folder: choose another name for the exhibit")
    if not target.exists() or not any(target.iterdir()):
        return
    if not is_exhibit(target):
        raise DataError(f"{target} holds other files and is not an exhibit: choose an empty or new folder")
    foreign = foreign_files(target, read_manifest(target))
    if foreign:
        raise DataError(
            f"{target} holds files that are not part of the exhibit ({', '.join(foreign[:3])}): move them away first, "
            "they would be lost"
        )


def _replace_folder(target: Path, files: Mapping[str, bytes]) -> None:
    """Put a folder in place with one rename; what stood there goes only afterwards."""
    target.parent.mkdir(parents=True, exist_ok=True)
    draft, old = (target.parent / f".{target.name}-{uuid4().hex}" for _ in range(2))
    draft.mkdir()
    try:
        for name, content in files.items():
            path = draft / name
            path.parent.mkdir(parents=True, exist_ok=True)
            with open(path, "wb") as handle:
                handle.write(content)
                handle.flush()
                os.fsync(handle.fileno())
        if not target.exists():
            os.rename(draft, target)
            return
        os.rename(target, old)
        try:
            os.rename(draft, target)
        except OSError:
            os.rename(old, target)
            raise
        shutil.rmtree(old, ignore_errors=True)
    finally:
        shutil.rmtree(draft, ignore_errors=True)
