"""The run folder under everything that can go wrong with a disk."""

import errno
import json
import os
import subprocess
import sys
import textwrap
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from lmpgap.errors import RunFolderError
from lmpgap.runs.folder import RunFolder
from lmpgap.runs.schema import RUN_TABLES, schema_as_text


def findings(n: int) -> pd.DataFrame:
    return pd.DataFrame(
        {
            "interval_start": pd.date_range("2026-03-08", periods=n, freq="h", tz="UTC").as_unit("us"),
            "kind": "identity",
            "node": [f"N{i}" for i in range(n)],
            "constraint": "",
            "amount": np.arange(n, dtype=float),
            "unit": "$/MWh",
            "sentence": "…",
        }
    )


@pytest.fixture
def folder(tmp_path: Path) -> RunFolder:
    made = RunFolder(tmp_path / "run", create=True)
    made.write_manifest({"format": 1, "scenario": {"folder": "."}})
    return made


def test_a_table_comes_back_as_it_was_written(folder: RunFolder) -> None:
    folder.write("findings", findings(5))
    pd.testing.assert_frame_equal(folder.table("findings"), findings(5))
    pd.testing.assert_frame_equal(pd.read_parquet(folder.path / "findings"), findings(5))


def test_a_rewritten_table_replaces_the_old_one(folder: RunFolder) -> None:
    folder.write("findings", findings(5))
    folder.write("findings", findings(2))
    assert len(folder.table("findings")) == 2


@pytest.mark.parametrize("name", sorted(RUN_TABLES))
def test_a_missing_table_is_empty_with_its_columns(folder: RunFolder, name: str) -> None:
    table = folder.table(name)
    assert table.empty
    assert list(table.columns) == [column.name for column in RUN_TABLES[name].columns]
    assert f"### `{name}`" in schema_as_text()


def test_columns_and_rows_can_be_chosen_while_reading(folder: RunFolder) -> None:
    folder.write("findings", findings(5))
    chosen = folder.table("findings", columns=["node", "amount"], node="N3")
    assert chosen.to_dict("records") == [{"node": "N3", "amount": 3.0}]


def test_missing_columns_are_named(folder: RunFolder) -> None:
    with pytest.raises(RunFolderError, match="sentence") as caught:
        folder.write("findings", findings(2).drop(columns=["sentence", "unit"]))
    assert [fault.column for fault in caught.value.faults] == ["unit", "sentence"]


def test_a_folder_that_is_no_run_is_refused(tmp_path: Path) -> None:
    with pytest.raises(RunFolderError, match=r"manifest\.json"):
        RunFolder(tmp_path)
    (tmp_path / "thesis.docx").write_text("precious")
    with pytest.raises(RunFolderError, match="holds other files"):
        RunFolder(tmp_path, create=True)


def test_a_damaged_manifest_is_told(folder: RunFolder) -> None:
    (folder.path / "manifest.json").write_text("{")
    with pytest.raises(RunFolderError, match="cannot be read"):
        _ = folder.manifest


def test_a_damaged_table_is_told(folder: RunFolder) -> None:
    folder.write("findings", findings(5))
    (folder.path / "findings" / "all.parquet").write_bytes(b"PAR1 no longer")
    with pytest.raises(RunFolderError, match="cannot be read"):
        folder.table("findings")


@pytest.mark.parametrize(
    ("code", "words"),
    [(errno.ENOSPC, "disk is full"), (errno.EROFS, "read-only"), (errno.EACCES, "permission denied")],
)
def test_a_disk_that_refuses_leaves_the_old_table(
    folder: RunFolder, monkeypatch: pytest.MonkeyPatch, code: int, words: str
) -> None:
    folder.write("findings", findings(5))

    def refuse(*_: object, **__: object) -> None:
        raise OSError(code, os.strerror(code))

    monkeypatch.setattr(pq, "write_table", refuse)
    with pytest.raises(RunFolderError, match=words):
        folder.write("findings", findings(2))
    monkeypatch.undo()
    assert len(folder.table("findings")) == 5
    assert not any((folder.path / ".pending").iterdir())


def test_two_writers_at_once_are_refused(folder: RunFolder) -> None:
    script = textwrap.dedent(
        f"""
        from lmpgap.errors import RunFolderError
        from lmpgap.runs.folder import RunFolder
        try:
            with RunFolder({str(folder.path)!r}).writing():
                print("got in")
        except RunFolderError as error:
            print(error)
        """
    )
    with folder.writing():
        second = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, check=True)
    assert "another run is writing" in second.stdout
    third = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, check=True)
    assert "got in" in third.stdout


def chunk(value: float) -> dict[str, pa.Table]:
    table = pa.table({"interval_start": pa.array([0], pa.timestamp("us", tz="UTC")), "amount": [value]})
    return {"prices/c.parquet": table, "solves/c.parquet": table}


@pytest.mark.parametrize("killed_at_move", [0, 1, 2])
def test_a_kill_between_moves_is_completed_by_the_next_opener(folder: RunFolder, killed_at_move: int) -> None:
    """Killed before the decision: nothing has changed. Killed after it: everything has, once reopened."""
    folder.commit("c", tables=chunk(1.0), texts={"ledger/c.json": json.dumps({"a": "1"})})
    script = textwrap.dedent(
        f"""
        import os, signal
        from lmpgap.runs import folder as module
        from tests.runs.test_folder import chunk
        real, count = os.replace, 0
        def replace(source, target):
            global count
            if count == {killed_at_move}:
                os.kill(os.getpid(), signal.SIGKILL)
            count += 1
            real(source, target)
        os.replace = replace
        module.RunFolder({str(folder.path)!r}).commit(
            "c", tables=chunk(2.0), texts={{"ledger/c.json": '{{"a": "2"}}'}}, remove=["solves/gone.parquet"]
        )
        """
    )
    killed = subprocess.run([sys.executable, "-c", script], check=False, cwd=Path(__file__).parents[2])
    assert killed.returncode == -9
    with folder.writing():
        values = {
            pq.read_table(folder.path / "prices" / "c.parquet")["amount"][0].as_py(),
            pq.read_table(folder.path / "solves" / "c.parquet")["amount"][0].as_py(),
            float(folder.ledger()["c"]["a"]),
        }
    assert values == ({1.0} if killed_at_move == 0 else {2.0})
    assert not any((folder.path / ".pending").iterdir())
