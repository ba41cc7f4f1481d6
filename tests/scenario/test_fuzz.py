# ruff: noqa: E501
"""Hostile input: whatever stands in a file, reading ends with a scenario or with faults in words."""

from __future__ import annotations

import time
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from lmpgap.errors import Fault, ScenarioError
from lmpgap.scenario.columns import Column
from lmpgap.scenario.read import read_scenario
from lmpgap.scenario.tables import TABLES
from tests.scenario.folder import BASE, HOURS, SETTINGS, write

LONGEST_SECONDS = 5.0
"""A file of a few rows is read in milliseconds; seconds mean that something grows without bound."""

fuzz = settings(max_examples=60, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])

NASTY = [
    "", " ", "nan", "inf", "-inf", "1e999", "-1e308", "1e-320", "1_000", "0x10", "١٢", "1,5", "1.000,5", "1,000.5",
    "NULL", "None", "#N/A", "=1+1", "<script>alert(1)</script>", "'; DROP TABLE buses;--", "../../etc/passwd", "\u202eabc",
    "a" * 5000, "1" * 400, "." * 3000, "9" * 30 + "x", "\x0b", "\u2028", "\ufeff", "True", "-0", "+1", "1e5", "2026-03-08",
    "2026-03-08T07:00:00Z", "2026-03-08T07:00:00-07:00", "0001-01-01T00:00:00+23:59", "9999-12-31T23:59:59-23:59", "24:00",
    "2026-W10-7T07:00Z", "North", "South", "East", "NS", "NE", "SE", "Hydro", "Gas", "0", "1", "20", "branch", "option",
]  # fmt: skip
cells = st.one_of(st.sampled_from(NASTY), st.text(max_size=12), st.floats().map(repr), st.integers().map(str))


def good(column: Column) -> st.SearchStrategy[str]:
    """Return values that such a column may well hold."""
    if column.kind == "time":
        return st.sampled_from([*HOURS, *([] if column.required else [""])])
    if column.kind == "flag":
        return st.sampled_from(["true", "0", ""])
    if column.kind == "choice":
        return st.sampled_from(column.choices)
    if column.kind == "integer":
        return st.integers(0, 4).map(str)
    if column.kind == "number":
        return st.sampled_from(["0", "1", "0.5", "100", "-3", "1e3", "0.02"])
    names = [name for r in column.references for name in {"buses": ["North", "East"], "branches": ["NS", "SE"],
             "resources": ["Hydro", "Gas"], "interfaces": ["I"], "hubs": ["H"]}[r.split(".")[0]]]  # fmt: skip
    return st.sampled_from(names or ["North", "NS", "Hydro", "I", "H", "A"])


def quote(cell: str) -> str:
    return '"' + cell.replace('"', '""') + '"' if any(mark in cell for mark in ',;\t"\n\r') else cell


@st.composite
def csv_tables(draw: st.DrawFn) -> tuple[str, str]:
    """Return a table's name and a file in which some cells, headers and separators are wrong."""
    table = TABLES[draw(st.sampled_from(sorted(TABLES)))]
    columns = [c for c in table.columns if c.required or draw(st.booleans())]
    header = [c.name if draw(st.integers(0, 30)) else draw(cells) for c in columns]
    rows = []
    for _ in range(draw(st.integers(0, 6))):
        rows.append([draw(good(c)) if draw(st.integers(0, 8)) else draw(cells) for c in columns])
        if not draw(st.integers(0, 20)):
            rows[-1] = rows[-1][: draw(st.integers(0, len(columns)))]
    mark = draw(st.sampled_from([",", ",", ",", ";", "\t"]))
    end = draw(st.sampled_from(["\n", "\r\n"]))
    return table.name, end.join(mark.join(quote(cell) for cell in row) for row in [header, *rows])


def check(folder: Path) -> None:
    """Read the folder: a scenario whose intervals hold finite numbers, or faults that can be shown."""
    started = time.process_time()
    found: tuple[Fault, ...] = ()
    try:
        scenario = read_scenario(folder)
    except ScenarioError as error:
        found = error.faults
    if found:
        assert not any("\n" in str(fault) for fault in found)
        assert time.process_time() - started < LONGEST_SECONDS
        return
    for position in {0, scenario.n_interval - 1}:
        inputs = scenario.inputs(position)
        for array in (inputs.load_p, inputs.load_q, inputs.p_min, inputs.p_max, inputs.fixed_cost, inputs.segments.width,
                      inputs.segments.price_start, inputs.bids.width):  # fmt: skip
            assert np.all(np.isfinite(array))
        assert np.all(inputs.segments.width >= 0)
        assert np.all(inputs.p_min <= inputs.p_max)
        weights = scenario.reference_weights(position)
        assert weights.sum() == pytest.approx(1)
    assert scenario.network.n_bus == len(scenario.tables["buses"])
    assert len(scenario.hour_ending(scenario.interval_starts)) == scenario.n_interval
    assert time.process_time() - started < LONGEST_SECONDS


@fuzz
@given(st.lists(csv_tables(), min_size=1, max_size=3))
def test_tables(tmp_path_factory: pytest.TempPathFactory, tables: list[tuple[str, str]]) -> None:
    folder = tmp_path_factory.mktemp("fuzz")
    write(folder, {f"{name}.csv": text.encode("utf-8", "surrogatepass") for name, text in tables})
    check(folder)


@fuzz
@given(st.sampled_from(sorted(BASE)), st.data())
def test_damaged_bytes(tmp_path_factory: pytest.TempPathFactory, name: str, data: st.DataObject) -> None:
    content = bytearray(BASE[name].encode())
    for _ in range(data.draw(st.integers(1, 5))):
        place = data.draw(st.integers(0, len(content)))
        junk = data.draw(
            st.one_of(st.binary(max_size=4), st.sampled_from([b'"', b",", b"\n", b"\r", b"\0", b"\xff", b"-"]))
        )
        content[place : place + data.draw(st.integers(0, 6))] = junk
    check(write(tmp_path_factory.mktemp("fuzz"), {name: bytes(content)}))


toml_values = st.one_of(
    st.booleans().map(lambda x: str(x).lower()), st.integers().map(str), st.sampled_from(["nan", "inf", "-inf", "1e999", "0.5"]),
    st.sampled_from(['"load"', '"weights"', '"bus"', '"America/Boise"', '"../x"', '"wide"', '"hour_ending"', "[]", "{}", "[1, 'a']",
                     "2026-03-08", "2026-03-08T07:00:00Z", "{a = 1}", '"North"', "-1", "1", '"""a\nb"""']),
    st.text(max_size=6).map(lambda x: "'" + x + "'"),
)  # fmt: skip
KEYS = ["name", "currency", "time_zone", "base_mva", "interval_minutes", "kind", "bus", "susceptance", "taps", "power_balance",
        "transmission", "columns", "congestion_sign", "shape", "clock", "local", "materiality", "deadline_days", "from",
        "holidays", "label", "junk"]  # fmt: skip


@fuzz
@given(
    st.lists(
        st.tuples(
            st.sampled_from(
                ["scenario", "reference", "dc", "penalties", "posted", "posted.columns", "settlement", "x", "["]
            ),
            st.lists(st.tuples(st.sampled_from(KEYS), toml_values), max_size=4),
        ),
        max_size=4,
    )
)
def test_settings(tmp_path_factory: pytest.TempPathFactory, sections: list[tuple[str, list[tuple[str, str]]]]) -> None:
    text = "".join(f"[{name}]\n" + "".join(f"{k} = {v}\n" for k, v in keys) for name, keys in sections)
    check(write(tmp_path_factory.mktemp("fuzz"), {"scenario.toml": text.encode("utf-8", "surrogatepass")}))


posted_settings = st.fixed_dictionaries(
    {},
    optional={
        "shape": st.sampled_from(['"long"', '"wide"']),
        "clock": st.sampled_from(['"start"', '"hour_ending"']),
        "local": st.sampled_from(["true", "false"]),
        "congestion_sign": st.just("-1"),
    },
)
posted_times = st.sampled_from(
    [
        "2026-03-08",
        "2026-03-08T02:00",
        "2026-11-01 HE02",
        "2026-11-01 HE02*",
        "2026-11-01 24:00",
        "2026-11-01 25",
        *HOURS,
        "x",
        "",
    ]
)


@fuzz
@given(
    posted_settings,
    st.lists(st.sampled_from(["interval_start", "date", "hour", "node", "lmp", "component", "HE1", "25", "North", "version", ""]),
             min_size=1, max_size=6),
    st.lists(st.lists(st.one_of(posted_times, cells), min_size=1, max_size=6), max_size=6),
)  # fmt: skip
def test_posted_shapes(
    tmp_path_factory: pytest.TempPathFactory, form: dict[str, str], header: list[str], rows: list[list[str]]
) -> None:
    lines = [header, *([*row, *[""] * len(header)][: len(header)] for row in rows)]
    text = "\n".join(",".join(quote(cell) for cell in line) for line in lines)
    toml = SETTINGS + "[posted]\n" + "".join(f"{key} = {value}\n" for key, value in form.items())
    changes = {"scenario.toml": toml, "posted.csv": text.encode("utf-8", "surrogatepass")}
    check(write(tmp_path_factory.mktemp("fuzz"), changes))


@fuzz
@given(st.sampled_from(sorted(TABLES)), st.data())
def test_parquet(tmp_path_factory: pytest.TempPathFactory, name: str, data: st.DataObject) -> None:
    n = data.draw(st.integers(0, 4))
    kinds = [
        st.floats(),
        st.integers(-(2**62), 2**62),
        st.text(max_size=5),
        st.booleans(),
        st.none(),
        st.sampled_from(NASTY),
    ]
    columns = {}
    for column in TABLES[name].columns:
        kind = data.draw(st.sampled_from([good(column), good(column), *kinds]))
        columns[column.name] = data.draw(st.lists(st.one_of(kind, st.none()), min_size=n, max_size=n))
    folder = write(tmp_path_factory.mktemp("fuzz"), {f"{name}.csv": None})
    try:
        pd.DataFrame(columns).to_parquet(folder / f"{name}.parquet")
    except Exception:  # what cannot be written as Parquet cannot come as Parquet
        return
    check(folder)


@fuzz
@given(st.binary(max_size=200))
def test_parquet_bytes(tmp_path_factory: pytest.TempPathFactory, content: bytes) -> None:
    check(write(tmp_path_factory.mktemp("fuzz"), {"bids.parquet": b"PAR1" + content + b"PAR1"}))


@pytest.mark.parametrize(
    "text", ['"' * 300_001, "a" * 3_000_000, ",".join("a" * 30_000), "\n" * 1_000_000, '"\n' * 100_000]
)
def test_large_nonsense_ends_soon(tmp_path: Path, text: str) -> None:
    check(write(tmp_path, {"bids.csv": text, "posted.csv": text, "scenario.toml": text}))
