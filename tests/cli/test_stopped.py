"""Ctrl-C in the middle of a run: a word, an exit status, no traceback of anybody, and a run that goes on."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
from pathlib import Path

import pytest

from lmpgap.runs.folder import RunFolder
from tests.cli.test_command_line import run_main
from tests.support.scenarios import hourly_scenario


@pytest.mark.parametrize("workers", ["1", "2"])
def test_ctrl_c_is_told_in_a_line_and_the_run_goes_on(tmp_path: Path, workers: str) -> None:
    hourly_scenario(tmp_path / "scenario", "case14", hours=40)
    command = ["price", "scenario", "--run", "run", "--workers", workers]
    script = "from lmpgap.cli import main; main()"
    with subprocess.Popen(
        [sys.executable, "-c", script, *command],
        stderr=subprocess.PIPE,
        text=True,
        cwd=tmp_path,
        start_new_session=True,  # so that the signal reaches the workers too, as it does from a keyboard
    ) as running:
        assert running.stderr is not None
        assert "elapsed" in running.stderr.readline()
        os.killpg(running.pid, signal.SIGINT)
        rest = running.stderr.read()
    told = [line for line in rest.splitlines() if "elapsed" not in line]
    assert told == ["lmpgap: stopped; what was stored is kept, run the same command again to go on"]
    assert running.returncode == 130
    again = run_main(*command, cwd=tmp_path)
    assert again.returncode == 0, again.stderr
    solves = RunFolder(tmp_path / "run").table("solves")
    assert len(solves) == 4 * 40
    assert not solves.duplicated(["interval_start", "formulation"]).any()
