"""The tables of the scenario folder: the one definition that everything else works from."""

from __future__ import annotations

from collections.abc import Mapping
from types import MappingProxyType

from lmpgap.scenario.columns import KIND_WORDS, TIME_FORMAT, Column, Table

_UNLIMITED = "unlimited"


def _name(name: str, meaning: str, *references: str, required: bool = True, loose: bool = False) -> Column:
    return Column(
        name=name,
        kind="text",
        meaning=meaning,
        references=references,
        required=required,
        loose_reference=loose,
        default=None if required else "",
    )


def _number(
    name: str,
    meaning: str,
    unit: str = "",
    *,
    required: bool = True,
    default: float | None = None,
    default_words: str = "",
    minimum: float | None = None,
    maximum: float | None = None,
    above: float | None = None,
) -> Column:
    return Column(
        name=name,
        kind="number",
        meaning=meaning,
        unit=unit,
        required=required,
        default=default,
        default_words=default_words,
        minimum=minimum,
        maximum=maximum,
        above=above,
    )


def _limit(name: str, meaning: str, unit: str, *, minimum: float | None = None, words: str = _UNLIMITED) -> Column:
    return _number(name, meaning, unit, required=False, default_words=words, minimum=minimum)


def _interval_start(meaning: str = "start of the interval", *, required: bool = True, words: str = "") -> Column:
    return Column(name="interval_start", kind="time", meaning=meaning, required=required, default_words=words)


_EVERY = _interval_start(
    "start of the interval the row is for; rows with one replace the rows without one",
    required=False,
    words="every interval",
)
_SEGMENT = Column(name="segment", kind="integer", meaning="order of the segment in the curve", minimum=0)
_IN_SERVICE = Column(
    name="in_service",
    kind="flag",
    meaning="false leaves it out of every interval",
    required=False,
    default=True,
)
_BUS = _name("bus", "a bus of `buses`", "buses.bus")
_NODE = _name("node", "a bus or a hub", "buses.bus", "hubs.hub", loose=True)

_TABLES = (
    Table(
        name="buses",
        meaning="The nodes of the network.",
        key=("bus",),
        required=True,
        columns=(
            _name("bus", "name of the bus"),
            Column(name="name", kind="text", meaning="name to show", required=False, default=""),
            Column(name="zone", kind="text", meaning="load zone", required=False, default=""),
            _number("base_kv", "nominal voltage", "kV", above=0),
            _number("v_min_pu", "lowest voltage", "pu", minimum=0),
            _number("v_max_pu", "highest voltage", "pu", above=0),
            _number("shunt_mw", "active power consumed at 1 pu", "MW", required=False, default=0.0),
            _number("shunt_mvar", "reactive power injected at 1 pu", "Mvar", required=False, default=0.0),
            _number("map_x", "position on the map", required=False),
            _number("map_y", "position on the map", required=False),
        ),
    ),
    Table(
        name="branches",
        meaning="Lines and transformers: pi model, ideal transformer at the from end.",
        key=("branch",),
        required=True,
        columns=(
            _name("branch", "name of the branch"),
            _name("from_bus", "bus at the from end", "buses.bus"),
            _name("to_bus", "bus at the to end", "buses.bus"),
            _number("r_pu", "series resistance", "pu"),
            _number("x_pu", "series reactance", "pu"),
            _number("charging_pu", "total charging susceptance", "pu", required=False, default=0.0),
            _number("tap_ratio", "tap ratio; 1 for a line", required=False, default=1.0, above=0),
            _number("phase_shift_deg", "phase shift", "deg", required=False, default=0.0, minimum=-180, maximum=180),
            _limit("normal_rating_mva", "limit in the base case", "MVA", minimum=0),
            _limit("emergency_rating_mva", "limit after a contingency", "MVA", minimum=0),
            _number(
                "angle_min_deg",
                "smallest angle difference, from minus to; -90 and less is no limit",
                "deg",
                required=False,
                default_words=_UNLIMITED,
                maximum=90,
            ),
            _number(
                "angle_max_deg",
                "largest angle difference, from minus to; 90 and more is no limit",
                "deg",
                required=False,
                default_words=_UNLIMITED,
                minimum=-90,
            ),
            _IN_SERVICE,
        ),
    ),
    Table(
        name="resources",
        meaning="Generators and whatever else offers output.",
        key=("resource",),
        required=True,
        columns=(
            _name("resource", "name of the resource"),
            _BUS,
            _number("eco_min_mw", "lowest output", "MW"),
            _number("eco_max_mw", "highest output", "MW"),
            _limit("q_min_mvar", "lowest reactive output", "Mvar"),
            _limit("q_max_mvar", "highest reactive output", "Mvar"),
            Column(name="fuel", kind="text", meaning="fuel or technology", required=False, default=""),
            _number("no_load_cost", "cost of being on", "currency/h", required=False, default=0.0),
            _IN_SERVICE,
        ),
    ),
    Table(
        name="offers",
        meaning="Offer curves. The marginal price runs from `price` to `end_price` between `from_mw` and "
        "`to_mw` and never falls along a curve; a curve that ends below the highest output caps it.",
        key=("resource", "segment", "interval_start"),
        columns=(
            _name("resource", "a resource of `resources`", "resources.resource"),
            _SEGMENT,
            _number("from_mw", "output at the start of the segment", "MW"),
            _number("to_mw", "output at its end", "MW"),
            _number("price", "marginal price at its start", "currency/MWh"),
            _number(
                "end_price",
                "marginal price at its end",
                "currency/MWh",
                required=False,
                default_words="same as price",
            ),
            _EVERY,
        ),
    ),
    Table(
        name="loads",
        meaning="Fixed load. With `interval_start` the table is the time axis of the run; without it there is "
        "one interval.",
        key=("bus", "interval_start"),
        required=True,
        columns=(
            _BUS,
            _number("mw", "active load", "MW"),
            _number("mvar", "reactive load", "Mvar", required=False, default=0.0),
            _EVERY,
        ),
    ),
    Table(
        name="bids",
        meaning="Load that is served only where the price is below its own; unity power factor.",
        key=("bus", "segment", "interval_start"),
        columns=(
            _BUS,
            _SEGMENT,
            _number("mw", "size", "MW", minimum=0),
            _number("price", "value of the load", "currency/MWh"),
            _EVERY,
        ),
    ),
    Table(
        name="availability",
        meaning="Range of a resource in single intervals, in place of the one in `resources`.",
        key=("interval_start", "resource"),
        columns=(
            _interval_start(),
            _name("resource", "a resource of `resources`", "resources.resource"),
            _number("eco_max_mw", "highest output", "MW"),
            _number(
                "eco_min_mw",
                "lowest output",
                "MW",
                required=False,
                default_words="as in `resources`, but not above eco_max_mw",
            ),
        ),
    ),
    Table(
        name="outages",
        meaning="What is out of service, from the first to the last interval, both included.",
        columns=(
            Column(name="kind", kind="choice", meaning="what is out", choices=("branch", "resource")),
            _name("id", "name of the branch or resource"),
            Column(name="first_interval", kind="time", meaning="start of the first interval"),
            Column(name="last_interval", kind="time", meaning="start of the last interval"),
        ),
    ),
    Table(
        name="contingencies",
        meaning="Outages that the dispatch must survive; rows with one contingency go out together.",
        key=("contingency", "branch"),
        columns=(
            _name("contingency", "name of the contingency"),
            _name("branch", "a branch of `branches`", "branches.branch"),
        ),
    ),
    Table(
        name="monitored",
        meaning="Branches on which contingencies are checked. Without the table: all with an emergency rating.",
        key=("branch",),
        columns=(_name("branch", "a branch of `branches`", "branches.branch"),),
    ),
    Table(
        name="interfaces",
        meaning="Weighted sums of active flows at the from ends that are limited together.",
        key=("interface", "branch"),
        columns=(
            _name("interface", "name of the interface"),
            _name("branch", "a branch of `branches`", "branches.branch"),
            _number("weight", "weight of the flow from -> to; -1 where the branch points the other way"),
        ),
    ),
    Table(
        name="interface_limits",
        meaning="Limits of the interfaces.",
        key=("interface", "interval_start"),
        columns=(
            _name("interface", "an interface of `interfaces`", "interfaces.interface"),
            _number("limit_mw", "limit in the interface's direction", "MW"),
            _limit("reverse_limit_mw", "limit against it, as a positive number", "MW"),
            _EVERY,
        ),
    ),
    Table(
        name="reference_weights",
        meaning='Reference of the price components with [reference] kind = "weights"; scaled to sum 1.',
        key=("bus",),
        columns=(_BUS, _number("weight", "weight of the bus")),
    ),
    Table(
        name="hubs",
        meaning="Fixed-weight averages of bus prices; the weights of a hub are scaled to sum 1.",
        key=("hub", "bus"),
        columns=(_name("hub", "name of the hub"), _BUS, _number("weight", "weight of the bus")),
    ),
    Table(
        name="posted",
        meaning="Prices that the operator posted. Several versions may stand: the latest wins, all are kept.",
        columns=(
            _interval_start(),
            _NODE,
            _number("lmp", "posted price", "currency/MWh"),
            _number("energy_component", "energy part", "currency/MWh", required=False),
            _number("congestion_component", "congestion part", "currency/MWh", required=False),
            _number("loss_component", "loss part", "currency/MWh", required=False),
            Column(
                name="version",
                kind="integer",
                meaning="number that grows with each correction",
                required=False,
                default=1.0,
                minimum=0,
            ),
            Column(name="published_at", kind="time", meaning="when it was published", required=False),
        ),
    ),
    Table(
        name="posted_constraints",
        meaning="Binding constraints that the operator posted.",
        columns=(
            _interval_start(),
            _name("constraint", "the operator's name of the constraint"),
            _number("shadow_price", "positive per unit of relaxed limit", "currency/MWh"),
            Column(name="contingency", kind="text", meaning="contingency", required=False, default=""),
            Column(
                name="direction",
                kind="choice",
                meaning="direction of the limit",
                required=False,
                default="",
                choices=("forward", "reverse", "upper", "lower", ""),
            ),
        ),
    ),
    Table(
        name="delivery_factors",
        meaning="Delivery factors that the operator says it used (1 - loss factor).",
        key=("interval_start", "bus"),
        columns=(_interval_start(), _BUS, _number("delivery_factor", "delivery factor of the bus")),
    ),
    Table(
        name="positions",
        meaning="Energy bought and sold: positive withdraws and pays, negative injects and is paid.",
        key=("account", "interval_start", "node"),
        columns=(
            _name("account", "account of the analyst"),
            _interval_start(),
            _NODE,
            _number("mw", "withdrawal", "MW"),
        ),
    ),
    Table(
        name="rights",
        meaning="Transmission rights; they settle on the congestion components from source to sink.",
        key=("holder", "source", "sink", "kind", "interval_start"),
        columns=(
            _name("holder", "account of the analyst"),
            _name("source", "a bus or a hub", "buses.bus", "hubs.hub", loose=True),
            _name("sink", "a bus or a hub", "buses.bus", "hubs.hub", loose=True),
            _number("mw", "size", "MW", minimum=0),
            Column(
                name="kind",
                kind="choice",
                meaning="an option never pays out a negative amount",
                required=False,
                default="obligation",
                choices=("obligation", "option"),
            ),
            _EVERY,
        ),
    ),
)

TABLES: Mapping[str, Table] = MappingProxyType({table.name: table for table in _TABLES})
"""Every table of the contract, by name."""


def tables_as_markdown() -> str:
    """Return the documentation page of the tables: what each column means, its unit, range and default."""
    lines = [
        "# Tables of a scenario folder",
        "",
        "A folder holds `scenario.toml` and one `NAME.csv` or `NAME.parquet` per table. A missing optional table "
        "means none; an empty cell of an optional column means its default. Text in CSV files is UTF-8; a file "
        "may be separated by commas, semicolons or tabs, and one separated by semicolons or tabs may write "
        f"decimals with a comma. Times are {TIME_FORMAT}.",
        "",
    ]
    for table in TABLES.values():
        lines += [
            f"## {table.name}{'' if table.required else ' (optional)'}",
            "",
            table.meaning,
            "",
            "| column | type | unit | default | meaning |",
            "|---|---|---|---|---|",
        ]
        for column in table.columns:
            kind = KIND_WORDS[column.kind]
            if column.kind == "choice":
                kind += " " + ", ".join(f"`{choice}`" for choice in column.choices if choice)
            elif column.kind in ("number", "integer"):
                kind = column.allowed.split(" [")[0].removeprefix("a ")
            meaning = column.meaning
            if column.references and not column.loose_reference and "`" not in meaning:
                meaning += " (of " + " or ".join(f"`{r.split('.')[0]}`" for r in column.references) + ")"
            name = column.name if column.required else f"[{column.name}]"
            lines.append(f"| {name} | {kind} | {column.unit} | {column.default_text or 'required'} | {meaning} |")
        if table.key:
            lines += ["", "One row per " + ", ".join(f"`{name}`" for name in table.key) + "."]
        lines.append("")
    return "\n".join(lines)
