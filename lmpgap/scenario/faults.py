"""Collecting faults and warnings, and suggesting the name that was probably meant."""

from __future__ import annotations

import difflib
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass, field

import numpy as np

from lmpgap.errors import Fault
from lmpgap.scenario.network import IntArray

KEPT_PER_KIND = 10_000
"""Fault objects that are kept of one kind in one column; the rest is counted in one closing entry, so that a
table of a million bad rows cannot fill the memory."""

SUGGESTED_VALUES = 20
"""Distinct unknown values of one column for which a nearest name is looked up; the search is slow."""


@dataclass
class FaultLog:
    """Faults (the scenario cannot be used) and warnings (it can, but look at this), in order of discovery."""

    faults: list[Fault] = field(default_factory=list)
    warnings: list[Fault] = field(default_factory=list)

    def fault(
        self,
        table: str,
        message: str,
        *,
        row: int | None = None,
        column: str | None = None,
        value: str | None = None,
        allowed: str | None = None,
        kind: str = "",
    ) -> None:
        """Add one fault."""
        self.faults.append(
            Fault(table=table, message=message, row=row, column=column, value=value, allowed=allowed, kind=kind)
        )

    def warn(
        self,
        table: str,
        message: str,
        *,
        row: int | None = None,
        column: str | None = None,
        value: str | None = None,
        kind: str = "",
    ) -> None:
        """Add one warning."""
        self.warnings.append(Fault(table=table, message=message, row=row, column=column, value=value, kind=kind))

    def rows(
        self,
        table: str,
        kind: str,
        rows: IntArray,
        lines: Callable[[IntArray], IntArray],
        message: str | Callable[[int], str],
        *,
        column: str | None = None,
        value: Callable[[int], str] | None = None,
        allowed: str | None = None,
        warning: bool = False,
    ) -> None:
        """Add one entry per row.

        Parameters
        ----------
        rows
            Zero-based rows of the table.
        lines
            Gives the line in the file for rows.
        message, value
            Text, or a function of the row that gives it.
        """
        if rows.size == 0:
            return
        target = self.warnings if warning else self.faults
        kept = rows[:KEPT_PER_KIND]
        for row, line in zip(kept.tolist(), lines(kept).tolist(), strict=True):
            target.append(
                Fault(
                    table=table,
                    message=message if isinstance(message, str) else message(row),
                    row=line,
                    column=column,
                    value=None if value is None else clip_text(value(row)),
                    allowed=allowed,
                    kind=kind,
                )
            )
        if rows.size > kept.size:
            target.append(
                Fault(
                    table=table,
                    message=f"and {rows.size - kept.size:,} more rows with this fault",
                    column=column,
                    kind=f"{kind} (rest)",
                )
            )


def nearest(name: str, known: Iterable[str]) -> str | None:
    """Return the known name that is most like ``name``, or ``None`` when none is close."""
    by_lower: dict[str, str] = {}
    for candidate in known:
        by_lower.setdefault(candidate.casefold(), candidate)
    key = name.strip().casefold()[:200]
    if key in by_lower:
        return by_lower[key]
    found = difflib.get_close_matches(key, by_lower, n=1, cutoff=0.6)
    if found:
        return by_lower[found[0]]
    # "kv" for "base_kv", "rating" for "normal_rating_mva": part of a name, which the ratio alone misses.
    if len(key) >= 2:
        inside = [candidate for candidate in by_lower if key in candidate.split("_") or key in candidate]
        if len(inside) == 1 or (inside and len(key) >= 4):
            return by_lower[min(inside, key=len)]
    return None


def suggestion(name: str, known: Iterable[str]) -> str:
    """Return ``'; did you mean ...?'`` or an empty text."""
    found = nearest(name, known)
    return "" if found is None else f"; did you mean {found!r}?"


def clip_text(text: str, length: int = 80) -> str:
    """Return the text, cut if it is too long for a message."""
    return text if len(text) <= length else text[: length - 3] + "..."


def listing(names: Sequence[str], limit: int = 5, total: int | None = None) -> str:
    """Return ``a, b, c and 7 more``; ``total`` is the count where ``names`` are only the first ones."""
    total = len(names) if total is None else total
    shown = ", ".join(clip_text(name, 40) for name in names[:limit])
    return shown if total <= limit else f"{shown} and {total - limit:,} more"


def as_rows(mask: np.ndarray[tuple[int], np.dtype[np.bool_]]) -> IntArray:
    """Return the positions where the mask is true."""
    return np.flatnonzero(mask).astype(np.int64)


def rows_in_words(count: int) -> str:
    """Return ``1 row`` or ``2,345 rows``."""
    return "1 row" if count == 1 else f"{count:,} rows"
