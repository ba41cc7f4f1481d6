"""The tables of a run folder: columns, types, units and meaning, defined once.

The definitions drive what is written, what an empty table looks like, and the documentation.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import pandas as pd
import pyarrow as pa

ColumnType = Literal["time", "text", "number", "flag"]

_ARROW: dict[ColumnType, pa.DataType] = {
    "time": pa.timestamp("us", tz="UTC"),
    "text": pa.string(),
    "number": pa.float64(),
    "flag": pa.bool_(),
}
_PANDAS: dict[ColumnType, str] = {
    "time": "datetime64[us, UTC]",
    "text": "str",
    "number": "float64",
    "flag": "bool",
}


@dataclass(frozen=True)
class RunColumn:
    """One column: name, type, unit (empty without one) and meaning."""

    name: str
    type: ColumnType
    unit: str = ""
    meaning: str = ""


@dataclass(frozen=True)
class RunTable:
    """One table of a run folder."""

    name: str
    meaning: str
    columns: tuple[RunColumn, ...]

    @property
    def arrow_schema(self) -> pa.Schema:
        """Return the Parquet schema."""
        return pa.schema([(column.name, _ARROW[column.type]) for column in self.columns])

    def empty(self) -> pd.DataFrame:
        """Return the table without rows, with the right column types."""
        return pd.DataFrame({column.name: pd.Series(dtype=_PANDAS[column.type]) for column in self.columns})


def _columns(rows: Sequence[tuple[str, ColumnType, str, str]]) -> tuple[RunColumn, ...]:
    return tuple(RunColumn(*row) for row in rows)


_INTERVAL: tuple[str, ColumnType, str, str] = ("interval_start", "time", "", "start of the interval, UTC")
_FORMULATION: tuple[str, ColumnType, str, str] = ("formulation", "text", "", "dc, dc-loss, soc or ac")
_PAIR: tuple[tuple[str, ColumnType, str, str], ...] = (
    ("base", "text", "", "price set that is explained"),
    ("against", "text", "", "price set it is held against"),
)

RUN_TABLES: dict[str, RunTable] = {
    table.name: table
    for table in (
        RunTable(
            "prices",
            "Nodal prices and their components on the scenario's reference.",
            _columns(
                [
                    _INTERVAL,
                    _FORMULATION,
                    ("bus", "text", "", ""),
                    ("lmp", "number", "$/MWh", "sum of the components"),
                    ("energy_component", "number", "$/MWh", "price at the reference"),
                    ("congestion_component", "number", "$/MWh", "effect of binding limits on flows"),
                    ("loss_component", "number", "$/MWh", "energy component times (delivery factor - 1)"),
                    ("reactive_component", "number", "$/MWh", "effect of reactive prices and voltages"),
                    ("lmp_low", "number", "$/MWh", "smallest price the solution admits"),
                    ("lmp_high", "number", "$/MWh", "largest price the solution admits"),
                    ("verdict", "text", "", "of the solve the price comes from"),
                ]
            ),
        ),
        RunTable(
            "constraints",
            "Limits that bind or carry a shadow price.",
            _columns(
                [
                    _INTERVAL,
                    _FORMULATION,
                    ("constraint", "text", "", "one name per kind, contingency, monitored element, direction"),
                    ("kind", "text", "", "thermal, angle, contingency, interface, voltage, reactive"),
                    ("contingency", "text", "", "empty without one"),
                    ("monitored", "text", "", "branch, interface, bus or resource"),
                    ("direction", "text", "", "forward, reverse, upper or lower"),
                    ("limit", "number", "unit", ""),
                    ("value", "number", "unit", ""),
                    ("unit", "text", "", "MW, MVA, Mvar, pu or deg"),
                    ("shadow_price", "number", "$/unit-h", "fall of cost per unit of relaxed limit"),
                    ("at_penalty", "flag", "", "the limit gave way at its penalty"),
                ]
            ),
        ),
        RunTable(
            "contributions",
            "Each constraint's part of a bus's component; they add up to the component.",
            _columns(
                [
                    _INTERVAL,
                    _FORMULATION,
                    ("bus", "text", "", ""),
                    ("constraint", "text", "", "constraint, or the bus whose reactive price acts"),
                    ("component", "text", "", "congestion or reactive"),
                    ("amount", "number", "$/MWh", ""),
                ]
            ),
        ),
        RunTable(
            "dispatch",
            "Output and cost per resource; also served bids and load not served.",
            _columns(
                [
                    _INTERVAL,
                    _FORMULATION,
                    ("resource", "text", "", "resource, `bid at BUS n`, `unserved load at BUS`, `surplus at BUS`"),
                    ("mw", "number", "MW", "injection; negative for a served bid"),
                    ("mvar", "number", "Mvar", ""),
                    ("cost", "number", "$/h", ""),
                ]
            ),
        ),
        RunTable(
            "operating_point",
            "Voltages and served load per bus.",
            _columns(
                [
                    _INTERVAL,
                    _FORMULATION,
                    ("bus", "text", "", ""),
                    ("v_pu", "number", "pu", ""),
                    ("angle_deg", "number", "deg", ""),
                    ("load_mw", "number", "MW", "served load, bids included"),
                ]
            ),
        ),
        RunTable(
            "flows",
            "Power entering each branch at both ends.",
            _columns(
                [
                    _INTERVAL,
                    _FORMULATION,
                    ("branch", "text", "", ""),
                    ("mw_at_from", "number", "MW", ""),
                    ("mvar_at_from", "number", "Mvar", ""),
                    ("mw_at_to", "number", "MW", ""),
                    ("mvar_at_to", "number", "Mvar", ""),
                    ("loss_mw", "number", "MW", ""),
                ]
            ),
        ),
        RunTable(
            "solves",
            "One row per solve: how it ended and its certificate.",
            _columns(
                [
                    _INTERVAL,
                    _FORMULATION,
                    ("status", "text", "", ""),
                    ("objective", "number", "$/h", ""),
                    ("losses_mw", "number", "MW", ""),
                    ("solver", "text", "", ""),
                    ("solver_seconds", "number", "s", ""),
                    ("total_seconds", "number", "s", ""),
                    ("primal_residual", "number", "MW", "largest violation of an equation or limit"),
                    ("dual_residual", "number", "$/MWh", "largest violation of stationarity"),
                    ("duality_gap", "number", "$/h", ""),
                    ("price_residual", "number", "$/MWh", "solver's multiplier against the rebuilt price"),
                    ("cone_slack", "number", "pu", "largest slack of a relaxed cone"),
                    ("loop_angle_deg", "number", "deg", "largest angle sum around a loop"),
                    ("cost_gap", "number", "-", "of a relaxation, relative to the AC local optimum"),
                    ("ac_mismatch_mw", "number", "MW", "power missing in an AC power flow at this dispatch"),
                    ("verdict", "text", "", "may this price be used"),
                    ("reasons", "text", "", "why, in words"),
                ]
            ),
        ),
        RunTable(
            "money",
            "Money balance per interval and formulation; each item in $ for the interval.",
            _columns(
                [
                    _INTERVAL,
                    _FORMULATION,
                    ("item", "text", "", "what the money is"),
                    ("basis", "text", "", "total, components or constraints; both splits add up to the surplus"),
                    ("amount", "number", "$", ""),
                ]
            ),
        ),
        RunTable(
            "areas",
            "Prices of hubs (fixed weights) and zones (weighted with served load).",
            _columns(
                [
                    _INTERVAL,
                    _FORMULATION,
                    ("area", "text", "", "hub or zone"),
                    ("kind", "text", "", "hub or zone"),
                    ("lmp", "number", "$/MWh", "sum of the components; none where a bus with weight has no price"),
                    ("energy_component", "number", "$/MWh", ""),
                    ("congestion_component", "number", "$/MWh", ""),
                    ("loss_component", "number", "$/MWh", ""),
                    ("reactive_component", "number", "$/MWh", ""),
                    ("load_mw", "number", "MW", "load served at its buses"),
                    ("verdict", "text", "", "of the solve the prices come from"),
                ]
            ),
        ),
        RunTable(
            "drift",
            "A zone's load-weighted price from one day to the next: price change and weight drift add up to it.",
            _columns(
                [
                    _FORMULATION,
                    ("zone", "text", "", ""),
                    ("before", "text", "", "local day, or run"),
                    ("after", "text", "", "local day, or run"),
                    ("component", "text", "", "lmp, energy, congestion, loss or reactive"),
                    ("price_before", "number", "$/MWh", "weighted with the load of the hours both sides hold"),
                    ("price_after", "number", "$/MWh", ""),
                    ("price_change", "number", "$/MWh", "because prices moved, at the mean of both weights"),
                    ("weight_drift", "number", "$/MWh", "because load moved between buses and hours"),
                    ("coverage", "number", "-", "share of the load of both sides that is compared"),
                    ("usable", "number", "-", "share of it whose prices may be used on both sides"),
                ]
            ),
        ),
        RunTable(
            "differences",
            "Price of `against` minus price of `base`.",
            _columns(
                [
                    _INTERVAL,
                    *_PAIR,
                    ("bus", "text", "", ""),
                    ("difference", "number", "$/MWh", ""),
                    ("inside_interval", "flag", "", "explained by prices that are not unique"),
                ]
            ),
        ),
        RunTable(
            "drivers",
            "Why: the drivers of a difference; they add up to it.",
            _columns(
                [
                    _INTERVAL,
                    *_PAIR,
                    ("bus", "text", "", ""),
                    ("driver", "text", "", ""),
                    ("constraint", "text", "", "empty where the driver is not a constraint"),
                    ("amount", "number", "$/MWh", ""),
                ]
            ),
        ),
        RunTable(
            "findings",
            "What the posted-price checks found.",
            _columns(
                [
                    _INTERVAL,
                    ("kind", "text", "", ""),
                    ("node", "text", "", ""),
                    ("constraint", "text", "", ""),
                    ("amount", "number", "unit", ""),
                    ("unit", "text", "", ""),
                    ("sentence", "text", "", ""),
                ]
            ),
        ),
        RunTable(
            "settlement",
            "Money per account, node, interval and component; withdrawal pays, injection is paid.",
            _columns(
                [
                    ("account", "text", "", ""),
                    _INTERVAL,
                    ("node", "text", "", ""),
                    ("mw", "number", "MW", "positive withdraws"),
                    ("component", "text", "", ""),
                    ("posted", "number", "$/MWh", ""),
                    ("reference", "number", "$/MWh", ""),
                    ("amount", "number", "$", "mw x hours x (posted - reference)"),
                    ("amount_low", "number", "$", ""),
                    ("amount_high", "number", "$", ""),
                ]
            ),
        ),
        RunTable(
            "audit",
            "AC power flow at a linear dispatch: what it would do to the grid.",
            _columns(
                [
                    _INTERVAL,
                    _FORMULATION,
                    (
                        "finding",
                        "text",
                        "",
                        "what was found, see `lmpgap.runs.audit`",
                    ),
                    ("element", "text", "", "branch, bus or resource; empty for the system"),
                    ("value", "number", "unit", ""),
                    ("limit", "number", "unit", ""),
                    ("unit", "text", "", ""),
                ]
            ),
        ),
        RunTable(
            "sweep",
            "How the formulations drift apart as load grows; means over the hours that solved.",
            _columns(
                [
                    ("load_factor", "number", "-", "all load is multiplied by this"),
                    _FORMULATION,
                    ("hours", "number", "", "intervals with a solution"),
                    ("hours_asked", "number", "", "intervals that were tried"),
                    ("load_mw", "number", "MW", "served load"),
                    ("generation_mw", "number", "MW", ""),
                    ("losses_mw", "number", "MW", ""),
                    ("cost", "number", "$/h", ""),
                    ("mean_price", "number", "$/MWh", "load-weighted"),
                    ("price_error", "number", "$/MWh", "mean absolute difference from ac over buses"),
                    ("loss_component_error", "number", "$/MWh", "the same of the loss component"),
                    ("cost_error", "number", "$/h", "cost less that of ac"),
                    ("angle_error_deg", "number", "deg", "largest difference of a branch angle from ac"),
                ]
            ),
        ),
    )
}

SOLVED_TABLES = (
    "prices",
    "constraints",
    "contributions",
    "dispatch",
    "operating_point",
    "flows",
    "solves",
    "money",
    "audit",
)
"""Written by the solves, chunk by chunk; all other tables are derived and written whole."""


def schema_as_text() -> str:
    """Return the tables as a Markdown page."""
    lines = []
    for table in RUN_TABLES.values():
        lines += [
            f"### `{table.name}`",
            "",
            table.meaning,
            "",
            "| column | type | unit | meaning |",
            "|---|---|---|---|",
        ]
        lines += [f"| {c.name} | {c.type} | {c.unit} | {c.meaning} |" for c in table.columns]
        lines.append("")
    return "\n".join(lines)
