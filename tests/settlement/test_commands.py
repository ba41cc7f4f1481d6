"""The commands `settle` and `verify`: what they print, what they write, and how they end."""

from __future__ import annotations

import json
from pathlib import Path

import pytest
import typer
from typer.testing import CliRunner

from lmpgap.cli.settle import settle
from lmpgap.cli.verify import verify
from lmpgap.errors import DataError
from tests.settlement.conftest import Solved

app = typer.Typer()
app.command()(settle)
app.command()(verify)
runner = CliRunner()


def test_settle_then_verify(solved: Solved, tmp_path: Path) -> None:
    out = tmp_path / "claim"
    done = runner.invoke(app, ["settle", str(solved.run.path), "--out", str(out), "--today", "2026-03-20"])
    assert done.exit_code == 0, done.output
    assert "Vale Power" in done.output
    assert "positive is to the account's disadvantage" in done.output
    assert "can be confidential" in done.output
    assert (out / "claim.html").is_file()
    checked = runner.invoke(app, ["verify", str(out)])
    assert checked.exit_code == 0, checked.output
    assert "The exhibit stands" in checked.output
    (out / "claim.html").write_text("<p>pay me</p>")
    checked = runner.invoke(app, ["verify", str(out), "--json"])
    assert checked.exit_code == 1
    answer = json.loads(checked.stdout)
    assert answer["stands"] is False
    assert {finding["place"] for finding in answer["findings"]} == {"claim.html"}


def test_settle_as_json_without_an_exhibit(solved: Solved, tmp_path: Path) -> None:
    done = runner.invoke(
        app,
        ["settle", str(solved.run.path), "--no-exhibit", "--account", "Vale Power", "--materiality", "1000", "--json"],
    )
    assert done.exit_code == 0, done.output
    answer = json.loads(done.stdout)
    assert answer["exhibit"] is None
    assert [claim["account"] for claim in answer["claims"]] == ["Vale Power"]
    assert answer["claims"][0]["material"] is False
    assert answer["options"]["materiality"] == 1000.0


@pytest.mark.parametrize(
    "arguments", [["--basis", "rumour"], ["--combine", "hope"], ["--posted-reference", "none"], ["--today", "tomorrow"]]
)
def test_wrong_usage_ends_with_status_two(solved: Solved, arguments: list[str]) -> None:
    assert runner.invoke(app, ["settle", str(solved.run.path), "--no-exhibit", *arguments]).exit_code == 2


def test_data_errors_are_raised_for_the_command_line_to_tell(solved: Solved) -> None:
    done = runner.invoke(app, ["settle", str(solved.run.path), "--no-exhibit", "--against", "soc"])
    assert isinstance(done.exception, DataError)
    assert "run holds no prices of soc" in str(done.exception)
