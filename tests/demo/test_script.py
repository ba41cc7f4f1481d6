"""The script reproduces what is committed, to the byte where the libraries are the same."""

from __future__ import annotations

import subprocess
import sys
from types import ModuleType

import numpy as np
import pandas as pd
import pytest

from tests.demo.conftest import COMMITTED, SCENARIOS, TRUTH, ClearedWeek


def _read(path):
    return pd.read_parquet(path) if path.suffix == ".parquet" else pd.read_csv(path)


def test_input_tables_are_those_committed(script: ModuleType, tmp_path):
    script.write_inputs(tmp_path / "week")
    written = sorted(path.name for path in (tmp_path / "week").iterdir())
    assert len(written) == 15
    for name in written:
        new, old = tmp_path / "week" / name, COMMITTED / name
        if name.endswith(".parquet"):
            # The bytes of a Parquet file name the version of the library that wrote it.
            pd.testing.assert_frame_equal(_read(new), _read(old), check_exact=True)
        else:
            assert new.read_bytes() == old.read_bytes(), name


def test_writing_twice_gives_the_same_bytes(script: ModuleType, tmp_path):
    for folder in ("first", "second"):
        script.write_inputs(tmp_path / folder)
    for path in (tmp_path / "first").iterdir():
        assert path.read_bytes() == (tmp_path / "second" / path.name).read_bytes(), path.name


def test_committed_prices_come_from_the_script(cleared_week: ClearedWeek):
    folder = cleared_week.publish("all")
    assert {path.name for path in folder.iterdir()} == {path.name for path in COMMITTED.iterdir()}
    for name in ("posted.parquet", "positions.parquet", "delivery_factors.parquet", "posted_constraints.csv"):
        new, old = _read(folder / name), _read(COMMITTED / name)
        assert list(new.columns) == list(old.columns)
        assert len(new) == len(old)
        for column in new:
            if new[column].dtype.kind != "f":
                pd.testing.assert_series_equal(new[column], old[column])
                continue
            # Prices are solved for: another solver release may round a figure to the other cent, not more.
            step = 0.101 if name.startswith("positions") else 1e-5 if name.startswith("delivery") else 0.0101
            difference = np.abs(new[column].to_numpy() - old[column].to_numpy())
            assert difference.max() <= step, (name, column)
            assert np.mean(difference > 1e-9) < 0.01, (name, column)
    for path in TRUTH.iterdir():
        new = cleared_week.out / "larkspur_truth" / path.name
        if path.name == "planted.csv":
            assert new.read_bytes() == path.read_bytes()
        else:
            pd.testing.assert_frame_equal(_read(new), _read(path), rtol=1e-3)


def test_command_line_tells_an_unknown_fault_with_the_known_ones(script: ModuleType):
    with pytest.raises(SystemExit, match="no fault stale; choose from stale-factors"):
        script.Planted.parse("stale,rounding")


def test_script_runs_from_any_folder(tmp_path):
    done = subprocess.run(
        [sys.executable, str(SCENARIOS / "make_larkspur.py"), "--help"],
        cwd=tmp_path,
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == 0
    assert "--faults" in done.stdout
