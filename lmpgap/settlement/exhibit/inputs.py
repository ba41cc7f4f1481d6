"""The input files that an exhibit carries."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING

import pandas as pd

from lmpgap.errors import DataError
from lmpgap.settlement.exhibit.manifest import sha256
from lmpgap.settlement.settle import ARRIVES_LATER

if TYPE_CHECKING:
    from lmpgap.scenario.scenario import Scenario

INPUTS = "inputs"

SETTLEMENT_FILES = ("scenario", *ARRIVES_LATER)
"""Stems of the files that hold no network, offers or loads."""


def input_files(
    scenario: Scenario, accounts: Sequence[str] | None, with_network: bool
) -> tuple[dict[str, bytes], list[str], list[str]]:
    """Return the files to put into an exhibit, by name.

    Parameters
    ----------
    accounts
        Reduce positions and rights to these accounts; others stay private.
    with_network
        ``False`` leaves out all files with the network, offers and loads.

    Returns
    -------
    files
        Content by file name.
    included, filtered
        Names of the files that are copies, and of those that were reduced.

    Raises
    ------
    DataError
        When a file changed since the scenario was read.
    """
    files: dict[str, bytes] = {}
    included, filtered = [], []
    for name, expected in sorted(scenario.hashes.items()):
        stem = Path(name).stem
        if not with_network and stem not in SETTLEMENT_FILES:
            continue
        if accounts is not None and stem in ("positions", "rights"):
            column = "account" if stem == "positions" else "holder"
            table = scenario.tables[stem]
            files[f"{stem}.csv"] = _reduced(table[table[column].isin(accounts)])
            filtered.append(f"{stem}.csv")
            continue
        content = (scenario.folder / name).read_bytes()
        if sha256(content) != expected:
            raise DataError(f"{name} changed after the scenario was read: run the settlement again")
        files[name] = content
        included.append(name)
    return files, included, filtered


def _reduced(table: pd.DataFrame) -> bytes:
    text = table.copy()
    for column in text.columns:
        if isinstance(text[column].dtype, pd.DatetimeTZDtype):
            text[column] = [value.isoformat() if pd.notna(value) else "" for value in text[column]]
    # Column by column as read: names are kept as they are, for this file is an input again.
    return text.to_csv(index=False, lineterminator="\n").encode("utf-8")
