"""What a table definition is made of: columns with type, unit, range, default and meaning.

`lmpgap.scenario.tables.TABLES` holds the definitions themselves; reading, validation, messages and the
documentation page all work from them.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal

ColumnKind = Literal["text", "number", "integer", "flag", "time", "choice"]

KIND_WORDS: dict[ColumnKind, str] = {
    "text": "text",
    "number": "number",
    "integer": "whole number",
    "flag": "true or false",
    "time": "time",
    "choice": "one of",
}

TIME_FORMAT = "ISO 8601 with an offset, e.g. 2026-03-08T01:00:00-07:00 (the start of the interval)"


@dataclass(frozen=True, kw_only=True)
class Column:
    """One column of a contract table.

    Attributes
    ----------
    name
        Header in the file.
    kind
        ``"text"``, ``"number"``, ``"integer"``, ``"flag"``, ``"time"`` or ``"choice"``.
    meaning
        What it says, in a sentence.
    unit
        Unit in brackets on the documentation page; empty for none.
    required
        The column must be there and no cell may be empty.
    default
        Value of an empty cell and of a missing optional column; ``None`` means "none" (``nan`` for a number,
        no time, empty text).
    default_words
        How the default is told on the documentation page where the value does not speak for itself.
    minimum, maximum
        Allowed range, limits included.
    above
        Lower limit that is itself not allowed.
    choices
        Allowed values of a ``"choice"``.
    references
        ``"table.column"`` names, in one of which each value must occur.
    loose_reference
        A value that occurs in none of the references is reported as a warning and kept.
    """

    name: str
    kind: ColumnKind
    meaning: str
    unit: str = ""
    required: bool = True
    default: str | float | bool | None = None
    default_words: str = ""
    minimum: float | None = None
    maximum: float | None = None
    above: float | None = None
    choices: tuple[str, ...] = ()
    references: tuple[str, ...] = ()
    loose_reference: bool = False

    @property
    def allowed(self) -> str:
        """What a cell may hold, in words."""
        if self.kind == "choice":
            return " or ".join(choice or "empty" for choice in self.choices)
        if self.kind == "time":
            return TIME_FORMAT
        if self.kind == "flag":
            return "true or false"
        if self.kind == "text":
            return "a name"
        words = "a whole number" if self.kind == "integer" else "a number"
        if self.above is not None:
            words += f" above {format_number(self.above)}"
        if self.minimum is not None and self.maximum is not None:
            words += f" from {format_number(self.minimum)} to {format_number(self.maximum)}"
        elif self.minimum is not None:
            words += f" not below {format_number(self.minimum)}"
        elif self.maximum is not None:
            words += f" {'and ' if self.above is not None else ''}not above {format_number(self.maximum)}"
        if self.unit:
            words += f" [{self.unit}]"
        return words

    @property
    def default_text(self) -> str:
        """The default as the documentation page shows it; empty for a required column."""
        if self.required:
            return ""
        if self.default_words:
            return self.default_words
        if self.default is None or self.default == "":
            return "none"
        if isinstance(self.default, bool):
            return "true" if self.default else "false"
        if isinstance(self.default, float):
            return format_number(self.default)
        return str(self.default)


@dataclass(frozen=True, kw_only=True)
class Table:
    """One table of the scenario folder.

    Attributes
    ----------
    name
        File name without its ending.
    meaning
        What the table is for.
    columns
        In the order of the documentation page.
    key
        Columns that together occur once; empty where repetition is allowed.
    required
        The scenario cannot be read without it.
    """

    name: str
    meaning: str
    columns: tuple[Column, ...]
    key: tuple[str, ...] = ()
    required: bool = False

    def __post_init__(self) -> None:
        """Refuse a key that is not made of the table's own columns."""
        names = self.column_names
        if missing := [name for name in self.key if name not in names]:
            raise ValueError(f"table {self.name}: key {missing} is not among the columns")

    @property
    def column_names(self) -> tuple[str, ...]:
        """Names of the columns."""
        return tuple(column.name for column in self.columns)

    def column(self, name: str) -> Column:
        """Return one column's definition."""
        return next(column for column in self.columns if column.name == name)


def format_number(value: float) -> str:
    """Return a number as short as it can be told."""
    if math.isfinite(value) and value == int(value) and abs(value) < 1e15:
        return str(int(value))
    return repr(value)
