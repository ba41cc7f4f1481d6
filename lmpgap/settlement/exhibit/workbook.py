"""The exhibit as a workbook, safe against formula injection: text stays text."""

from __future__ import annotations

import io
import re
from collections.abc import Mapping
from typing import Any

import pandas as pd

from lmpgap.errors import DataError, MissingExtraError
from lmpgap.settlement.exhibit.rows import TEXT_COLUMNS, TIME_COLUMNS

ROWS_SHEET = "Rows"
MOST_ROWS = 1_048_575
"""Rows of a worksheet below its header."""

_NOT_IN_XML = re.compile("[\x00-\x08\x0b\x0c\x0e-\x1f\ud800-\udfff\ufffe\uffff]")


def workbook(statement: Mapping[str, Any], tables: Mapping[str, pd.DataFrame]) -> bytes:
    """Return a workbook with the totals and one sheet per table.

    Parameters
    ----------
    statement
        From `lmpgap.settlement.exhibit.statement.build_statement`.
    tables
        By sheet name. Times are written in UTC without zone, as workbooks know none.

    Raises
    ------
    MissingExtraError
        Without openpyxl.
    DataError
        When a table has more rows than a sheet can hold.
    """
    try:
        from openpyxl import Workbook
    except ImportError as error:
        raise MissingExtraError("openpyxl", "xlsx") from error
    book = Workbook(write_only=True)
    totals = pd.DataFrame(statement["totals"])
    about = pd.DataFrame(
        [
            {"text": "scenario", "value": statement["scenario"]["name"]},
            {"text": "claim", "value": statement["claim"]},
            {"text": "against", "value": statement["against"]},
            {"text": "currency", "value": statement["scenario"]["currency"]},
            {"text": "written at", "value": statement["written_at"]},
            *({"text": "note", "value": note} for note in statement["notes"]),
            *({"text": "caution", "value": caution} for caution in statement["cautions"]),
        ]
    )
    for name, frame in {"Totals": totals, **tables, "About": about}.items():
        if len(frame) > MOST_ROWS:
            raise DataError(
                f"{name} has {len(frame):,} rows, more than a worksheet holds: leave the workbook out, rows.csv has all"
            )
        _add_sheet(book, name, frame)
    out = io.BytesIO()
    book.save(out)
    return out.getvalue()


def _add_sheet(book: Any, name: str, frame: pd.DataFrame) -> None:
    from openpyxl.styles import Font
    from openpyxl.utils import get_column_letter

    sheet = book.create_sheet(name)
    sheet.freeze_panes = "A2"
    for number, column in enumerate(frame.columns, start=1):
        sheet.column_dimensions[get_column_letter(number)].width = max(12, min(28, len(str(column)) + 3))
    bold = Font(bold=True)
    header = [_text_cell(sheet, str(column)) for column in frame.columns]
    for cell in header:
        cell.font = bold
    sheet.append(header)
    for values in frame.itertuples(index=False, name=None):
        sheet.append([_cell(sheet, column, value) for column, value in zip(frame.columns, values, strict=True)])


def _cell(sheet: Any, column: str, value: Any) -> Any:
    if value is None or value != value:
        return None
    if isinstance(value, pd.Timestamp):
        return value.tz_convert("UTC").tz_localize(None).to_pydatetime() if value.tz else value.to_pydatetime()
    if column not in TEXT_COLUMNS and column not in TIME_COLUMNS and not isinstance(value, str):
        return bool(value) if isinstance(value, bool) else float(value)
    return _text_cell(sheet, str(value))


def _text_cell(sheet: Any, text: str) -> Any:
    """Return a cell that is text whatever it begins with, also after it was edited."""
    from openpyxl.cell import WriteOnlyCell

    cell = WriteOnlyCell(sheet, value="")
    cell.value = _NOT_IN_XML.sub("\ufffd", text)[:32_767]
    # openpyxl takes what begins with "=" for a formula; the type and the quote mark make it text again.
    cell.data_type = "s"
    if text.startswith(("=", "+", "-", "@", "\t", "\r")):
        cell.quotePrefix = True
    return cell


def rows_of_workbook(content: bytes) -> pd.DataFrame:
    """Return the sheet `ROWS_SHEET` of a workbook that `workbook` wrote.

    Raises
    ------
    MissingExtraError
        Without openpyxl.
    DataError
        When it cannot be read.
    """
    try:
        from openpyxl import load_workbook
    except ImportError as error:
        raise MissingExtraError("openpyxl", "xlsx") from error
    try:
        book = load_workbook(io.BytesIO(content), read_only=True)
        lines = list(book[ROWS_SHEET].values)
        book.close()
    except Exception as error:  # a damaged workbook raises whatever its parser meets first
        raise DataError(f"claim.xlsx cannot be read ({error})") from error
    if not lines:
        raise DataError(f"claim.xlsx has an empty sheet {ROWS_SHEET}")
    return pd.DataFrame(lines[1:], columns=[str(name) for name in lines[0]])
