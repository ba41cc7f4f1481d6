"""Reading `scenario.toml`: every key is known, typed and in range, or it is a fault with its line."""

from __future__ import annotations

import math
import re
import tomllib
import zoneinfo
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from datetime import date, datetime
from typing import Any

from lmpgap.scenario.faults import FaultLog, clip_text, suggestion
from lmpgap.scenario.settings import (
    DcConvention,
    Penalties,
    PostedFormat,
    Reference,
    ScenarioSettings,
    Settlement,
)
from lmpgap.scenario.tables import TABLES

SETTINGS_FILE = "scenario.toml"
_MAXIMUM_SIZE = 1_000_000

Check = Callable[[Any], Any]
"""Returns the value as the settings hold it, or raises ValueError with what is allowed."""


@dataclass(frozen=True)
class Key:
    """One key of a section: its field in the settings, how it is checked, and what it means."""

    check: Check
    meaning: str
    field: str = ""


def _text(value: Any) -> str:
    if not isinstance(value, str):
        raise ValueError("text in quotes")
    if not value.isprintable():
        raise ValueError("text without line breaks or other characters that cannot be shown")
    return value


def _filled_text(value: Any) -> str:
    if not _text(value).strip():
        raise ValueError("text that is not empty")
    return str(value).strip()


def _flag(value: Any) -> bool:
    if not isinstance(value, bool):
        raise ValueError("true or false")
    return value


def _choice(*choices: str) -> Check:
    def check(value: Any) -> str:
        if value not in choices or not isinstance(value, str):
            raise ValueError(" or ".join(f'"{choice}"' for choice in choices))
        return value

    return check


def _number(*, above: float | None = None, minimum: float | None = None, maximum: float = 1e9) -> Check:
    words = "a number"
    if above is not None:
        words += f" above {above:g}"
    if minimum is not None:
        words += f" not below {minimum:g}"
    words += f" and not above {maximum:g}"

    def check(value: Any) -> float:
        if isinstance(value, bool) or not isinstance(value, int | float):
            raise ValueError(words)
        if not math.isfinite(value) or value > maximum:
            raise ValueError(words)
        if (above is not None and value <= above) or (minimum is not None and value < minimum):
            raise ValueError(words)
        return float(value)

    return check


def _whole(minimum: int, maximum: int) -> Check:
    def check(value: Any) -> int:
        if isinstance(value, bool) or not isinstance(value, int) or not minimum <= value <= maximum:
            raise ValueError(f"a whole number from {minimum} to {maximum}")
        return value

    return check


def _sign(value: Any) -> int:
    if isinstance(value, bool) or value not in (1, -1):
        raise ValueError("1 or -1")
    return int(value)


def _zone(value: Any) -> str:
    name = _text(value)
    try:
        zoneinfo.ZoneInfo(name)
    except (ValueError, KeyError, OSError):
        raise ValueError(
            "a time zone by its IANA name, e.g. America/Boise" + suggestion(name, zoneinfo.available_timezones())
        ) from None
    return name


def _dates(value: Any) -> tuple[date, ...]:
    if not isinstance(value, list):
        raise ValueError("a list of dates such as [2026-05-25, 2026-07-03]")
    days = []
    for day in value:
        if isinstance(day, str):
            try:
                day = date.fromisoformat(day)
            except ValueError:
                raise ValueError(f"dates such as 2026-05-25, not {day!r}") from None
        if not isinstance(day, date) or isinstance(day, datetime):
            raise ValueError("a list of dates such as [2026-05-25, 2026-07-03]")
        days.append(day)
    return tuple(sorted(set(days)))


def _column_map(value: Any) -> dict[str, str]:
    if not isinstance(value, dict):
        raise ValueError('a table such as [posted.columns] with lines like lmp = "Total price"')
    known = [*TABLES["posted"].column_names, *TABLES["posted_constraints"].column_names, "component", "date", "hour"]
    columns = {}
    for name, own in value.items():
        if name not in known:
            raise ValueError(
                f"on the left a column of `posted` or `posted_constraints`, not {name!r}" + suggestion(name, known)
            )
        if not isinstance(own, str) or not own.strip():
            raise ValueError(f"on the right of {name} the name of a column in quotes")
        columns[name] = own.strip()
    owners: dict[str, str] = {}
    for name, own in columns.items():
        if own in owners:
            raise ValueError(f"each own column once, not {own!r} for both {owners[own]} and {name}")
        owners[own] = name
    return columns


SECTIONS: Mapping[str, Mapping[str, Key]] = {
    "scenario": {
        "name": Key(_filled_text, "name of the scenario, for titles"),
        "currency": Key(_filled_text, 'currency of all prices; "USD" if left out'),
        "time_zone": Key(_zone, 'IANA time zone in which hours are shown; "UTC" if left out'),
        "base_mva": Key(_number(above=0, maximum=1e6), "power base of the per-unit columns [MVA]; 100 if left out"),
        "interval_minutes": Key(_whole(1, 1440), "length of an interval [min]; 60 if left out"),
    },
    "reference": {
        "kind": Key(_choice("load", "bus", "weights"), 'reference of the price components; "load" if left out'),
        "bus": Key(_text, 'the bus, with kind = "bus"'),
    },
    "dc": {
        "susceptance": Key(_choice("reactance", "impedance"), '"reactance": 1/x (default); "impedance": x/(r^2+x^2)'),
        "taps": Key(_flag, "apply tap ratios and phase shifts in the linear formulations; true if left out"),
    },
    "penalties": {
        "power_balance": Key(_number(above=0), "price at which the power balance gives way [$/MWh]; hard if left out"),
        "transmission": Key(_number(above=0), "price at which a flow limit gives way [$/MWh]; hard if left out"),
    },
    "posted": {
        "columns": Key(_column_map, "the operator's own column name for each contract column"),
        "congestion_sign": Key(_sign, "-1 where congestion is published with the other sign; 1 if left out"),
        "shadow_price_sign": Key(_sign, "-1 where shadow prices are published negative; 1 if left out"),
        "shape": Key(_choice("long", "wide"), '"wide": a column per node or per hour; "long" if left out'),
        "clock": Key(_choice("start", "hour_ending"), 'what a time names; "start" if left out'),
        "local": Key(_flag, "times are local clock time without an offset; false if left out"),
    },
    "settlement": {
        "materiality": Key(_number(minimum=0), "amount below which a claim is not worth making [currency]; 0"),
        "deadline_days": Key(_whole(0, 3650), "days in which a dispute may be raised; no deadline if left out"),
        "counted": Key(_choice("calendar", "business"), 'which days count; "calendar" if left out'),
        "from": Key(
            _choice("interval", "published"), 'the day the count starts; "interval" if left out', "counted_from"
        ),
        "holidays": Key(_dates, "days that are no business days"),
        "label": Key(_text, "what the rule is called"),
    },
}
"""Every key of `scenario.toml`, by section."""


def read_settings(text: str | None, log: FaultLog, *, file: str = SETTINGS_FILE) -> ScenarioSettings:
    """Return the settings that the text of `scenario.toml` holds; what is faulty takes its default."""
    loaded = None if text is None else _load(text, log, file)
    data = loaded or {}
    values: dict[str, dict[str, Any]] = {section: {} for section in SECTIONS}
    for section, content in data.items():
        keys = SECTIONS.get(section)
        if keys is None:
            place = (
                f"key {section!r} stands outside a section"
                if not isinstance(content, dict)
                else (f"there is no section [{section}]")
            )
            hint = suggestion(section, SECTIONS)
            log.fault(
                file,
                clip_text(place, 200) + hint,
                row=_line_of(text, section, None),
                allowed=None if hint else ", ".join(f"[{name}]" for name in SECTIONS),
                kind="unknown key",
            )
        elif not isinstance(content, dict):
            log.fault(file, "is a section, not a value", column=section, row=_line_of(text, section, None))
        else:
            _read_section(section, keys, content, values[section], text, log, file)
    if loaded is not None and not _has(data, "scenario", "name"):
        log.fault(file, "the key is missing: name of the scenario", column="[scenario] name", allowed="text in quotes")
    settings = values["scenario"]
    return ScenarioSettings(
        name=settings.pop("name", "unnamed"),
        **settings,
        reference=Reference(**values["reference"]),
        dc=DcConvention(**values["dc"]),
        penalties=Penalties(**values["penalties"]),
        posted=PostedFormat(**values["posted"]),
        settlement=Settlement(**values["settlement"]),
    )


def _has(data: Mapping[str, Any], section: str, key: str) -> bool:
    return isinstance(data.get(section), dict) and key in data[section]


def _load(text: str, log: FaultLog, file: str) -> dict[str, Any] | None:
    if len(text) > _MAXIMUM_SIZE:
        log.fault(file, "is too large for settings", allowed="up to a million characters")
        return None
    try:
        return tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        found = re.search(r"\(at line (\d+), column \d+\)", str(error))
        log.fault(
            file,
            f"is not valid TOML: {clip_text(str(error).split(' (at ')[0], 200)}",
            row=int(found.group(1)) if found else None,
        )
    except (RecursionError, ValueError, OverflowError):
        log.fault(file, "is not valid TOML: it is nested too deep or holds an impossible value")
    return None


def _read_section(
    section: str,
    keys: Mapping[str, Key],
    content: Mapping[str, Any],
    values: dict[str, Any],
    text: str | None,
    log: FaultLog,
    file: str,
) -> None:
    for name, value in content.items():
        row = _line_of(text, name, section)
        key = keys.get(name)
        if key is None:
            hint = suggestion(name, keys)
            elsewhere = [other for other, names in SECTIONS.items() if name in names]
            if elsewhere:
                hint = f"; it belongs in [{elsewhere[0]}]"
            log.fault(
                file,
                f"there is no key {clip_text(name)!r} in [{section}]{hint}",
                row=row,
                allowed=None if hint else ", ".join(keys),
                kind="unknown key",
            )
            continue
        try:
            values[key.field or name] = key.check(value)
        except ValueError as error:
            log.fault(
                file,
                "is not what is expected",
                row=row,
                column=f"[{section}] {name}",
                value=clip_text(str(value)),
                allowed=str(error),
                kind="setting",
            )


def _line_of(text: str | None, key: str, section: str | None) -> int | None:
    """Return the line on which a key or section stands, as far as plain reading finds it."""
    if text is None:
        return None
    current = None
    quoted = rf"[\"']?{re.escape(key)}[\"']?"
    for number, line in enumerate(text.splitlines(), start=1):
        header = re.match(r"\s*\[+\s*([^\]]*?)\s*\]", line)
        if header:
            current = header.group(1)
            if section is None and re.match(rf"{quoted}(\.|$)", current):
                return number
            if section is not None and current.startswith(f"{section}.{key}"):
                return number
        elif (section is None or current == section) and re.match(rf"\s*{quoted}\s*[=.]", line):
            return number
    return None


_FORMS = """\
## Posted files in another form

`[posted]` tells how `posted` and `posted_constraints` differ from the contract, so that an operator's own file can be
put into the folder as it is.

- `[posted.columns]` maps contract columns to the operator's, e.g. `lmp = "Total price"`; columns that it does not
  mention are not read, and a warning names them.
- `shape = "wide"` without a column `node`: every column but `interval_start` is a node. With `node` and `date`: every
  other column is an hour, `HE01` to `HE24`, `HE02*` for the second of two equal hours, or counted from 1 to 25. A
  column `component` says which part of the price a row holds (`lmp`, `energy_component`, `congestion_component`,
  `loss_component`, or what `[posted.columns]` maps to them); without it rows hold `lmp`. Empty cells are left out.
- `clock = "hour_ending"`: a time names the end of its interval. `HE02` and numbers always name hours by their end with
  this clock. A day and an hour may stand in two columns, `date` and `hour`.
- `local = true`: times are local clock time of `time_zone`, without an offset. Of two equal labels of one node (and
  version) the first is the earlier hour; a single one is taken as the earlier, and rows in the hour that clocks skip
  are left out, each with a warning.
"""


def settings_as_markdown() -> str:
    """Return the documentation page of `scenario.toml`."""
    lines = ["# scenario.toml", "", "| section | key | meaning |", "|---|---|---|"]
    lines += [
        f"| [{section}] | {name} | {key.meaning} |" for section, keys in SECTIONS.items() for name, key in keys.items()
    ]
    return "\n".join([*lines, "", _FORMS])
