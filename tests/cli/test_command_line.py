"""The command line as a whole: help, exit codes, and what it does not import."""

import json
import subprocess
import sys
from pathlib import Path

import pytest
import typer
from typer.testing import CliRunner

from lmpgap.cli import app, main
from lmpgap.cli.commands import COMMANDS, register
from tests.support.scenarios import change_load, hourly_scenario

register(app)
RUNNER = CliRunner()
NAMES = [command.__name__ for command in COMMANDS]
HEAVY = ("cvxpy", "casadi", "clarabel", "highspy", "plotly", "scipy.optimize", "distributed", "joblib")


def run_main(*arguments: str, cwd: Path | None = None) -> subprocess.CompletedProcess[str]:
    """The installed command in a process of its own, with its real error handling."""
    return subprocess.run(
        [sys.executable, "-c", "from lmpgap.cli import main; main()", *arguments],
        capture_output=True,
        text=True,
        check=False,
        cwd=cwd,
    )


@pytest.mark.parametrize("name", NAMES)
def test_every_command_has_help_with_an_example(name: str) -> None:
    shown = RUNNER.invoke(app, [name, "--help"])
    assert shown.exit_code == 0
    assert f"Example: lmpgap {name}" in " ".join(shown.output.split())


@pytest.mark.parametrize("command", COMMANDS, ids=NAMES)
def test_every_option_says_what_it_does(command) -> None:
    group = typer.main.get_command(app)
    click_command = group.commands[command.__name__]  # type: ignore[attr-defined]
    for parameter in click_command.params:
        assert getattr(parameter, "help", None), f"{command.__name__} {parameter.name}"


@pytest.mark.parametrize("arguments", [["--help"], ["check", "SCENARIO"]], ids=["help", "check"])
def test_light_commands_import_no_solver(arguments: list[str], tmp_path: Path) -> None:
    scenario = hourly_scenario(tmp_path / "scenario", hours=2)
    script = (
        "import sys\n"
        "from lmpgap.cli import main\n"
        f"sys.argv = ['lmpgap', *{[str(scenario) if a == 'SCENARIO' else a for a in arguments]!r}]\n"
        "try:\n    main()\nexcept SystemExit:\n    pass\n"
        f"print('HEAVY', [m for m in {HEAVY!r} if m in sys.modules])\n"
    )
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, check=True)
    assert done.stdout.splitlines()[-1] == "HEAVY []"


def test_wrong_usage_is_status_2() -> None:
    assert run_main("price", "--formulations", "nonsense", "--run", "x", "y").returncode == 2
    assert run_main("no-such-command").returncode == 2


def test_faults_in_the_data_are_status_1_in_words(tmp_path: Path) -> None:
    folder = hourly_scenario(tmp_path / "scenario", hours=2)
    branches = (folder / "branches.csv").read_text().replace("x_pu", "x_puu").replace("B1,B2", "B1,B99")
    (folder / "branches.csv").write_text(branches)
    done = run_main("weekly", str(folder), cwd=tmp_path)
    assert done.returncode == 1
    assert "Traceback" not in done.stderr
    assert "did you mean 'x_pu'" in done.stderr
    assert not (tmp_path / "runs").exists(), "nothing is left that looks like a run"
    assert not (tmp_path / "reports").exists()


def test_a_missing_folder_is_told(tmp_path: Path) -> None:
    for command in (["check", "nowhere"], ["price", "nowhere", "--run", "r"], ["compare", "nowhere"]):
        done = run_main(*command, cwd=tmp_path)
        assert done.returncode == 1, command
        assert "nowhere" in done.stderr
        assert "Traceback" not in done.stderr


def test_price_prints_json(tmp_path: Path) -> None:
    folder = hourly_scenario(tmp_path / "scenario", hours=2)
    done = run_main("price", str(folder), "--formulations", "dc,dc-loss", "--run", str(tmp_path / "run"), "--json")
    assert done.returncode == 0, done.stderr
    answer = json.loads(done.stdout)
    assert [row["formulation"] for row in answer["formulations"]] == ["dc", "dc-loss"]
    assert all(row["usable"] == 2 for row in answer["formulations"])


def test_sweep_shows_growth_and_writes_a_picture(tmp_path: Path) -> None:
    """Common practice (no source): the distance of the lossless dispatch to AC grows with loading."""
    folder = hourly_scenario(tmp_path / "scenario", hours=2)
    picture = tmp_path / "sweep.html"
    done = run_main(
        "sweep", str(folder), "--from", "0.4", "--to", "1.0", "--steps", "3", "--out", str(picture), "--json"
    )
    assert done.returncode == 0, done.stderr
    dc = [row for row in json.loads(done.stdout) if row["formulation"] == "dc"]
    for figure in ("losses_mw", "price_error", "cost_error"):
        sizes = [abs(row[figure]) for row in dc]
        assert figure == "losses_mw" or sizes == sorted(sizes), figure
    assert dc[0]["losses_mw"] == pytest.approx(0.0, abs=1e-9)
    assert "<html" in picture.read_text()


def test_an_hour_without_solution_is_reported_and_the_others_are_solved(tmp_path: Path) -> None:
    folder = hourly_scenario(tmp_path / "scenario", hours=3)
    change_load(folder, hour=1, factor=20.0)
    done = run_main("price", str(folder), "--formulations", "dc", "--run", str(tmp_path / "run"))
    assert done.returncode == 0
    assert "1 uncertified" in done.stdout


def test_main_is_the_installed_command() -> None:
    from importlib.metadata import entry_points

    (entry,) = [e for e in entry_points(group="console_scripts") if e.name == "lmpgap"]
    assert entry.load() is main


def strict_json(text: str) -> object:
    """JSON as the standard has it: without NaN and Infinity."""

    def refuse(constant: str) -> object:
        raise ValueError(f"{constant} is no JSON")

    return json.loads(text, parse_constant=refuse)


@pytest.fixture(scope="module")
def week(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Two hours with posted prices and positions, one of them without a node, and the run of them beside it."""
    folder = tmp_path_factory.mktemp("json")
    hourly_scenario(folder / "scenario", "case5", hours=2)
    change_load(folder / "scenario", 1, 9.0)  # no dispatch serves this hour: its figures do not exist
    start = "2026-03-07T0{}:00:00-07:00"
    rows = [f"{start.format(hour)},{node},20.5,20,0.25,0.25" for hour in (0, 1) for node in ("B1", "B2", "B3")]
    header = "interval_start,node,lmp,energy_component,congestion_component,loss_component\n"
    (folder / "scenario" / "posted.csv").write_text(header + "\n".join(rows) + "\n")
    rows = [f"Co-op,{start.format(hour)},{node},10" for hour in (0, 1) for node in ("B2", "Nowhere")]
    (folder / "scenario" / "positions.csv").write_text("account,interval_start,node,mw\n" + "\n".join(rows) + "\n")
    (folder / "scenario" / "hubs.csv").write_text("hub,bus,weight\nCentre,B2,1\nCentre,B3,1\n")
    priced = run_main("price", "scenario", "--run", "run", cwd=folder)
    assert priced.returncode == 0, priced.stderr
    return folder


@pytest.mark.parametrize(
    ("arguments", "keys"),
    [
        (["check", "scenario"], {"usable", "warnings", "intervals"}),
        (["price", "scenario", "--run", "run"], {"run", "formulations"}),
        (["compare", "run"], {"base", "against", "buses", "intervals", "constraints", "positions"}),
        (["compare", "run", "--base", "posted"], {"base", "against", "buses", "intervals", "constraints", "positions"}),
        (["settle", "run"], {"claim", "against", "claims", "totals", "left_out", "deadlines", "exhibit"}),
        (["verify", "run-exhibit"], {"stands", "findings", "checks"}),
        (["areas", "run"], {"areas", "drift"}),
        (["sweep", "scenario", "--from", "0.9", "--to", "9", "--steps", "2"], None),
    ],
    ids=lambda value: value[0] if isinstance(value, list) else "",
)
def test_json_is_strict_and_has_its_keys(week: Path, arguments: list[str], keys: set[str] | None) -> None:
    done = run_main(*arguments, "--json", cwd=week)
    assert done.returncode == 0, done.stderr
    content = strict_json(done.stdout)
    if keys is None:
        assert isinstance(content, list)
        assert {"load_factor", "formulation", "cost", "mean_price"} <= set(content[0])
    else:
        assert isinstance(content, dict)
        assert keys <= set(content)
