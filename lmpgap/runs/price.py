"""Solve and price a scenario into a run folder: only what is missing, and nothing twice."""

from __future__ import annotations

import json
import os
import platform
import signal
import threading
import warnings
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from datetime import UTC, datetime
from importlib.metadata import version
from pathlib import Path
from typing import Any

import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.parquet as pq

from lmpgap.dispatch.names import FORMULATIONS
from lmpgap.errors import LmpgapError, MissingExtraError, RunFolderError
from lmpgap.progress import Progress, silent
from lmpgap.runs.fingerprint import fingerprint
from lmpgap.runs.folder import FORMAT, RunFolder
from lmpgap.runs.given_losses import LossSource
from lmpgap.runs.plan import Plan, PlannedInterval, RunSettings, ledger_entry, settings_differences
from lmpgap.runs.schema import SOLVED_TABLES
from lmpgap.scenario.scenario import Scenario

TASK = "solving intervals"
_ATTEMPTS = 3
"""A chunk whose worker died is done again this many times before the run gives up on it."""


def price(
    scenario: Scenario,
    run: str | Path,
    *,
    formulations: tuple[str, ...] = FORMULATIONS,
    workers: int = 1,
    cluster: str | None = None,
    progress: Progress = silent,
    positions: list[int] | None = None,
    losses: LossSource | None = None,
    **settings: Any,
) -> RunFolder:
    """Solve every interval under the chosen formulations, price and certify it, and store the result.

    Solves that are in the folder already and depend on unchanged inputs are kept; those whose inputs changed are
    removed and solved anew. A run that was killed continues where it stopped. Results are the same for any
    number of workers.

    Parameters
    ----------
    run
        Run folder; made when it does not exist.
    workers
        Worker processes on this machine.
    cluster
        Address of a Dask scheduler; chunks then go to its workers (extra ``cluster``).
    positions
        Positions of the intervals to solve; all by default.
    losses
        Where the losses of ``dc-loss`` come from (`lmpgap.runs.given_losses`); its own flows by default.
    settings
        Fields of `lmpgap.runs.plan.RunSettings` that differ from the scenario's.

    Returns
    -------
    RunFolder

    Raises
    ------
    RunFolderError
        When the folder was made with other settings (each difference is named), is in use, or cannot be written.
    """
    plan = Plan(scenario, formulations, RunSettings.of(scenario, **settings), positions, losses)
    folder = RunFolder(run, create=True)
    with folder.writing():
        _check_settings(folder, plan)
        folder.mend()
        folder.write_manifest(_manifest(folder, plan))
        wanted = _wanted(folder, plan)
        total, before = len(plan.positions), len(plan.positions) - len(wanted)
        progress(TASK, before, total)
        done = before

        def finished(count: int) -> None:
            progress(TASK, done + count, total)

        for chunk, tables in _solved_chunks(plan, wanted, workers, cluster, finished):
            _store(folder, plan, chunk, tables)
            done += len(chunk)
            progress(TASK, done, total)
    return folder


def _check_settings(folder: RunFolder, plan: Plan) -> None:
    if not (folder.path / "manifest.json").exists():
        return
    stored = folder.manifest
    if stored.get("format") != FORMAT:
        raise RunFolderError(f"{folder.path} was written by another version of lmpgap: choose a new run folder")
    differences = settings_differences(stored["settings"], _plain(plan.settings.as_dict()))
    if differences:
        raise RunFolderError(
            f"{folder.path} holds solves with other settings; choose a new run folder, or change back:\n"
            + "\n".join(f"  - {line}" for line in differences)
        )


def _manifest(folder: RunFolder, plan: Plan) -> dict[str, Any]:
    scenario = plan.scenario
    packages = ("lmpgap", "numpy", "scipy", "clarabel", "highspy", "casadi", "pandas", "pyarrow")
    return {
        "format": FORMAT,
        "updated": datetime.now(UTC).isoformat(timespec="seconds"),
        "scenario": {
            "folder": os.path.relpath(scenario.folder.resolve(), folder.path.resolve()),
            "name": scenario.settings.name,
            "currency": scenario.settings.currency,
            "time_zone": scenario.settings.time_zone,
            "interval_minutes": scenario.settings.interval_minutes,
            "sha256": dict(scenario.hashes),
        },
        "settings": _plain(plan.settings.as_dict()),
        "versions": {"python": platform.python_version(), **{name: version(name) for name in packages}},
    }


def _plain(settings: dict[str, Any]) -> dict[str, Any]:
    """Return the settings as they come back from JSON, so that both sides of a comparison look alike."""
    plain: dict[str, Any] = json.loads(json.dumps(settings))
    return plain


def _wanted(folder: RunFolder, plan: Plan) -> dict[int, tuple[str, ...]]:
    """Return what has to be solved, after removing stored solves that no longer hold."""
    ledger = folder.ledger()
    stored = {name: key for entries in ledger.values() for name, key in entries.items()}
    # A later call may ask for fewer formulations: those that are there count as part of the run.
    present = {name.rpartition("|")[2] for name in stored}
    together = tuple(name for name in FORMULATIONS if name in plan.formulations or name in present)
    valid: set[str] = set()
    wanted: dict[int, tuple[str, ...]] = {}
    for position in plan.positions:
        interval = plan.interval(position, together)
        names = {name: ledger_entry(interval.start, name) for name in together}
        holds = {name for name in together if stored.get(names[name]) == interval.keys[name]}
        missing = {
            name for name in together if name not in holds and (name in plan.formulations or names[name] in stored)
        }
        if "soc" in missing and "ac" in together:
            # The verdict on the relaxation is passed with the AC solution at hand.
            missing.add("ac")
        valid |= {names[name] for name in holds - missing}
        if missing:
            wanted[position] = tuple(name for name in FORMULATIONS if name in missing)
    if plan.covers_all:
        _drop_stale(folder, ledger, valid)
    else:
        asked = {ledger_entry(plan.start(p), name) for p in plan.positions for name in FORMULATIONS}
        _drop_stale(folder, ledger, valid | (set(stored) - asked))
    return wanted


def _drop_stale(folder: RunFolder, ledger: Mapping[str, Mapping[str, str]], valid: set[str]) -> None:
    for chunk, entries in ledger.items():
        stale = {name for name in entries if name not in valid}
        if not stale:
            continue
        kept = {name: key for name, key in entries.items() if name in valid}
        files = [f"{table}/{chunk}.parquet" for table in SOLVED_TABLES] + [f"ledger/{chunk}.json"]
        if not kept:
            folder.commit(chunk, remove=files)
            continue
        tables = {
            f"{table}/{chunk}.parquet": _without(pq.read_table(folder.path / table / f"{chunk}.parquet"), stale, table)
            for table in SOLVED_TABLES
        }
        folder.commit(chunk, tables=tables, texts={f"ledger/{chunk}.json": _ledger_text(kept)})


def _without(table: pa.Table, stale: set[str], name: str) -> pa.Table:
    """Return the rows of the solves that still hold; the audit belongs to the AC solve, whatever it looked at."""
    # Cast first: at a finer unit %S would print the fraction as well.
    times = pc.strftime(table["interval_start"].cast(pa.timestamp("s", tz="UTC")), format="%Y-%m-%dT%H:%M:%SZ")
    owner = pa.scalar("ac") if name == "audit" else table["formulation"]
    names = pc.binary_join_element_wise(times, owner, "|")
    return table.filter(pc.invert(pc.is_in(names, value_set=pa.array(sorted(stale), type=pa.string()))))


def _store(folder: RunFolder, plan: Plan, chunk: list[PlannedInterval], tables: Mapping[str, pa.Table]) -> None:
    entries = {ledger_entry(interval.start, name): key for interval in chunk for name, key in interval.keys.items()}
    name = f"{chunk[0].start.astype('datetime64[s]').item():%Y%m%dT%H%M%SZ}-{fingerprint(entries)[:12]}"
    folder.commit(
        name,
        tables={f"{table}/{name}.parquet": content for table, content in tables.items()},
        texts={f"ledger/{name}.json": _ledger_text(entries)},
    )


def _ledger_text(entries: Mapping[str, str]) -> str:
    return json.dumps(dict(entries), indent=0, sort_keys=True) + "\n"


# --- carrying out -------------------------------------------------------------------------------------------------


def _solved_chunks(
    plan: Plan,
    wanted: dict[int, tuple[str, ...]],
    workers: int,
    cluster: str | None,
    finished: Callable[[int], None],
) -> Iterator[tuple[list[PlannedInterval], Mapping[str, pa.Table]]]:
    from lmpgap.runs.interval import solve_chunk

    network, settings, hours = plan.scenario.network, plan.settings, plan.scenario.settings.hours
    network_key = fingerprint(network)
    if workers == 1 and cluster is None:
        for chunk in plan.chunks(wanted, 1):
            yield chunk, solve_chunk(network, chunk, settings, hours, network_key, finished)
        return
    left = dict(wanted)
    for attempt in range(1, _ATTEMPTS + 1):
        try:
            with _backend(cluster):
                yield from _parallel(plan, left, workers, network_key)
            return
        except Exception as error:
            if not _worker_died(error) or attempt == _ATTEMPTS:
                if _worker_died(error):
                    raise LmpgapError(
                        f"worker processes died {attempt} times (out of memory?); finished intervals are kept: "
                        "run again with fewer --workers"
                    ) from error
                raise


def _parallel(
    plan: Plan, left: dict[int, tuple[str, ...]], workers: int, network_key: str
) -> Iterator[tuple[list[PlannedInterval], Mapping[str, pa.Table]]]:
    """Yield chunks as they finish, in any order; ``left`` keeps what is not done, for another attempt."""
    from joblib import Parallel, delayed

    network, settings, hours = plan.scenario.network, plan.settings, plan.scenario.settings.hours
    tasks = (
        delayed(_named_chunk)(network, chunk, settings, hours, network_key) for chunk in plan.chunks(left, workers)
    )
    with Parallel(n_jobs=workers, return_as="generator_unordered", pre_dispatch="2*n_jobs") as pool:
        for positions, tables in pool(tasks):
            chunk = [plan.interval(p, left[p]) for p in positions]
            yield chunk, tables
            for position in positions:
                del left[position]


def _named_chunk(*arguments: Any) -> tuple[list[int], dict[str, pa.Table]]:
    from lmpgap.runs.interval import solve_chunk

    if threading.current_thread() is threading.main_thread():
        # A worker process: Ctrl-C reaches all of them, and the one that is in charge ends the others.
        signal.signal(signal.SIGINT, signal.SIG_IGN)
    return [interval.position for interval in arguments[1]], solve_chunk(*arguments)


@contextmanager
def _backend(cluster: str | None) -> Iterator[None]:
    from joblib import parallel_config

    if cluster is None:
        with warnings.catch_warnings():
            # joblib tells when it replaces a worker; that is handled here.
            warnings.filterwarnings("ignore", message="A worker stopped while some jobs were given to the executor")
            # ... and, when it is stopped, that tasks were dropped.
            warnings.filterwarnings("ignore", message=".*tasks which were still being processed")
            with parallel_config(backend="loky", inner_max_num_threads=1):
                yield
        return
    try:
        from distributed import Client
    except ImportError as error:
        raise MissingExtraError("distributed", "cluster") from error
    try:
        client = Client(cluster, timeout=10)  # type: ignore[no-untyped-call, unused-ignore]
    except (OSError, ValueError) as error:
        raise LmpgapError(f"no cluster scheduler answers at {cluster} ({error})") from error
    with client, parallel_config(backend="dask", wait_for_workers_timeout=60):
        yield


def _worker_died(error: Exception) -> bool:
    return type(error).__name__ in ("TerminatedWorkerError", "BrokenProcessPool", "KilledWorker")
