"""The exhibit on disk: what is in it, that it harms nobody, and that it appears whole or not at all."""

from __future__ import annotations

import csv
import html.parser
import io
import json
import os
import re
from datetime import UTC, date, datetime
from pathlib import Path

import numpy as np
import openpyxl
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from lmpgap.errors import DataError
from lmpgap.settlement.exhibit.page import claim_page, markdown_text, method_page
from lmpgap.settlement.exhibit.rows import from_csv, harmless, original, to_csv
from lmpgap.settlement.exhibit.workbook import workbook
from lmpgap.settlement.exhibit.write import Exhibit, write_exhibit
from lmpgap.settlement.options import COMPONENTS
from lmpgap.settlement.result import Settlement
from lmpgap.settlement.settle import settle
from tests.settlement.conftest import HOSTILE, PLANTED, RIGHT_TO_LEFT, Solved

TODAY = date(2026, 3, 20)
WRITTEN = datetime(2026, 3, 20, 12, tzinfo=UTC)


@pytest.fixture(scope="module")
def settlement(solved: Solved) -> Settlement:
    return settle(solved.run, solved.scenario, today=TODAY)


@pytest.fixture(scope="module")
def exhibit(solved: Solved, settlement: Settlement, tmp_path_factory: pytest.TempPathFactory) -> Exhibit:
    folder = tmp_path_factory.mktemp("exhibit") / "claim"
    return write_exhibit(settlement, solved.run, solved.scenario, folder, xlsx=True, written_at=WRITTEN)


def test_planted_error_of_a_solved_week_is_recovered(settlement: Settlement, solved: Solved) -> None:
    """120 MW at B2 and half of 10 MW at the hub, three hours, 0.50 $/MWh too high."""
    truth = PLANTED * 3 * (120.0 + 5.0)
    claim = settlement.claims.set_index("account")
    assert claim.loc["Vale Power", "amount"] == pytest.approx(truth, rel=0.01)
    assert claim.loc["Vale Power", "material"]
    assert not claim.loc[HOSTILE, "material"]
    stored = solved.run.table("settlement")
    assert len(stored) == len(settlement.rows)
    assert set(stored["component"]) == set(COMPONENTS)


def test_what_is_in_the_folder(exhibit: Exhibit, solved: Solved) -> None:
    inputs = {f"inputs/{name}" for name in solved.scenario.hashes}
    assert set(exhibit.files) == {
        "claim.html",
        "claim.xlsx",
        "manifest.json",
        "method.md",
        "rights.csv",
        "rows.csv",
        "solves.csv",
        "statement.json",
        *inputs,
    }
    for name in solved.scenario.hashes:
        assert (exhibit.folder / "inputs" / name).read_bytes() == (solved.folder / name).read_bytes()
    assert not [p for p in exhibit.folder.parent.iterdir() if p.name.startswith(".")]


class Tags(html.parser.HTMLParser):
    """Collect tags and what they load."""

    def __init__(self) -> None:
        super().__init__()
        self.tags: list[str] = []
        self.loads: list[str] = []
        self.headers = 0
        self.scoped = 0

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append(tag)
        self.loads += [f"{tag} {name}={value}" for name, value in attrs if name in ("src", "href", "data", "action")]
        if tag == "th":
            self.headers += 1
            self.scoped += any(name == "scope" for name, _ in attrs)


def test_page_is_self_contained_and_escapes_hostile_names(exhibit: Exhibit) -> None:
    text = (exhibit.folder / "claim.html").read_text(encoding="utf-8")
    tags = Tags()
    tags.feed(text)
    assert "script" not in tags.tags
    assert not tags.loads
    assert "url(" not in text
    assert "@import" not in text
    assert "<script>alert" not in text
    assert "&lt;script&gt;alert(1)&lt;/script&gt;" in text
    # A right-to-left name is isolated, so that it cannot turn the figures beside it around.
    assert f"<bdi>{RIGHT_TO_LEFT}</bdi>" in text
    assert tags.headers == tags.scoped
    assert tags.tags.count("caption") == tags.tags.count("table")
    for words in ("Not settlement-grade", "tariff governs", "licensed engineer", "confidential", "10 left", "our rule"):
        assert words in text


def test_page_figures_are_those_of_the_rows(exhibit: Exhibit, settlement: Settlement) -> None:
    text = (exhibit.folder / "claim.html").read_text(encoding="utf-8")
    for row in settlement.claims.itertuples():
        assert f"{row.amount:,.2f}" in text
        assert f"{row.amount_low:,.2f} to {row.amount_high:,.2f}" in text.replace("-0.00", "0.00")


def test_pages_come_from_statement_and_rows_alone(exhibit: Exhibit) -> None:
    statement = json.loads((exhibit.folder / "statement.json").read_text(encoding="utf-8"))
    rows = from_csv((exhibit.folder / "rows.csv").read_bytes(), "rows.csv", ())
    assert claim_page(statement, rows) == (exhibit.folder / "claim.html").read_text(encoding="utf-8")
    assert method_page(statement, rows) == (exhibit.folder / "method.md").read_text(encoding="utf-8")


def test_method_states_conventions_certificate_versions_and_tolerances(exhibit: Exhibit) -> None:
    text = (exhibit.folder / "method.md").read_text(encoding="utf-8")
    for words in (
        "DF' = (e + L)/(e + sum v L)",
        "certified",
        "tolerances.price_residual",
        "clarabel",
        "Susceptance of the linear formulations: impedance",
        "do not hedge losses",
        "Filings need counsel",
    ):
        assert words in text


def test_a_missing_figure_is_an_error_and_not_a_blank(exhibit: Exhibit) -> None:
    statement = json.loads((exhibit.folder / "statement.json").read_text(encoding="utf-8"))
    rows = from_csv((exhibit.folder / "rows.csv").read_bytes(), "rows.csv", ())
    del statement["intervals"]
    with pytest.raises(Exception, match="intervals"):
        claim_page(statement, rows)


def test_rows_csv_gives_every_figure_back_exactly(exhibit: Exhibit, settlement: Settlement) -> None:
    rows = from_csv((exhibit.folder / "rows.csv").read_bytes(), "rows.csv", ())
    for column in ("amount", "amount_low", "posted", "reference", "rounding", "shift_dc-loss"):
        np.testing.assert_array_equal(rows[column].to_numpy(), settlement.rows[column].to_numpy())
    assert rows["account"].tolist() == settlement.rows["account"].tolist()
    assert rows["hour_ending"].iloc[0] == "2026-03-07 HE21"


def test_no_csv_cell_is_a_formula(exhibit: Exhibit) -> None:
    for name in ("rows.csv", "rights.csv", "solves.csv"):
        table = list(csv.reader(io.StringIO((exhibit.folder / name).read_text(encoding="utf-8"), newline="")))
        for cell in (cell for line in table for cell in line):
            assert not cell.startswith(("=", "+", "@", "\t", "\r"))
            assert not cell.startswith("-") or re.fullmatch(r"-(\d+(\.\d+)?(e-?\d+)?|inf)", cell)


@given(st.text())
def test_harmless_text_comes_back(text: str) -> None:
    assert original(harmless(text)) == text
    assert not harmless(text).startswith(("=", "+", "-", "@", "\t", "\r"))


@given(st.lists(st.text(st.characters(codec="utf-8", exclude_characters="\0")), min_size=1, max_size=4))
def test_csv_gives_any_name_back(names: list[str]) -> None:
    frame = pd.DataFrame({"account": pd.Series(names, dtype="str"), "amount": np.arange(len(names)) / 3.0})
    back = from_csv(to_csv(frame), "x.csv", ("account",))
    assert back["account"].tolist() == names
    assert back["amount"].tolist() == frame["amount"].tolist()


@pytest.mark.parametrize(
    ("content", "message"),
    [
        (b"", "is empty"),
        (b"\xff\xfe", "UTF-8"),
        (b"account\na\n", "missing amount"),
        (b"account,amount\na\n", "line 2: 1 values"),
        (b"account,amount\na,x\n", "column amount"),
        (b"account,amount,amount\na,1,2\n", "other columns"),
    ],
)
def test_a_damaged_table_is_told_in_words(content: bytes, message: str) -> None:
    with pytest.raises(DataError, match=message):
        from_csv(content, "rows.csv", ("account", "amount"))


def test_workbook_text_stays_text(exhibit: Exhibit) -> None:
    book = openpyxl.load_workbook(exhibit.folder / "claim.xlsx")
    assert book.sheetnames == ["Totals", "Rows", "Solves", "Rights", "About"]
    cells = [cell for sheet in book for line in sheet.iter_rows() for cell in line]
    assert not [cell for cell in cells if cell.data_type == "f"]
    hostile = [cell for cell in cells if cell.value == HOSTILE]
    assert hostile
    assert all(cell.data_type == "s" and cell.quotePrefix for cell in hostile)


@pytest.mark.parametrize("text", ["=1+1", "+1", "-1", "@SUM(A1)", "\t=1", "\r=1", "a\x00b", "x" * 40_000])
def test_workbook_takes_any_text(text: str) -> None:
    statement = {
        "scenario": {"name": text, "currency": "USD"},
        "claim": "posted",
        "against": "ac",
        "written_at": "now",
        "notes": [],
        "cautions": [],
        "totals": [{"account": text, "amount": 1.0, "material": True}],
    }
    book = openpyxl.load_workbook(io.BytesIO(workbook(statement, {})))
    cell = book["Totals"]["A2"]
    assert cell.data_type == "s"
    assert len(cell.value) <= 32_767


@given(st.text())
def test_markdown_text_holds_no_markup(text: str) -> None:
    shown = markdown_text(text)
    assert "<" not in shown
    assert "\n" not in shown
    assert not re.search(r"(?<!\\)[`*_\[\]|]", shown)


# --- writing ------------------------------------------------------------------------------------------------------


def write(solved: Solved, settlement: Settlement, folder: Path, **options: object) -> Exhibit:
    return write_exhibit(settlement, solved.run, solved.scenario, folder, written_at=WRITTEN, **options)  # type: ignore[arg-type]


def test_the_same_settlement_gives_the_same_digest(solved: Solved, settlement: Settlement, tmp_path: Path) -> None:
    first, second = (write(solved, settlement, tmp_path / name) for name in ("a", "b"))
    assert first.digest == second.digest


def test_an_exhibit_is_replaced_and_nothing_else_is(solved: Solved, settlement: Settlement, tmp_path: Path) -> None:
    folder = tmp_path / "claim"
    write(solved, settlement, folder)
    write(solved, settlement, folder)
    (folder / "my notes.txt").write_text("mine")
    with pytest.raises(DataError, match=r"my notes\.txt"):
        write(solved, settlement, folder)
    assert (folder / "my notes.txt").read_text() == "mine"
    other = tmp_path / "other"
    other.mkdir()
    (other / "thesis.txt").write_text("mine")
    with pytest.raises(DataError, match="is not an exhibit"):
        write(solved, settlement, other)
    assert [p.name for p in other.iterdir()] == ["thesis.txt"]
    (tmp_path / "file").write_text("")
    with pytest.raises(DataError, match="is not a folder"):
        write(solved, settlement, tmp_path / "file")


def test_a_failed_write_leaves_the_old_exhibit(
    solved: Solved, settlement: Settlement, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    folder = tmp_path / "claim"
    before = write(solved, settlement, folder)
    real = os.rename

    def fail_on_second(source: Path, target: Path) -> None:
        if Path(target) == folder and Path(source).name.startswith(".") and not (folder.exists()):
            calls.append(1)
            if len(calls) == 1:
                raise OSError(28, "no space left")
        real(source, target)

    calls: list[int] = []
    monkeypatch.setattr(os, "rename", fail_on_second)
    with pytest.raises(OSError, match="no space"):
        write(solved, settlement, folder)
    monkeypatch.undo()
    assert sorted(p.name for p in tmp_path.iterdir()) == ["claim"]
    names = {p.relative_to(folder).as_posix() for p in folder.rglob("*") if p.is_file()}
    assert names == set(before.files)


def test_a_changed_input_is_refused(solved: Solved, settlement: Settlement, tmp_path: Path) -> None:
    original_text = (solved.folder / "hubs.csv").read_bytes()
    try:
        (solved.folder / "hubs.csv").write_bytes(original_text + b"\n")
        with pytest.raises(DataError, match=r"hubs\.csv changed after"):
            write(solved, settlement, tmp_path / "claim")
        assert not (tmp_path / "claim").exists()
    finally:
        (solved.folder / "hubs.csv").write_bytes(original_text)


def test_without_network_no_confidential_file_is_copied(solved: Solved, settlement: Settlement, tmp_path: Path) -> None:
    exhibit = write(solved, settlement, tmp_path / "claim", with_network=False)
    inside = {name.removeprefix("inputs/") for name in exhibit.files if name.startswith("inputs/")}
    assert inside == {"scenario.toml", "posted.csv", "positions.csv", "rights.csv", "hubs.csv"}
    assert "no network, offers or loads" in (exhibit.folder / "claim.html").read_text(encoding="utf-8")


def test_an_exhibit_of_one_account_does_not_show_the_others(solved: Solved, tmp_path: Path) -> None:
    accounts = ["Vale Power"]
    own = settle(solved.run, solved.scenario, accounts=accounts, today=TODAY, write=False)
    exhibit = write(solved, own, tmp_path / "claim", accounts=accounts)
    for name in exhibit.files:
        content = (exhibit.folder / name).read_bytes()
        assert b"HYPERLINK" not in content
        assert RIGHT_TO_LEFT.encode() not in content
