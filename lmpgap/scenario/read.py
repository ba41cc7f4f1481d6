"""Reading a scenario folder: all faults at once, or a scenario."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np

from lmpgap.errors import ScenarioError
from lmpgap.scenario.axis import check_axis
from lmpgap.scenario.build import build_contingencies, name_positions
from lmpgap.scenario.coverage import check_coverage
from lmpgap.scenario.faults import FaultLog
from lmpgap.scenario.files import decode, read_bytes, read_raw, table_files
from lmpgap.scenario.intervals import build_intervals, interval_axis
from lmpgap.scenario.parse import to_typed
from lmpgap.scenario.plausible import check_plausibility
from lmpgap.scenario.posted import read_posted
from lmpgap.scenario.rules import check_tables
from lmpgap.scenario.scenario import Scenario
from lmpgap.scenario.settings import ScenarioSettings
from lmpgap.scenario.settings_file import SETTINGS_FILE, read_settings
from lmpgap.scenario.tables import TABLES
from lmpgap.scenario.topology import check_topology
from lmpgap.scenario.typed import ColumnTable, empty_table, row_numbers


def read_scenario(folder: Path | str) -> Scenario:
    """Read and validate a scenario folder.

    Parameters
    ----------
    folder
        Holds `scenario.toml` and the tables as CSV or Parquet files; nothing outside it is read.

    Returns
    -------
    Scenario
        With its warnings in ``warnings``.

    Raises
    ------
    ScenarioError
        With every fault that was found.
    """
    folder = Path(folder)
    log = FaultLog()
    try:
        is_folder = folder.is_dir()
    except (OSError, ValueError):
        is_folder = False
    if not is_folder:
        raise ScenarioError(f"there is no scenario folder at {folder}")
    hashes: dict[str, str] = {}
    settings = _read_settings(folder, log, hashes)
    try:
        files = table_files(folder, log)
    except OSError as error:
        raise ScenarioError(f"the scenario folder {folder} cannot be listed: {error.strerror}") from error
    tables: dict[str, ColumnTable] = {}
    for name, spec in TABLES.items():
        path = files.get(name)
        if path is None:
            if spec.required:
                log.fault(
                    f"{name}.csv",
                    f"the table is missing: {spec.meaning}",
                    allowed="a file with the columns " + ", ".join(c.name for c in spec.columns if c.required),
                )
            else:
                tables[name] = empty_table(spec)
            continue
        raw = read_raw(path, folder, log, hashes)
        if raw is None:
            continue
        typed = (
            read_posted(spec, raw, settings, log)
            if name in ("posted", "posted_constraints")
            else to_typed(spec, raw, log)
        )
        if typed is not None:
            tables[name] = typed
    return assemble(folder, settings, tables, log, hashes)


def _read_settings(folder: Path, log: FaultLog, hashes: dict[str, str]) -> ScenarioSettings:
    import hashlib

    path = folder / SETTINGS_FILE
    if not path.exists() and not path.is_symlink():
        log.fault(SETTINGS_FILE, "the file is missing", allowed='at least [scenario] with name = "..."')
        return read_settings(None, log)
    content = read_bytes(path, folder, log)
    if content is None:
        return read_settings(None, log)
    hashes[SETTINGS_FILE] = hashlib.sha256(content).hexdigest()
    return read_settings(decode(SETTINGS_FILE, content, log), log)


def scenario_from_tables(settings: ScenarioSettings, tables: Mapping[str, Any], folder: Path | str = ".") -> Scenario:
    """Return a scenario of data frames in memory, validated as a folder would be.

    Parameters
    ----------
    settings
        What `scenario.toml` would say.
    tables
        pandas data frames by table name; tables left out are empty.

    Raises
    ------
    ScenarioError
        With every fault that was found.
    """
    import pyarrow as pa

    from lmpgap.scenario.faults import suggestion
    from lmpgap.scenario.files import table_from_arrow

    log = FaultLog()
    typed: dict[str, ColumnTable] = {}
    for name in tables:
        if name not in TABLES:
            log.fault(str(name), "is not a table of a scenario" + suggestion(str(name), TABLES))
    for name, spec in TABLES.items():
        if name not in tables:
            if spec.required:
                log.fault(name, f"the table is missing: {spec.meaning}")
            else:
                typed[name] = empty_table(spec)
            continue
        raw = table_from_arrow(name, pa.Table.from_pandas(tables[name], preserve_index=False))
        table = to_typed(spec, raw, log)
        if table is not None:
            typed[name] = table
    return assemble(Path(folder), settings, typed, log, {})


def assemble(
    folder: Path,
    settings: ScenarioSettings,
    tables: dict[str, ColumnTable],
    log: FaultLog,
    hashes: Mapping[str, str],
) -> Scenario:
    """Check typed tables against each other and return the scenario; raise with all faults otherwise."""
    check_tables(tables, settings, log)
    if "loads" in tables:
        check_axis(tables, settings, log)
    if log.faults:
        raise ScenarioError(_summary(folder, log), log.faults)
    offers = tables["offers"]
    price, end_price = offers.number("price"), offers.number("end_price")
    tables["offers"] = replace(
        offers, columns={**offers.columns, "end_price": np.where(np.isnan(end_price), price, end_price)}
    )
    starts = interval_axis(tables["loads"])
    positions = name_positions(tables)
    source = build_intervals(tables, starts, settings.base_mva, positions)
    check_coverage(tables, source, settings, log)
    check_topology(tables, positions, build_contingencies(tables, positions["branch"]), source, log)
    check_plausibility(tables, source, settings, log)
    if log.faults:
        raise ScenarioError(_summary(folder, log), log.faults)
    return Scenario(
        folder=folder,
        settings=settings,
        # The line numbers hang on the files' text, which is not worth keeping.
        columns={name: replace(tables[name], lines=row_numbers) for name in TABLES},
        source=source,
        hashes=dict(hashes),
        warnings=tuple(log.warnings),
    )


def _summary(folder: Path, log: FaultLog) -> str:
    count = len(log.faults)
    return f"the scenario in {folder} cannot be used: {count:,} {'fault' if count == 1 else 'faults'}"
