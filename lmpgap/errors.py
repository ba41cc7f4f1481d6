"""Every error that lmpgap raises on purpose.

.. code-block:: text

    LmpgapError
    ├── DataError               the inputs: carries every fault found, not only the first
    │   ├── ScenarioError       a scenario folder
    │   └── RunFolderError      a run folder: damaged, in use, or made with other settings
    ├── SolveError              a dispatch that has no usable solution (an infeasible hour is a result, not an error)
    │   └── NumericalError      the solver stopped without an answer
    ├── NotIdentifiableError    the data do not determine the figure that was asked for
    └── MissingExtraError       an optional dependency is not installed
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass


class LmpgapError(Exception):
    """Root of all errors that a user of lmpgap may meet."""


@dataclass(frozen=True, kw_only=True)
class Fault:
    """One fault in the inputs, with its place and what would be allowed there.

    Attributes
    ----------
    table
        Table or file name as the user knows it, e.g. ``"branches.csv"``.
    message
        What is wrong, in words.
    row
        Line number in the file as an editor shows it (the header is line 1), or the row of a Parquet file
        counted from 1; ``None`` if the whole table is meant.
    column
        Column or key; ``None`` if the row as a whole is meant.
    value
        The offending value as read.
    allowed
        What would be accepted.
    kind
        Short name of the sort of fault, by which long lists are cut; empty: the message itself.
    """

    table: str
    message: str
    row: int | None = None
    column: str | None = None
    value: str | None = None
    allowed: str | None = None
    kind: str = ""

    def __str__(self) -> str:
        place = self.table
        if self.row is not None:
            place += f", {'row' if self.table.endswith('.parquet') else 'line'} {self.row}"
        if self.column is not None:
            place += f", column {self.column}"
        text = f"{place}: {self.message}"
        if self.value is not None:
            text += f" (found {self.value!r})"
        if self.allowed is not None:
            text += f"; allowed: {self.allowed}"
        return text


FAULTS_SHOWN = 20
"""Faults of one kind in one column that a message shows; the object holds all of them."""


class DataError(LmpgapError):
    """The inputs cannot be used; ``faults`` lists everything that was found in one go."""

    def __init__(self, summary: str, faults: Iterable[Fault] = ()) -> None:
        self.summary = summary
        self.faults = tuple(faults)
        super().__init__("\n".join([summary, *(f"  - {line}" for line in fault_lines(self.faults))]))


def fault_lines(faults: Iterable[Fault], limit: int = FAULTS_SHOWN) -> list[str]:
    """Return the faults as text, one line each; of each kind in a column the first ``limit`` and a count."""
    groups: dict[tuple[str, str | None, str], list[Fault]] = {}
    for fault in faults:
        groups.setdefault((fault.table, fault.column, fault.kind or fault.message), []).append(fault)
    lines = []
    for (table, column, _), group in groups.items():
        lines += [str(fault) for fault in group[:limit]]
        if len(group) > limit:
            place = table if column is None else f"{table}, column {column}"
            lines.append(f"{place}: and {len(group) - limit:,} more like the last one")
    return lines


class ScenarioError(DataError):
    """A scenario folder that cannot be solved as it stands."""


class RunFolderError(DataError):
    """A run folder that is damaged, in use by another run, or made with other settings."""


class SolveError(LmpgapError):
    """A dispatch without a usable solution."""


class NumericalError(SolveError):
    """The solver stopped without an answer."""


class NotIdentifiableError(LmpgapError):
    """The data do not determine the requested figure."""


class MissingExtraError(LmpgapError):
    """An optional dependency is missing; the message names the extra that brings it."""

    def __init__(self, package: str, extra: str) -> None:
        super().__init__(f"this needs the package {package!r}, which is not installed: pip install 'lmpgap[{extra}]'")
