"""What must hold between rows and between tables, beyond what each cell must hold."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from lmpgap.scenario.faults import SUGGESTED_VALUES, FaultLog, as_rows, clip_text, rows_in_words, suggestion
from lmpgap.scenario.network import BoolArray, IntArray
from lmpgap.scenario.settings import ScenarioSettings
from lmpgap.scenario.tables import TABLES
from lmpgap.scenario.typed import ColumnTable, TextColumn

_CURVE_TOLERANCE_MW = 1e-6
_CURVE_TOLERANCE_PRICE = 1e-9


def check_tables(tables: Mapping[str, ColumnTable], settings: ScenarioSettings, log: FaultLog) -> None:
    """Report every broken rule; tables that could not be read are absent from ``tables``."""
    for table in tables.values():
        _check_key(table, log)
        _check_references(table, tables, log)
    if "buses" in tables:
        _check_buses(tables["buses"], log)
        _check_reference_setting(tables, settings, log)
    if "branches" in tables:
        _check_branches(tables["branches"], log)
    if "resources" in tables:
        _check_order(tables["resources"], "eco_min_mw", "eco_max_mw", log)
        _check_order(tables["resources"], "q_min_mvar", "q_max_mvar", log)
    if "offers" in tables:
        _check_offers(tables["offers"], log)
    if "availability" in tables:
        _check_order(tables["availability"], "eco_min_mw", "eco_max_mw", log)
    if "interface_limits" in tables:
        _check_interface_limits(tables["interface_limits"], log)
    if "outages" in tables:
        _check_outages(tables["outages"], tables, log)
    for name, group in (("hubs", "hub"), ("reference_weights", None)):
        if name in tables:
            _check_weights(tables[name], group, log)
    if "hubs" in tables and "buses" in tables:
        _check_hub_names(tables["hubs"], tables["buses"], log)


def row_codes(table: ColumnTable, names: tuple[str, ...]) -> IntArray:
    """Return a number per row that is equal where the columns are, shape (n_row,)."""
    code = np.zeros(table.n_row, dtype=np.int64)
    size = 1
    for name in names:
        column = table.columns[name]
        if isinstance(column, TextColumn):
            part, count = column.codes, len(column.values)
        else:
            values = column.view(np.int64) if column.dtype.kind == "M" else column
            distinct, inverse = np.unique(values, return_inverse=True)
            part, count = np.asarray(inverse).reshape(-1), distinct.size
        count = max(count, 1)
        if size > 2**62 // count:
            distinct, code = np.unique(code, return_inverse=True)
            size = distinct.size
        code = code * count + part
        size *= count
    return code


def repeated_rows(table: ColumnTable, names: tuple[str, ...]) -> tuple[IntArray, IntArray]:
    """Return the rows whose key stood before, and for each the row where it stood first."""
    code = row_codes(table, names)
    order = np.argsort(code, kind="stable")
    ordered = code[order]
    fresh = np.ones(order.size, dtype=bool)
    fresh[1:] = ordered[1:] != ordered[:-1]
    first = order[np.flatnonzero(fresh)][np.cumsum(fresh) - 1] if order.size else order
    again = ~fresh
    rows, originals = order[again], first[again]
    by_row = np.argsort(rows)
    return rows[by_row], originals[by_row]


def _check_key(table: ColumnTable, log: FaultLog) -> None:
    key = table.spec.key
    if not key or table.n_row < 2:
        return
    rows, originals = repeated_rows(table, key)
    if rows.size == 0:
        return
    where = dict(zip(rows.tolist(), table.lines(originals).tolist(), strict=True))
    shown = tuple(name for name in key if name in table.given)
    log.rows(
        table.file,
        "repeated key",
        rows,
        table.lines,
        lambda row: f"repeats line {where[row]}: {', '.join(shown)} must be there once",
        column=shown[0] if len(shown) == 1 else None,
        value=lambda row: ", ".join(_show(table, name, row) for name in shown),
    )


def _show(table: ColumnTable, name: str, row: int) -> str:
    column = table.columns[name]
    if isinstance(column, TextColumn):
        return column.at(row)
    return f"{column[row]}Z" if column.dtype.kind == "M" else str(column[row])


def _check_references(table: ColumnTable, tables: Mapping[str, ColumnTable], log: FaultLog) -> None:
    for column in table.spec.columns:
        if not column.references or table.n_row == 0:
            continue
        targets = [reference.split(".") for reference in column.references]
        if any(target not in tables for target, _ in targets):
            continue  # The table that could not be read has its own faults.
        known: dict[str, None] = {}
        for target, name in targets:
            known.update(dict.fromkeys(tables[target].text(name).values))
        names = [target for target, _ in targets]
        _report_unknown(table, column.name, known, names, log, warning=column.loose_reference)


def _report_unknown(
    table: ColumnTable,
    name: str,
    known: Mapping[str, None],
    targets: list[str],
    log: FaultLog,
    *,
    warning: bool = False,
    within: BoolArray | None = None,
) -> None:
    text = table.text(name)
    strange = np.asarray([value not in known and value != "" for value in text.values], dtype=bool)
    if not strange.any():
        return
    bad = strange[text.codes]
    if within is not None:
        bad &= within
    hints: dict[int, str] = {}

    def message(row: int) -> str:
        code = int(text.codes[row])
        if code not in hints:
            hints[code] = suggestion(text.values[code], known) if len(hints) < SUGGESTED_VALUES else ""
        return f"is not in {' or '.join(targets)}" + hints[code]

    rows = as_rows(bad)
    if warning:
        # One warning per unknown name, at its first row: the rows are kept, so a list of them helps nobody.
        _, first = np.unique(text.codes[rows], return_index=True)
        count = np.bincount(text.codes[rows], minlength=len(text.values))
        log.rows(
            table.file,
            "unknown name",
            np.sort(rows[first]),
            table.lines,
            lambda row: f"{message(row)} (kept; {rows_in_words(count[text.codes[row]])})",
            column=name,
            value=text.at,
            warning=True,
        )
    else:
        log.rows(table.file, "unknown name", rows, table.lines, message, column=name, value=text.at)


def _check_order(table: ColumnTable, low: str, high: str, log: FaultLog) -> None:
    lower, upper = table.number(low), table.number(high)
    with np.errstate(invalid="ignore"):
        bad = lower > upper
    log.rows(
        table.file,
        "order",
        as_rows(bad),
        table.lines,
        lambda row: f"is above {high} = {upper[row]:g}",
        column=low,
        value=lambda row: f"{lower[row]:g}",
        allowed=f"not above {high}",
    )


def _check_buses(table: ColumnTable, log: FaultLog) -> None:
    if table.n_row == 0:
        log.fault(table.file, "has no rows: a network needs at least one bus")
    _check_order(table, "v_min_pu", "v_max_pu", log)


def _check_branches(table: ColumnTable, log: FaultLog) -> None:
    _check_order(table, "angle_min_deg", "angle_max_deg", log)
    start, end = table.text("from_bus"), table.text("to_bus")
    place = {value: i for i, value in enumerate(start.values)}
    loops = start.codes == end.positions(place)
    log.rows(
        table.file,
        "same bus",
        as_rows(loops),
        table.lines,
        "connects a bus with itself",
        column="to_bus",
        value=end.at,
        allowed="another bus than from_bus",
    )
    r, x = table.number("r_pu"), table.number("x_pu")
    log.rows(
        table.file,
        "no impedance",
        as_rows(x == 0),
        table.lines,
        lambda row: "is zero" + (", and so is r_pu" if r[row] == 0 else ""),
        column="x_pu",
        value=lambda row: f"{x[row]:g}",
        allowed="a reactance other than zero; join the buses where there is none",
    )


def _check_offers(table: ColumnTable, log: FaultLog) -> None:
    start, end = table.number("from_mw"), table.number("to_mw")
    price, end_price = table.number("price"), table.number("end_price")
    end_price = np.where(np.isnan(end_price), price, end_price)
    log.rows(
        table.file,
        "order",
        as_rows(end < start),
        table.lines,
        lambda row: f"is below from_mw = {start[row]:g}",
        column="to_mw",
        value=lambda row: f"{end[row]:g}",
        allowed="not below from_mw",
    )
    log.rows(
        table.file,
        "falling price",
        as_rows(end_price < price - _CURVE_TOLERANCE_PRICE),
        table.lines,
        lambda row: f"is below price = {price[row]:g}: marginal prices never fall along a curve",
        column="end_price",
        value=lambda row: f"{end_price[row]:g}",
        allowed="not below price",
    )
    curve = row_codes(table, ("resource", "interval_start"))
    segment = np.asarray(table.columns["segment"])
    order = np.lexsort((segment, curve))
    before, after = order[:-1], order[1:]
    joined = curve[before] == curve[after]
    gap = joined & (np.abs(start[after] - end[before]) > _CURVE_TOLERANCE_MW)
    previous = np.zeros(table.n_row, dtype=np.int64)
    previous[after] = before
    log.rows(
        table.file,
        "segment gap",
        np.sort(after[gap]),
        table.lines,
        lambda row: (
            (
                f"leaves a gap: the segment before it ends at {end[previous[row]]:g} MW"
                if start[row] > end[previous[row]]
                else f"overlaps the segment before it, which ends at {end[previous[row]]:g} MW"
            )
            + f" (line {table.lines(previous[[row]])[0]})"
        ),
        column="from_mw",
        value=lambda row: f"{start[row]:g}",
        allowed="where the segment before it ends",
    )
    falls = joined & (price[after] < end_price[before] - _CURVE_TOLERANCE_PRICE)
    log.rows(
        table.file,
        "falling price",
        np.sort(after[falls]),
        table.lines,
        lambda row: (
            f"is below the price before it, {end_price[previous[row]]:g} "
            f"(line {table.lines(previous[[row]])[0]}): marginal prices never fall along a curve"
        ),
        column="price",
        value=lambda row: f"{price[row]:g}",
        allowed="not below the price before it",
    )


def _check_interface_limits(table: ColumnTable, log: FaultLog) -> None:
    limit, reverse = table.number("limit_mw"), table.number("reverse_limit_mw")
    with np.errstate(invalid="ignore"):
        bad = limit < -reverse
    log.rows(
        table.file,
        "order",
        as_rows(bad),
        table.lines,
        lambda row: f"leaves no flow that is not above {limit[row]:g} and not below {-reverse[row]:g} MW",
        column="reverse_limit_mw",
        value=lambda row: f"{reverse[row]:g}",
    )


def _check_outages(table: ColumnTable, tables: Mapping[str, ColumnTable], log: FaultLog) -> None:
    first, last = table.time("first_interval"), table.time("last_interval")
    log.rows(
        table.file,
        "order",
        as_rows(last < first),
        table.lines,
        "is before first_interval",
        column="last_interval",
        value=lambda row: f"{last[row]}Z",
        allowed="not before first_interval",
    )
    kind = table.text("kind")
    for name, target in (("branch", "branches"), ("resource", "resources")):
        if target in tables:
            known = dict.fromkeys(tables[target].text(name).values)
            _report_unknown(table, "id", known, [target], log, within=kind.is_value(name))


def _check_weights(table: ColumnTable, group: str | None, log: FaultLog) -> None:
    weight = np.nan_to_num(table.number("weight"))
    groups = table.text(group) if group else TextColumn.constant("", table.n_row)
    if table.n_row == 0:
        return
    totals = np.bincount(groups.codes, weights=weight, minlength=len(groups.values))
    sizes = np.bincount(groups.codes, weights=np.abs(weight), minlength=len(groups.values))
    for i in np.flatnonzero(np.abs(totals) <= 1e-9 * np.maximum(sizes, 1e-300)):
        if sizes[i] > 0 or np.any(groups.codes == i):
            row = np.flatnonzero(groups.codes == i)[:1]
            log.fault(
                table.file,
                "weights sum to zero, so that they cannot be scaled to sum 1",
                row=int(table.lines(row)[0]),
                column=group or "weight",
                value=groups.values[i] or None,
                kind="zero weights",
            )


def _check_hub_names(hubs: ColumnTable, buses: ColumnTable, log: FaultLog) -> None:
    names = set(buses.text("bus").values)
    clash = [name for name in hubs.text("hub").values if name in names and name]
    text = hubs.text("hub")
    for name in clash[:1000]:
        row = np.flatnonzero(text.is_value(name))[:1]
        log.fault(
            hubs.file,
            "is the name of a bus too, so that a node of that name would mean two things",
            row=int(hubs.lines(row)[0]),
            column="hub",
            value=clip_text(name),
            kind="hub name",
        )


def _check_reference_setting(tables: Mapping[str, ColumnTable], settings: ScenarioSettings, log: FaultLog) -> None:
    reference = settings.reference
    buses = tables["buses"].text("bus").values
    if reference.kind == "bus" and reference.bus not in buses:
        log.fault(
            "scenario.toml",
            "is not in buses" + suggestion(reference.bus, buses),
            column="[reference] bus",
            value=clip_text(reference.bus),
            allowed="a bus of the table buses",
        )
    if reference.kind != "bus" and reference.bus:
        log.warn(
            "scenario.toml",
            f'has no effect with kind = "{reference.kind}"',
            column="[reference] bus",
            value=clip_text(reference.bus),
        )
    weights = tables.get("reference_weights")
    if reference.kind == "weights" and weights is not None and weights.n_row == 0:
        log.fault(
            "scenario.toml",
            'is "weights", but there is no table reference_weights',
            column="[reference] kind",
            allowed=f"a table with the columns {', '.join(TABLES['reference_weights'].column_names)}",
        )
