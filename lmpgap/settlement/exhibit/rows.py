"""The tables of an exhibit as CSV: exact figures, and names that no spreadsheet takes for a formula."""

from __future__ import annotations

import csv
import io
from collections.abc import Sequence

import numpy as np
import pandas as pd

from lmpgap.errors import DataError
from lmpgap.settlement.positions import CONTRACT_COLUMNS, SHIFT
from lmpgap.settlement.rights import RIGHTS_COLUMNS

TEXT_COLUMNS = frozenset(
    {
        "account",
        "node",
        "component",
        "status",
        "hour_ending",
        "holder",
        "source",
        "sink",
        "kind",
        "formulation",
        "solver",
        "verdict",
        "reasons",
    }
)
TIME_COLUMNS = frozenset({"interval_start"})

ROW_COLUMNS = (
    *CONTRACT_COLUMNS,
    "hours",
    "rounding",
    "uniqueness_low",
    "uniqueness_high",
    "relaxation",
    "solver_residual",
    "energy_claim",
    "factor_claim",
    "factor_reference",
    "status",
)
"""Columns of rows.csv besides `hour_ending` and the `shift_` columns."""

SOLVE_COLUMNS = (
    "interval_start",
    "formulation",
    "status",
    "objective",
    "losses_mw",
    "solver",
    "primal_residual",
    "dual_residual",
    "duality_gap",
    "price_residual",
    "cone_slack",
    "loop_angle_deg",
    "cost_gap",
    "ac_mismatch_mw",
    "verdict",
    "reasons",
)

_FORMULA_STARTS = ("=", "+", "-", "@", "\t", "\r")


def harmless(text: str) -> str:
    """Return text that a spreadsheet shows instead of computing: an apostrophe goes before what looks like a formula.

    A leading apostrophe is doubled, so that `original` gives every text back.

    Examples
    --------
    >>> harmless("=1+2"), harmless("'x"), harmless("Fernhill")
    ("'=1+2", "''x", 'Fernhill')
    """
    return f"'{text}" if text.startswith((*_FORMULA_STARTS, "'")) else text


def original(text: str) -> str:
    """Undo `harmless`."""
    return text[1:] if text.startswith("'") else text


def to_csv(frame: pd.DataFrame) -> bytes:
    """Return a table as UTF-8 CSV with exact figures and times in ISO 8601 with offset."""
    out = io.StringIO()
    # Lines end as RFC 4180 has it; the writer then quotes a stray carriage return in a name too.
    writer = csv.writer(out, lineterminator="\r\n")
    writer.writerow(frame.columns)
    writer.writerows(zip(*(_cells(frame[column]) for column in frame.columns), strict=True))
    return out.getvalue().encode("utf-8")


def _cells(column: pd.Series) -> Sequence[str]:
    if column.name in TIME_COLUMNS:
        return [value.isoformat() for value in column]
    if column.name in TEXT_COLUMNS:
        return [harmless("" if pd.isna(value) else str(value)) for value in column]
    return ["" if value != value else repr(value) for value in column.astype(float).tolist()]


def from_csv(content: bytes, name: str, required: Sequence[str]) -> pd.DataFrame:
    """Return a table that `to_csv` wrote.

    Raises
    ------
    DataError
        When the file is not such a table, naming the first place that is wrong.
    """
    try:
        lines = list(csv.reader(io.StringIO(content.decode("utf-8"), newline="")))
    except (UnicodeDecodeError, csv.Error) as error:
        raise DataError(f"{name} is not a table in UTF-8 ({error})") from error
    if not lines:
        raise DataError(f"{name} is empty")
    header = lines[0]
    missing = [column for column in required if column not in header]
    if missing or len(set(header)) != len(header):
        raise DataError(f"{name} has other columns than an exhibit writes: missing {', '.join(missing) or 'none'}")
    for number, line in enumerate(lines[1:], start=2):
        if len(line) != len(header):
            raise DataError(f"{name}, line {number}: {len(line)} values under {len(header)} columns")
    columns = list(zip(*lines[1:], strict=True)) or [()] * len(header)
    return pd.DataFrame({column: _values(values, column, name) for column, values in zip(header, columns, strict=True)})


def _values(values: Sequence[str], column: str, name: str) -> pd.Series | pd.DatetimeIndex | np.ndarray:
    if column in TEXT_COLUMNS:
        return pd.Series([original(value) for value in values], dtype="str")
    try:
        if column in TIME_COLUMNS:
            return pd.DatetimeIndex(pd.to_datetime(list(values), utc=True, format="ISO8601")).as_unit("us")
        return np.array([float(value) if value else np.nan for value in values], dtype=float)
    except ValueError as error:
        raise DataError(f"{name}, column {column}: {error}") from error


def exhibit_rows(rows: pd.DataFrame, hour_ending: pd.Series) -> pd.DataFrame:
    """Return settlement rows as rows.csv has them; ``hour_ending`` labels each row."""
    shifts = [column for column in rows.columns if column.startswith(SHIFT)]
    renamed = rows.rename(columns={"solver": "solver_residual"})
    table = renamed[[*ROW_COLUMNS[:-1], *shifts, ROW_COLUMNS[-1]]]
    table.insert(2, "hour_ending", hour_ending.to_numpy())
    return table.reset_index(drop=True)


def settlement_rows(table: pd.DataFrame) -> pd.DataFrame:
    """Return rows.csv as settlement rows."""
    return table.rename(columns={"solver_residual": "solver"})


def exhibit_rights(rights: pd.DataFrame) -> pd.DataFrame:
    """Return settled rights as rights.csv has them."""
    return rights[list(RIGHTS_COLUMNS)].reset_index(drop=True)


def exhibit_solves(solves: pd.DataFrame, intervals: pd.DatetimeIndex, formulations: Sequence[str]) -> pd.DataFrame:
    """Return the certificates of the solves behind the rows, as solves.csv has them."""
    own = solves[solves["interval_start"].isin(intervals) & solves["formulation"].isin(formulations)]
    own = own.reindex(columns=list(SOLVE_COLUMNS))
    return own.sort_values(["interval_start", "formulation"], kind="stable", ignore_index=True)
