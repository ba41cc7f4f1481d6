"""Verification: an honest exhibit stands, and every way of tampering that we could think of is found and named."""

from __future__ import annotations

import json
import shutil
from collections.abc import Callable
from datetime import UTC, date, datetime
from pathlib import Path
from typing import Any

import pytest

from lmpgap.errors import DataError
from lmpgap.runs.price import price
from lmpgap.scenario.read import read_scenario
from lmpgap.settlement.aggregate import by_account
from lmpgap.settlement.exhibit.manifest import MANIFEST, is_safe, manifest_text, sha256
from lmpgap.settlement.exhibit.page import claim_page, method_page
from lmpgap.settlement.exhibit.rows import from_csv, settlement_rows, to_csv
from lmpgap.settlement.exhibit.statement import plain_rows, to_json
from lmpgap.settlement.exhibit.write import write_exhibit
from lmpgap.settlement.settle import settle
from lmpgap.settlement.verify import Verification, verify_exhibit
from tests.settlement.conftest import Solved

Reprice = Callable[..., Any]


@pytest.fixture(scope="module")
def honest(solved: Solved, tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("verify") / "claim"
    settlement = settle(solved.run, solved.scenario, today=date(2026, 3, 20), write=False)
    write_exhibit(
        settlement, solved.run, solved.scenario, folder, xlsx=True, written_at=datetime(2026, 3, 20, tzinfo=UTC)
    )
    return folder


@pytest.fixture
def exhibit(honest: Path, tmp_path: Path) -> Path:
    return Path(shutil.copytree(honest, tmp_path / "claim"))


def reseal(folder: Path) -> None:
    """Write a manifest that agrees with the files, as a forger would."""
    files = {p.relative_to(folder).as_posix(): p.read_bytes() for p in folder.rglob("*") if p.is_file()}
    files.pop(MANIFEST)
    (folder / MANIFEST).write_bytes(manifest_text(files))


def told(result: Verification) -> str:
    return "\n".join(map(str, result.findings))


def test_an_honest_exhibit_stands(honest: Path) -> None:
    result = verify_exhibit(honest)
    assert result.stands, told(result)
    assert result.sentence == "The exhibit stands: every figure was recomputed from the inputs."
    assert "3 intervals solved and settled again" in result.checks
    assert result.digest == sha256((honest / MANIFEST).read_bytes())
    assert not result.notes


def test_it_stands_on_another_machine_without_the_original_folders(honest: Path, tmp_path: Path) -> None:
    """Only the folder travels: the inputs inside are enough."""
    moved = Path(shutil.copytree(honest, tmp_path / "elsewhere"))
    assert verify_exhibit(moved).stands


def change_amount(folder: Path) -> None:
    text = (folder / "rows.csv").read_text(encoding="utf-8").split("\n")
    header = text[0].split(",")
    at = next(i for i, line in enumerate(text) if line.startswith("Vale Power") and ",loss," in line)
    cells = text[at].split(",")
    cells[header.index("amount")] = repr(float(cells[header.index("amount")]) + 1000.0)
    text[at] = ",".join(cells)
    (folder / "rows.csv").write_text("\n".join(text), encoding="utf-8")


def test_changed_number(exhibit: Path, stored: Reprice) -> None:
    change_amount(exhibit)
    result = verify_exhibit(exhibit, reprice=stored)
    assert not result.stands
    assert "rows.csv: was changed" in told(result)
    assert "its parts give" in told(result)
    assert "amount is 1,0" in told(result)  # by how much: the stated and the recomputed figure stand side by side


def test_changed_number_with_a_fresh_manifest(exhibit: Path, stored: Reprice) -> None:
    change_amount(exhibit)
    reseal(exhibit)
    result = verify_exhibit(exhibit, reprice=stored)
    assert not result.stands
    assert "was changed" not in told(result)
    assert "rows.csv, line" in told(result)
    assert "recomputed" in told(result)


def forge(folder: Path, gain: float) -> None:
    """Raise the posted loss component everywhere and make every file of the exhibit agree with it."""
    statement = json.loads((folder / "statement.json").read_text(encoding="utf-8"))
    rows = from_csv((folder / "rows.csv").read_bytes(), "rows.csv", ())
    own = rows["component"].isin(["loss", "delivery-factor"])
    for column in ("amount", "amount_low", "amount_high"):
        rows.loc[own, column] += gain * rows["mw"] * rows["hours"]
    rows.loc[own, "posted"] += gain
    statement["totals"] = plain_rows(by_account(settlement_rows(rows), statement["options"]["materiality"]))
    (folder / "rows.csv").write_bytes(to_csv(rows))
    (folder / "statement.json").write_bytes(to_json(statement))
    (folder / "claim.html").write_text(claim_page(statement, rows), encoding="utf-8")
    (folder / "method.md").write_text(method_page(statement, rows), encoding="utf-8")
    (folder / "claim.xlsx").unlink()
    reseal(folder)


def test_a_forgery_that_agrees_with_itself_falls_by_recomputation(exhibit: Path, stored: Reprice) -> None:
    forge(exhibit, 0.05)
    result = verify_exhibit(exhibit, reprice=stored)
    assert not result.stands
    assert "was changed" not in told(result)
    assert "its parts give" not in told(result)
    assert "posted is" in told(result)
    assert "Vale Power" in told(result)
    assert result.recomputed.set_index(["account", "component"]).loc[("Vale Power", "loss"), "amount"] == pytest.approx(
        187.5, rel=0.01
    )


def test_changed_input_is_named_and_its_effect_told(exhibit: Path) -> None:
    """An offer that was raised afterwards: hash, recorded hash and figures all disagree."""
    file = exhibit / "inputs" / "offers.csv"
    text = file.read_text().replace("10.0,10.0", "12.0,12.0")
    assert text != file.read_text()
    file.write_text(text)
    result = verify_exhibit(exhibit)
    assert "inputs/offers.csv: was changed" in told(result)
    assert "recomputed" in told(result)
    reseal(exhibit)
    result = verify_exhibit(exhibit)
    assert not result.stands
    assert "inputs/offers.csv: is not the file whose hash statement.json records" in told(result)


def test_an_input_that_cannot_be_read_is_a_finding(exhibit: Path) -> None:
    (exhibit / "inputs" / "buses.csv").write_text("nonsense")
    result = verify_exhibit(exhibit)
    assert not result.stands
    assert "recomputation" in told(result)


def test_changed_page(exhibit: Path, stored: Reprice) -> None:
    page = exhibit / "claim.html"
    page.write_text(page.read_text(encoding="utf-8").replace("not settlement", "settlement").replace("187", "987"))
    result = verify_exhibit(exhibit, reprice=stored)
    assert "claim.html: was changed" in told(result)
    reseal(exhibit)
    result = verify_exhibit(exhibit, reprice=stored)
    assert not result.stands
    assert told(result) == "claim.html: does not show what statement.json and rows.csv hold"


def test_a_page_cannot_hide_behind_another_version(exhibit: Path, stored: Reprice) -> None:
    statement = json.loads((exhibit / "statement.json").read_text(encoding="utf-8"))
    statement["versions"]["lmpgap"] = "9.9.9"
    (exhibit / "statement.json").write_bytes(to_json(statement))
    (exhibit / "claim.html").write_text("<p>Pay 1,000,000.</p>")
    reseal(exhibit)
    result = verify_exhibit(exhibit, reprice=stored)
    assert not result.stands
    assert "claim.html: does not show" in told(result)
    assert "verify it with that one" in told(result)


def test_changed_workbook(exhibit: Path, stored: Reprice) -> None:
    import openpyxl

    book = openpyxl.load_workbook(exhibit / "claim.xlsx")
    sheet = book["Rows"]
    column = next(cell.column for cell in sheet[1] if cell.value == "amount")
    sheet.cell(row=3, column=column).value = 99999.0
    book.save(exhibit / "claim.xlsx")
    reseal(exhibit)
    result = verify_exhibit(exhibit, reprice=stored)
    assert not result.stands
    assert told(result).startswith("claim.xlsx, row 3: amount is 99,999")
    (exhibit / "claim.xlsx").write_bytes(b"not a workbook")
    reseal(exhibit)
    assert "claim.xlsx cannot be read" in told(verify_exhibit(exhibit, reprice=stored))


@pytest.mark.parametrize("name", ["rows.csv", "statement.json", "claim.html", "inputs/loads.csv", "solves.csv"])
def test_missing_file(exhibit: Path, stored: Reprice, name: str) -> None:
    (exhibit / name).unlink()
    result = verify_exhibit(exhibit, reprice=stored)
    assert not result.stands
    assert f"{name}: is missing" in told(result)


def test_missing_file_with_a_fresh_manifest(exhibit: Path, stored: Reprice) -> None:
    (exhibit / "claim.html").unlink()
    reseal(exhibit)
    assert "claim.html: is not in the manifest" in told(verify_exhibit(exhibit, reprice=stored))


def test_extra_file(exhibit: Path, stored: Reprice) -> None:
    (exhibit / "inputs" / "hidden").mkdir()
    (exhibit / "inputs" / "hidden" / "more.csv").write_text("x")
    result = verify_exhibit(exhibit, reprice=stored)
    assert told(result) == "inputs/hidden/more.csv: is not part of the exhibit"


@pytest.mark.parametrize(
    "name",
    ["../secret", "/etc/hostname", "inputs/../../secret", "C:\\secret", "..\\secret", "inputs//x", "./rows.csv", ""],
)
def test_names_that_lead_out_of_the_folder_are_not_read(exhibit: Path, stored: Reprice, name: str) -> None:
    (exhibit.parent / "secret").write_text("secret")
    manifest = json.loads((exhibit / MANIFEST).read_text())
    manifest["files"][name] = sha256(b"secret")
    (exhibit / MANIFEST).write_text(json.dumps(manifest))
    result = verify_exhibit(exhibit, reprice=stored)
    assert not is_safe(name)
    assert not result.stands
    assert "a name outside the exhibit; it was not read" in told(result)


def test_links_are_not_followed(exhibit: Path, stored: Reprice) -> None:
    outside = exhibit.parent / "outside.csv"
    shutil.move(exhibit / "rows.csv", outside)
    (exhibit / "rows.csv").symlink_to(outside)
    result = verify_exhibit(exhibit, reprice=stored)
    assert "rows.csv: is a link" in told(result)
    assert not result.stands


def test_a_statement_of_another_shape_is_a_finding(exhibit: Path, stored: Reprice) -> None:
    original = json.loads((exhibit / "statement.json").read_text(encoding="utf-8"))
    wrong = (None, 7, "x", [[]], {}, [])
    (exhibit / "claim.xlsx").unlink()
    for number, name in enumerate(original):
        value = next(v for v in (wrong[number % 6], *wrong) if v != original[name])
        (exhibit / "statement.json").write_text(json.dumps({**original, name: value}), encoding="utf-8")
        reseal(exhibit)
        assert not verify_exhibit(exhibit, reprice=stored).stands, (name, value)


def test_loosened_tolerances_are_pointed_at(exhibit: Path, stored: Reprice) -> None:
    statement = json.loads((exhibit / "statement.json").read_text(encoding="utf-8"))
    statement["run_settings"]["tolerances"]["price_residual"] = 100.0
    (exhibit / "statement.json").write_bytes(to_json(statement))
    rows = from_csv((exhibit / "rows.csv").read_bytes(), "rows.csv", ())
    (exhibit / "claim.html").write_text(claim_page(statement, rows), encoding="utf-8")
    (exhibit / "method.md").write_text(method_page(statement, rows), encoding="utf-8")
    reseal(exhibit)
    result = verify_exhibit(exhibit, reprice=stored)
    assert "tolerance price_residual is 100.0, the default is 0.001" in result.notes


@pytest.mark.parametrize("content", ["", "[]", "{}", '{"kind": "lmpgap exhibit", "format": 99}', "\x00"])
def test_a_folder_that_is_no_exhibit_is_refused(tmp_path: Path, content: str) -> None:
    (tmp_path / MANIFEST).write_text(content)
    with pytest.raises(DataError):
        verify_exhibit(tmp_path)
    with pytest.raises(DataError, match="not an exhibit"):
        verify_exhibit(tmp_path / "nowhere")


def test_without_network_it_needs_the_scenario(solved: Solved, stored: Reprice, tmp_path: Path) -> None:
    settlement = settle(solved.run, solved.scenario, write=False)
    folder = tmp_path / "claim"
    write_exhibit(settlement, solved.run, solved.scenario, folder, with_network=False)
    result = verify_exhibit(folder, reprice=stored)
    assert not result.stands
    assert "give the folder of the scenario with --scenario" in told(result)
    assert verify_exhibit(folder, solved.folder, reprice=stored).stands
    other = Path(shutil.copytree(solved.folder, tmp_path / "other"))
    (other / "loads.csv").write_text((other / "loads.csv").read_text().replace("150.0", "149.0"))
    result = verify_exhibit(folder, other)
    assert not result.stands
    assert "loads.csv: is not the file" in told(result)


def test_exhibit_of_one_account_stands(solved: Solved, tmp_path: Path) -> None:
    accounts = ["Vale Power"]
    settlement = settle(solved.run, solved.scenario, accounts=accounts, write=False)
    write_exhibit(settlement, solved.run, solved.scenario, tmp_path / "claim", accounts=accounts)
    result = verify_exhibit(tmp_path / "claim")
    assert result.stands, told(result)


def test_a_run_of_other_inputs_is_refused(solved: Solved, tmp_path: Path) -> None:
    folder = Path(shutil.copytree(solved.folder, tmp_path / "scenario"))
    (folder / "offers.csv").write_text((folder / "offers.csv").read_text().replace("15.0,15.0", "18.0,18.0"))
    with pytest.raises(DataError, match=r"offers\.csv: is not the file that was solved"):
        settle(solved.run, read_scenario(folder))


def test_two_bus_over_collection_through_the_whole_chain(tmp_path: Path) -> None:
    """Load pays more than generation costs by loss x mean of the two prices: 191.44 $ in closed form.

    Loss k F^2 at mid-line flow, half at each end: price 2 / price 1 = (1 + kF)/(1 - kF), F = D + kF^2/2; k = 1e-4
    per MW, D = 300 MW, c = 20 $/MWh give 21.2568 $/MWh and a loss of 9.2806 MW.
    """
    scenario = tmp_path / "scenario"
    scenario.mkdir()
    tables = {
        "buses": "bus,base_kv,v_min_pu,v_max_pu\nWest,230,0.9,1.1\nEast,230,0.9,1.1\n",
        "branches": "branch,from_bus,to_bus,r_pu,x_pu\nLine,West,East,0.01,0.1\n",
        "resources": "resource,bus,eco_min_mw,eco_max_mw,q_min_mvar,q_max_mvar\nG,West,0,1000,-500,500\n",
        "offers": "resource,segment,from_mw,to_mw,price\nG,1,0,1000,20\n",
        "loads": "bus,mw,interval_start\nEast,300,2026-01-01T00:00:00Z\n",
    }
    for name, text in tables.items():
        (scenario / f"{name}.csv").write_text(text)
    # With b = 1/x and g = r/x^2 the loss is r F^2 per unit, so k = r / base.
    (scenario / "scenario.toml").write_text(
        '[scenario]\nname = "two"\nbase_mva = 100.0\n[dc]\nsusceptance = "reactance"\n[reference]\nkind = "load"\n'
    )
    run = price(read_scenario(scenario), tmp_path / "run", formulations=("dc-loss",))
    prices = run.table("prices").set_index("bus")["lmp"]
    output = run.table("dispatch").set_index("resource")["mw"]["G"]
    start = "2026-01-01T00:00:00Z"
    (scenario / "positions.csv").write_text(
        f"account,interval_start,node,mw\nload,{start},East,300\nplant,{start},West,{-output}\n"
    )
    (scenario / "posted.csv").write_text(
        "interval_start,node,lmp,energy_component,congestion_component,loss_component\n"
        f"{start},West,0,0,0,0\n{start},East,0,0,0,0\n"
    )
    # Held against a price of nothing, the amount is what the position pays, with the sign turned.
    settlement = settle(run, read_scenario(scenario), against="dc-loss")
    paid = -settlement.accounts[settlement.accounts["component"] == "lmp"].set_index("account")["amount"]
    assert round(prices["East"], 4) == 21.2568
    assert round(output - 300.0, 4) == 9.2806
    assert round(paid.sum(), 2) == 191.44
    assert round(paid["load"], 2) == round(300 * prices["East"], 2)
