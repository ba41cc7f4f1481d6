"""The run folder: tables that appear whole or not at all, a ledger of finished solves, and a manifest.

Every change is a transaction. Files are first written under ``.pending/<name>/``; when all are on disk, a list of
moves and removals (``commit.json``) is put beside them with one atomic rename; then the moves are carried out. A
process killed before the list exists has changed nothing; one killed afterwards is completed by whoever opens the
folder next. Readers skip names that begin with a dot, so a table never shows half a chunk.
"""

from __future__ import annotations

import contextlib
import errno
import json
import os
import shutil
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any

import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq

from lmpgap.errors import Fault, LmpgapError, RunFolderError
from lmpgap.runs.schema import RUN_TABLES, SOLVED_TABLES

FORMAT = 1
_PENDING = ".pending"
_COMMIT = "commit.json"
_LOCK = ".lock"


class RunFolder:
    """Tables, ledger and manifest of one run.

    Parameters
    ----------
    path
        Folder of the run; it must exist unless ``create`` is set.
    create
        Make the folder when it is missing.

    Raises
    ------
    RunFolderError
        When the folder is missing, is not a run folder, or cannot be read or written.
    """

    def __init__(self, path: str | Path, *, create: bool = False) -> None:
        self.path = Path(path)
        if create:
            with _disk_errors(self.path):
                self.path.mkdir(parents=True, exist_ok=True)
            foreign = [p.name for p in self.path.iterdir() if not p.name.startswith(".")]
            if foreign and not (self.path / "manifest.json").exists():
                raise RunFolderError(
                    f"{self.path} holds other files ({', '.join(sorted(foreign)[:3])}) and no manifest.json: "
                    "choose an empty or new folder for the run"
                )
        elif not (self.path / "manifest.json").is_file():
            raise RunFolderError(f"{self.path} is not a run folder (it has no manifest.json): `lmpgap price` makes one")

    # --- reading ----------------------------------------------------------------------------------------------

    @property
    def manifest(self) -> dict[str, Any]:
        """What the run was made from and with: inputs and their hashes, settings, versions, tolerances."""
        return self._read_json("manifest.json")

    @property
    def scenario_folder(self) -> Path:
        """Folder the run's scenario was read from, relative paths resolved against the run folder."""
        return (self.path / str(self.manifest["scenario"]["folder"])).resolve()

    def table(self, name: str, columns: list[str] | None = None, **equals: str) -> pd.DataFrame:
        """Return a table, sorted as written; empty with the right columns when it was not written yet.

        Parameters
        ----------
        name
            One of `lmpgap.runs.schema.RUN_TABLES`.
        columns
            Read only these.
        equals
            Keep rows where a column has this value, e.g. ``formulation="ac"``; rows are left out while reading.
        """
        definition = RUN_TABLES[name]
        files = self._files(name)
        if not files:
            empty = definition.empty()
            return empty if columns is None else empty[columns]
        filters = [(column, "==", value) for column, value in equals.items()] or None
        try:
            frame: pd.DataFrame = pq.read_table(files, columns=columns, filters=filters).to_pandas()
        except (OSError, pa.ArrowException) as error:
            raise RunFolderError(f"table {name!r} of {self.path} cannot be read ({error}): {_remedy(name)}") from error
        keys = [k for k in ("interval_start", "formulation") if k in frame.columns]
        return frame.sort_values(keys, kind="stable", ignore_index=True) if keys else frame

    def _files(self, name: str) -> list[Path]:
        """Return the files of a table; of solved tables those of finished chunks, none of which may be missing."""
        files = {file.stem: file for file in sorted((self.path / name).glob("*.parquet"))}
        ledger = self.path / "ledger"
        if name not in SOLVED_TABLES or not ledger.is_dir():
            return list(files.values())
        chunks = sorted(file.stem for file in ledger.glob("*.json"))
        missing = [chunk for chunk in chunks if chunk not in files]
        if missing:
            raise RunFolderError(
                f"table {name!r} of {self.path} lacks {len(missing)} of {len(chunks)} files, the first is "
                f"{missing[0]}.parquet: {_remedy(name)}"
            )
        return [files[chunk] for chunk in chunks]

    def mend(self) -> int:
        """Remove what is left of chunks that lost a file, so that they are solved again; return how many there were.

        Files are deleted and cut short by hands and by disks; a run never leaves them so.
        """
        ledger = self.path / "ledger"
        whole: set[str] = set()
        broken: set[str] = set()
        for file in ledger.glob("*.json"):
            entry = (self.path / table / f"{file.stem}.parquet" for table in SOLVED_TABLES)
            (whole if _is_object(file) and all(_is_whole(part) for part in entry) else broken).add(file.stem)
        for table in SOLVED_TABLES:
            broken |= {file.stem for file in (self.path / table).glob("*.parquet")} - whole
        for chunk in sorted(broken):
            files = [f"ledger/{chunk}.json", *(f"{table}/{chunk}.parquet" for table in SOLVED_TABLES)]
            self.commit(chunk, remove=files)
        return len(broken)

    def ledger(self) -> dict[str, dict[str, str]]:
        """Return the finished solves: ``{chunk: {"interval_start|formulation": key}}``."""
        folder = self.path / "ledger"
        if not folder.is_dir():
            return {}
        return {file.stem: self._read_json(f"ledger/{file.name}") for file in sorted(folder.glob("*.json"))}

    def _read_json(self, name: str) -> dict[str, Any]:
        file = self.path / name
        try:
            content = json.loads(file.read_text(encoding="utf-8"))
        except (OSError, ValueError) as error:
            raise RunFolderError(f"{file} cannot be read ({error})") from error
        if not isinstance(content, dict):
            raise RunFolderError(f"{file} is not what a run writes there")
        return content

    # --- writing ----------------------------------------------------------------------------------------------

    def write(self, name: str, frame: pd.DataFrame) -> None:
        """Replace a derived table as a whole.

        Raises
        ------
        RunFolderError
            When columns are missing, or the disk refuses.
        """
        definition = RUN_TABLES[name]
        missing = [column.name for column in definition.columns if column.name not in frame.columns]
        if missing:
            raise RunFolderError(
                f"table {name!r} lacks columns", [Fault(table=name, column=c, message="missing") for c in missing]
            )
        table = pa.Table.from_pandas(
            frame[[c.name for c in definition.columns]], schema=definition.arrow_schema, preserve_index=False
        )
        existing = [f"{name}/{file.name}" for file in (self.path / name).glob("*.parquet")]
        self.commit(f"table-{name}", tables={f"{name}/all.parquet": table}, remove=existing)

    def write_manifest(self, manifest: Mapping[str, Any]) -> None:
        """Replace the manifest."""
        self.commit("manifest", texts={"manifest.json": json.dumps(manifest, indent=2, sort_keys=True) + "\n"})

    def commit(
        self,
        name: str,
        *,
        tables: Mapping[str, pa.Table] | None = None,
        texts: Mapping[str, str] | None = None,
        remove: list[str] | None = None,
    ) -> None:
        """Write and remove files as one transaction; paths are relative to the folder."""
        staging = self.path / _PENDING / name
        with _disk_errors(self.path):
            shutil.rmtree(staging, ignore_errors=True)
            staging.mkdir(parents=True)
            try:
                moves = {}
                for number, (target, table) in enumerate((tables or {}).items()):
                    pq.write_table(table, staging / f"{number}.parquet", compression="zstd")
                    moves[f"{number}.parquet"] = target
                for number, (target, text) in enumerate((texts or {}).items()):
                    (staging / f"{number}.text").write_text(text, encoding="utf-8")
                    moves[f"{number}.text"] = target
                for file in moves:
                    _flush(staging / file)
                removals = [old for old in remove or [] if old not in moves.values()]
                draft = staging / ".draft"
                draft.write_text(json.dumps({"moves": moves, "removals": removals}), encoding="utf-8")
                _flush(draft)
                os.replace(draft, staging / _COMMIT)
            except BaseException:
                if not (staging / _COMMIT).exists():
                    shutil.rmtree(staging, ignore_errors=True)
                raise
            self._carry_out(staging)

    def recover(self) -> None:
        """Complete transactions that were decided, and drop those that were not."""
        pending = self.path / _PENDING
        if not pending.is_dir():
            return
        with _disk_errors(self.path):
            for staging in sorted(pending.iterdir()):
                if (staging / _COMMIT).is_file():
                    self._carry_out(staging)
                else:
                    shutil.rmtree(staging, ignore_errors=True)

    def _carry_out(self, staging: Path) -> None:
        plan = json.loads((staging / _COMMIT).read_text(encoding="utf-8"))
        for file, target in plan["moves"].items():
            if (staging / file).exists():
                (self.path / target).parent.mkdir(parents=True, exist_ok=True)
                os.replace(staging / file, self.path / target)
        for old in plan["removals"]:
            (self.path / old).unlink(missing_ok=True)
        shutil.rmtree(staging, ignore_errors=True)

    @contextlib.contextmanager
    def writing(self) -> Iterator[None]:
        """Hold the folder against other writers; a killed process lets go by itself.

        Raises
        ------
        RunFolderError
            When another process is writing to the folder.
        """
        import fcntl

        with _disk_errors(self.path):
            handle = open(self.path / _LOCK, "a+", encoding="utf-8")  # noqa: SIM115 - held over the block
        with handle:
            try:
                fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
            except OSError as error:
                raise RunFolderError(
                    f"another run is writing to {self.path}: wait until it has finished, or choose another folder"
                ) from error
            self.recover()
            yield


def _remedy(name: str) -> str:
    """Return what to do about a damaged table."""
    return (
        "run `lmpgap price` or `weekly` again, it solves what was lost"
        if name in SOLVED_TABLES
        else "run the command that made it again"
    )


def _is_object(file: Path) -> bool:
    """Return whether a file holds a JSON object."""
    try:
        return isinstance(json.loads(file.read_text(encoding="utf-8")), dict)
    except (OSError, ValueError):
        return False


def _is_whole(file: Path) -> bool:
    """Return whether a Parquet file is there and has its end; a file that was cut short lacks the closing mark."""
    try:
        with open(file, "rb") as handle:
            handle.seek(-4, os.SEEK_END)
            return handle.read() == b"PAR1"
    except OSError:
        return False


def _flush(file: Path) -> None:
    """Make sure that the bytes are on disk before a rename makes them count."""
    with open(file, "rb") as handle:
        os.fsync(handle.fileno())


@contextlib.contextmanager
def _disk_errors(path: Path) -> Iterator[None]:
    """Tell a full, read-only or vanished disk in words."""
    try:
        yield
    except LmpgapError:
        raise
    except OSError as error:
        reasons = {
            errno.ENOSPC: "the disk is full; finished intervals are kept, free space and run again",
            errno.EDQUOT: "the disk quota is used up; finished intervals are kept, free space and run again",
            errno.EROFS: "the disk is read-only",
            errno.EACCES: "permission denied",
            errno.EPERM: "permission denied",
            errno.ENOTDIR: "a part of the path is a file, not a folder",
            errno.EEXIST: "the path is a file, not a folder",
        }
        why = reasons.get(error.errno or 0, str(error))
        raise RunFolderError(f"cannot write to run folder {path}: {why}") from error
