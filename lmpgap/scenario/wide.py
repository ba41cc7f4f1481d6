"""Wide price files into long ones: a column per node, or a column per hour of the day."""

from __future__ import annotations

import re
from dataclasses import dataclass

import numpy as np

from lmpgap.scenario.cells import as_text
from lmpgap.scenario.faults import FaultLog, clip_text, suggestion
from lmpgap.scenario.files import RawTable
from lmpgap.scenario.network import IntArray
from lmpgap.scenario.typed import TextColumn

COMPONENTS = ("lmp", "energy_component", "congestion_component", "loss_component")
_LEADING = ("interval_start", "date", "hour", "node", "component", "version", "published_at")
_HOUR = re.compile(r"(?:HE|H|hour)?[ _]?0*(\d{1,2})(\*?)", re.IGNORECASE)


@dataclass(frozen=True)
class _Melted:
    """Cells below each other: the row each one comes from, and what its column header says."""

    row: IntArray
    header: list[str]
    header_code: IntArray
    value: np.ndarray[tuple[int], np.dtype[np.object_]]


def widen_to_long(raw: RawTable, own: dict[str, str], log: FaultLog) -> RawTable | None:
    """Return a wide table as a long one with the contract's columns, or ``None`` with faults.

    Two shapes are told apart by whether there is a column ``node``. Without it every other column is a node
    and a row an interval; with it every other column is an hour of the day in ``date``. A column ``component``
    says which part of the price a row holds; without it rows hold ``lmp``. Empty cells are left out.

    Parameters
    ----------
    own
        The operator's own name by contract name.
    """
    contract = {theirs: ours for ours, theirs in own.items()}
    names = [contract.get(name, name) if contract.get(name, name) in _LEADING else name for name in raw.names]
    twice = sorted({name for name in names if names.count(name) > 1 and name})
    if twice:
        log.fault(raw.file, "the column is there twice", column=clip_text(twice[0]), kind="column twice")
        return None
    lead = {name: i for i, name in enumerate(names) if name in _LEADING}
    across = [i for i, name in enumerate(names) if name not in _LEADING and name]
    by_hour = "node" in lead
    needed = ("date",) if by_hour else ("interval_start",)
    for name in needed:
        if name not in lead and not (name == "interval_start" and "date" in lead and "hour" in lead):
            log.fault(
                raw.file,
                f"the column {own.get(name, name)!r} is missing from the wide table"
                + suggestion(own.get(name, name), raw.names),
                allowed="node and date with a column per hour, or interval_start with a column per node",
                kind="missing column",
            )
            return None
    if by_hour:
        strange = [names[i] for i in across if not _HOUR.fullmatch(names[i][:20])]
        for name in strange:
            log.fault(
                raw.file,
                f"the column {clip_text(name)!r} is not an hour of the day" + suggestion(name, _LEADING),
                allowed="hours such as HE01 to HE24, HE02* for the second of two equal ones, or 1 to 25",
                kind="unknown column",
            )
        if strange:
            return None
    if not across:
        log.fault(raw.file, f"the wide table has no column per {'hour' if by_hour else 'node'}")
        return None
    melted = _melt(raw, names, across, log)
    if melted is None:
        return None
    return _to_components(raw, lead, melted, contract, by_hour, log)


def _melt(raw: RawTable, names: list[str], across: list[int], log: FaultLog) -> _Melted | None:
    cells = np.stack([np.asarray(as_text(raw.columns[i]).tolist(), object) for i in across])
    # Row by row, so that the order of hours within a file stays the order of the cells.
    row, column = np.nonzero((cells != "").T)
    return _Melted(row.astype(np.int64), [names[i] for i in across], column.astype(np.int64), cells[column, row])


def _text(raw: RawTable, index: int) -> list[str]:
    return as_text(raw.columns[index]).tolist()


def _to_components(
    raw: RawTable, lead: dict[str, int], melted: _Melted, contract: dict[str, str], by_hour: bool, log: FaultLog
) -> RawTable | None:
    component = np.zeros(melted.row.size, dtype=np.int64)
    if "component" in lead:
        texts = _text(raw, lead["component"])
        of_row = np.zeros(len(texts), dtype=np.int64)
        bad = []
        for row, text in enumerate(texts):
            name = contract.get(text, text)
            if name in COMPONENTS:
                of_row[row] = COMPONENTS.index(name)
            else:
                bad.append(row)
        log.rows(
            raw.file,
            "component",
            np.asarray(bad, dtype=np.int64),
            raw.lines,
            lambda row: "is not a part of the price" + suggestion(texts[row], [*COMPONENTS, *contract]),
            column="component",
            value=lambda row: texts[row],
            allowed=" or ".join([*COMPONENTS, "a name that [posted.columns] maps to one of them"]),
        )
        if bad:
            return None
        component = of_row[melted.row]
    identity = [name for name in ("interval_start", "date", "hour", "node", "version", "published_at") if name in lead]
    codes = []
    for name in identity:
        _, code = np.unique(np.asarray(_text(raw, lead[name]), dtype=object), return_inverse=True)
        codes.append(np.asarray(code).reshape(-1)[melted.row])
    codes.append(melted.header_code)
    series = np.zeros(melted.row.size, dtype=np.int64)
    for code in codes:
        _, series = np.unique(series * (int(code.max(initial=0)) + 1) + code, return_inverse=True)
        series = np.asarray(series).reshape(-1)
    # The second row with everything equal is another hour (clocks going back) or a repetition.
    turn = _turn(series * len(COMPONENTS) + component)
    _, first, place = np.unique(series * (int(turn.max(initial=0)) + 1) + turn, return_index=True, return_inverse=True)
    place = np.asarray(place).reshape(-1)
    by_file_order = np.argsort(first, kind="stable")
    rank = np.empty(first.size, dtype=np.int64)
    rank[by_file_order] = np.arange(first.size)
    place, first = rank[place], first[by_file_order]
    values = np.full((len(COMPONENTS), first.size), "", dtype=object)
    values[component, place] = melted.value
    rows = melted.row[first]
    headers = [melted.header[code] for code in melted.header_code[first].tolist()]
    columns: dict[str, list[str]] = {}
    for name in identity:
        texts = _text(raw, lead[name])
        columns[name] = [texts[row] for row in rows.tolist()]
    if by_hour:
        columns["hour"] = headers
    else:
        columns["node"] = headers
    for i, name in enumerate(COMPONENTS):
        if name == "lmp" or np.any(values[i] != ""):
            columns[name] = values[i].tolist()
    lines = raw.lines
    return RawTable(
        raw.file,
        tuple(columns),
        tuple(TextColumn.of(texts) for texts in columns.values()),
        lambda chosen: lines(rows[chosen]),
        raw.comma_decimals,
    )


def _turn(key: IntArray) -> IntArray:
    """Return how often each key stood before, in order."""
    order = np.argsort(key, kind="stable")
    fresh = np.ones(order.size, dtype=bool)
    fresh[1:] = key[order][1:] != key[order][:-1]
    turn = np.empty(order.size, dtype=np.int64)
    if order.size:
        turn[order] = np.arange(order.size) - np.flatnonzero(fresh)[np.cumsum(fresh) - 1]
    return turn
