"""`lmpgap check`: what it prints, its exit status, and that it starts no solver."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

import pandas as pd
import typer
from typer.testing import CliRunner, Result

from lmpgap.cli.check import check
from lmpgap.errors import ScenarioError
from lmpgap.scenario.settings_file import SECTIONS
from lmpgap.scenario.tables import TABLES, tables_as_markdown
from tests.scenario.folder import BASE, swap, write

app = typer.Typer()
app.command()(check)


def run(*arguments: str) -> Result:
    return CliRunner().invoke(app, list(arguments))


def test_what_would_be_solved(tmp_path: Path) -> None:
    changes = {
        "scenario.toml": BASE["scenario.toml"] + "[penalties]\npower_balance = 3000\n",
        "hubs.csv": "hub,bus,weight\nMid,South,1\nMid,East,1\n",
        "contingencies.csv": "contingency,branch\nloss of NS,NS\n",
        "posted.csv": "interval_start,node,lmp\n2026-03-08T06:00Z,Mid,1\n2026-03-08T06:00Z,Elsewhere,1\n",
    }
    result = run(str(write(tmp_path, changes)))
    assert result.exit_code == 0
    assert result.output.splitlines() == [
        "Three buses",
        "  intervals    3 intervals of 60 min, 2026-03-07 HE24 to 2026-03-08 HE02, America/Boise",
        "  network      3 buses, 3 branches, 2 with a rating",
        "  supply       2 resources, 350.0 MW, 3 offer segments, 0 rows of availability",
        "  load         111.0 to 120.0 MW, 0 price-sensitive bids",
        "  security     1 contingency on 2 monitored branches, 0 interfaces, 0 outages",
        "  soft limits  power balance at 3,000",
        "  posted       2 prices at 2 nodes, 0 constraint rows, 0 delivery factors",
        "  money        0 position rows of 0 accounts, 0 rights, 1 hub",
        "",
        "1 warning:",
        "  - posted.csv, line 3, column node: is not in buses or hubs (kept; 1 row) (found 'Elsewhere')",
        "",
        f"no faults; next: lmpgap weekly {tmp_path}",
    ]


def test_a_static_scenario(tmp_path: Path) -> None:
    result = run(str(write(tmp_path, {"loads.csv": "bus,mw\nSouth,90\n"})))
    assert "  intervals    one interval without a time\n" in result.output
    assert "  soft limits  none: every limit is hard\n" in result.output


def test_faults_are_told_in_words(tmp_path: Path) -> None:
    result = run(str(write(tmp_path, swap("buses.csv", "230", "x"))))
    assert isinstance(result.exception, ScenarioError)
    assert str(result.exception) == (
        f"the scenario in {tmp_path} cannot be used: 1 fault\n"
        "  - buses.csv, line 2, column base_kv: is not a number (found 'x'); allowed: a number above 0 [kV]"
    )


def test_json(tmp_path: Path) -> None:
    good = json.loads(run(str(write(tmp_path / "good")), "--json").output)
    assert good["usable"] is True
    assert good["buses"] == 3
    assert good["first_interval"] == "2026-03-07 HE24"
    assert good["warnings"] == []
    result = run(str(write(tmp_path / "bad", swap("buses.csv", "230", "x"))), "--json")
    assert result.exit_code == 1
    bad = json.loads(result.output)
    assert bad["usable"] is False
    assert bad["faults"] == [
        {
            "table": "buses.csv",
            "message": "is not a number",
            "row": 2,
            "column": "base_kv",
            "value": "x",
            "allowed": "a number above 0 [kV]",
            "kind": "not a number",
        }
    ]


def test_tables_page() -> None:
    result = run("--tables")
    assert result.exit_code == 0
    for table in TABLES.values():
        assert f"## {table.name}" in result.output
        for column in table.columns:
            assert f"| {column.name} |" in result.output or f"| [{column.name}] |" in result.output
            assert column.meaning
    for section in SECTIONS:
        assert f"| [{section}] |" in result.output
    assert tables_as_markdown() in result.output


def test_tables_as_json() -> None:
    page = json.loads(run("--tables", "--json").output)
    assert set(page["tables"]) == set(TABLES)
    assert set(page["settings"]) == set(SECTIONS)


def test_without_a_folder_it_is_wrong_usage() -> None:
    assert run().exit_code == 2


def test_check_imports_nothing_heavy(tmp_path: Path) -> None:
    folder = write(tmp_path, {"interfaces.csv": "interface,branch,weight\nI,NS,1\n", "loads.csv": None})
    pd.DataFrame({"bus": ["South"], "mw": [90.0]}).to_parquet(folder / "loads.parquet")
    heavy = {"scipy", "pandas", "clarabel", "highspy", "cvxpy", "casadi", "plotly"}
    code = (
        "import sys; from pathlib import Path; from lmpgap.cli.check import check; "
        f"check(Path({str(folder)!r})); print(sorted({heavy!r} & set(sys.modules)))"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr
    assert done.stdout.splitlines()[-1] == "[]"
