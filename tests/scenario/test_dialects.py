"""CSV as it comes: byte order marks, separators, decimal commas, quotes, line ends; and Parquet of all types."""

from __future__ import annotations

import pickle
from decimal import Decimal
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet
import pytest

from lmpgap.errors import ScenarioError
from lmpgap.scenario.read import read_scenario, scenario_from_tables
from lmpgap.scenario.scenario import Scenario
from lmpgap.scenario.tables import TABLES
from tests.scenario.folder import BASE, faults, read, write
from tests.scenario.test_networks import assert_equal


def assert_same(mine: Scenario, other: Scenario) -> None:
    assert_equal(mine.network, other.network)
    assert mine.n_interval == other.n_interval
    for position in range(mine.n_interval):
        assert_equal(mine.inputs(position), other.inputs(position))
    for name in TABLES:
        pd.testing.assert_frame_equal(mine.tables[name], other.tables[name])


@pytest.fixture
def base(tmp_path: Path) -> Scenario:
    return read(tmp_path / "base")


def in_all_tables(change) -> dict[str, bytes]:  # type: ignore[no-untyped-def]
    return {name: change(text) for name, text in BASE.items() if name.endswith(".csv")}


@pytest.mark.parametrize(
    "change",
    [
        lambda text: b"\xef\xbb\xbf" + text.encode(),
        lambda text: text.replace("\n", "\r\n").encode(),
        lambda text: text.replace("\n", "\r").encode(),
        lambda text: text.rstrip("\n").encode(),
        lambda text: (text + "\n\n   \n").encode(),
        lambda text: text.encode("utf-16"),
        lambda text: text.replace(",", ";").encode(),
        lambda text: text.replace(",", "\t").encode(),
        lambda text: text.replace(",", ";").replace(".", ",").encode(),
        lambda text: text.replace(",", " , ").encode(),
        lambda text: "\n".join(",".join(f'"{x}"' for x in line.split(",")) for line in text.splitlines()).encode(),
        lambda text: ("\n" + text).encode(),
        lambda text: "\n".join(f"{line}," for line in text.splitlines()).encode(),
    ],
    ids=[
        "byte order mark", "CRLF", "CR", "no last line end", "blank lines", "UTF-16", "semicolons", "tabs",
        "semicolons and decimal commas", "blanks around", "quotes", "blank first line", "empty last column",
    ],
)  # fmt: skip
def test_every_dialect_reads_the_same(base: Scenario, tmp_path: Path, change) -> None:  # type: ignore[no-untyped-def]
    assert_same(read(tmp_path / "changed", in_all_tables(change)), base)


def test_order_of_columns_does_not_matter(base: Scenario, tmp_path: Path) -> None:
    def reverse(text: str) -> bytes:
        return "\n".join(",".join(reversed(line.split(","))) for line in text.splitlines()).encode()

    assert_same(read(tmp_path / "changed", in_all_tables(reverse)), base)


def test_empty_rows_that_spreadsheets_leave_are_skipped(base: Scenario, tmp_path: Path) -> None:
    text = BASE["loads.csv"] + ",,,\n,,,\n"
    assert_same(read(tmp_path / "changed", {"loads.csv": text}), base)


def test_a_point_among_decimal_commas_is_a_fault(tmp_path: Path) -> None:
    text = "bus;mw;mvar\nSouth;90,5;1.234\nEast;30;2\n"
    assert faults(tmp_path, {"loads.csv": text}) == [
        "loads.csv, line 2, column mvar: has a point in a file that writes decimals with a comma: it may be a "
        "thousands separator (found '1.234'); allowed: one decimal mark in the whole file, and no thousands separators"
    ]


def test_thousands_in_a_decimal_comma_file_are_a_fault(tmp_path: Path) -> None:
    found = faults(tmp_path, {"loads.csv": "bus;mw\nSouth;1.090,5\n"})
    assert len(found) == 1
    assert "has a point in a file that writes decimals with a comma" in found[0]


def test_names_keep_their_blanks_inside_and_their_zeros(tmp_path: Path) -> None:
    scenario = read(
        tmp_path,
        {
            "buses.csv": 'bus,base_kv,v_min_pu,v_max_pu\n007,1,0,1\n" West , ""End"" ",1,0,1\nÖst 中,1,0,1\n',
            "branches.csv": 'branch,from_bus,to_bus,r_pu,x_pu\na,007,"West , ""End""",0,1\nb,007,Öst 中,0,1\n',
            "resources.csv": "resource,bus,eco_min_mw,eco_max_mw\ng,007,0,1\n",
            "offers.csv": "resource,segment,from_mw,to_mw,price\ng,1,0,1,1\n",
            "loads.csv": "bus,mw\nÖst 中,1\n",
        },
    )
    assert scenario.network.buses == ("007", 'West , "End"', "Öst 中")


def parquet(folder: Path) -> Path:
    """Write the base folder with all tables as Parquet, typed as pandas would."""
    write(folder, {name: None for name in BASE if name.endswith(".csv")})
    for name, text in BASE.items():
        if name.endswith(".csv"):
            path = folder / name
            path.write_text(text)
            frame = pd.read_csv(path)
            path.unlink()
            if "interval_start" in frame:
                frame["interval_start"] = pd.to_datetime(frame["interval_start"], utc=True)
            frame.to_parquet(folder / f"{name.removesuffix('.csv')}.parquet")
    return folder


def test_parquet_reads_the_same(base: Scenario, tmp_path: Path) -> None:
    assert_same(read_scenario(parquet(tmp_path / "parquet")), base)


def test_data_frames_read_the_same(base: Scenario) -> None:
    tables = {name: frame for name, frame in base.tables.items() if len(frame)}
    assert_same(scenario_from_tables(base.settings, tables), base)


def test_data_frames_have_faults_too(base: Scenario) -> None:
    tables = dict(base.tables)
    tables["loads"] = tables["loads"].assign(bus="nowhere")
    with pytest.raises(ScenarioError, match="loads, line 1, column bus: is not in buses"):
        scenario_from_tables(base.settings, tables)
    with pytest.raises(ScenarioError, match="load: is not a table of a scenario; did you mean 'loads'"):
        scenario_from_tables(base.settings, {**base.tables, "load": base.tables["loads"]})


@pytest.mark.parametrize(
    ("column", "expected"),
    [
        (pa.array([1, 2], pa.int8()), [1.0, 2.0]),
        (pa.array([1, 2], pa.uint64()), [1.0, 2.0]),
        (pa.array([1, 2], pa.float32()), [1.0, 2.0]),
        (pa.array([1, 2], pa.float16()), [1.0, 2.0]),
        (pa.array(["1", " 2.0 "]), [1.0, 2.0]),
        (pa.array(["1", "2"]).dictionary_encode(), [1.0, 2.0]),
        (pa.array([Decimal("1.0"), Decimal("2.0")]), [1.0, 2.0]),
        (pa.array([1, 2], pa.int64()).slice(0, 2), [1.0, 2.0]),
        (pa.chunked_array([pa.array([1.0]), pa.array([], pa.float64()), pa.array([2.0])]), [1.0, 2.0]),
    ],
    ids=["int8", "uint64", "float32", "float16", "text", "dictionary", "decimal", "slice", "chunks"],
)
def test_parquet_numbers_of_every_type(tmp_path: Path, column: pa.Array, expected: list[float]) -> None:
    folder = write(tmp_path, {"loads.csv": None})
    pyarrow.parquet.write_table(pa.table({"bus": ["South", "East"], "mw": column}), folder / "loads.parquet")
    assert read_scenario(folder).tables["loads"]["mw"].tolist() == expected


def test_parquet_gaps_are_empty_cells(tmp_path: Path) -> None:
    folder = write(tmp_path, {"loads.csv": None})
    table = pa.table(
        {
            "bus": pa.array(["South", "East", "North"]),
            "mw": pa.array([1.0, 2.0, 3.0]),
            "mvar": pa.array([4, None, 5], pa.int64()),
            "interval_start": pa.array([None, None, None], pa.timestamp("ns", tz="America/Boise")),
        }
    )
    pyarrow.parquet.write_table(table, folder / "loads.parquet")
    assert read_scenario(folder).tables["loads"]["mvar"].tolist() == [4.0, 0.0, 5.0]
    pyarrow.parquet.write_table(table.set_column(1, "mw", pa.array([1.0, None, np.nan])), folder / "loads.parquet")
    with pytest.raises(ScenarioError) as caught:
        read_scenario(folder)
    assert [str(fault) for fault in caught.value.faults] == [
        f"loads.parquet, row {row}, column mw: is empty; allowed: a number [MW]" for row in (2, 3)
    ]


@pytest.mark.parametrize("unit", ["s", "ms", "us", "ns"])
def test_parquet_times_of_every_unit(tmp_path: Path, unit: str) -> None:
    folder = write(tmp_path, {"loads.csv": None})
    times = pd.DatetimeIndex(["2026-03-08T06:00Z", "2026-03-08T07:00Z"]).as_unit(unit)
    table = pa.table({"bus": ["South", "South"], "mw": [1.0, 2.0], "interval_start": pa.array(times)})
    pyarrow.parquet.write_table(table, folder / "loads.parquet")
    assert read_scenario(folder).interval_starts.tolist() == times.tolist()


@pytest.mark.parametrize(
    ("column", "message"),
    [
        (pa.array([pd.Timestamp("2026-03-08T06:00"), None]), "has no offset, so that it may mean two different hours"),
        (pa.array([10**17, 0], pa.timestamp("ms", tz="UTC")), "lies outside the years 1970 to 2200"),
        (pa.array([5, 6], pa.date32()), "has no offset"),
        (pa.array([5.5, 6.5]), "is not a time"),
        (pa.array([[1], [2]]), "is not a time"),
        (pa.array([b"\xff", b"x"]), "is not a time"),
    ],
    ids=["no offset", "far future", "date", "number", "list", "binary"],
)
def test_parquet_times_that_are_none(tmp_path: Path, column: pa.Array, message: str) -> None:
    folder = write(tmp_path, {"loads.csv": None})
    table = pa.table({"bus": ["South", "South"], "mw": [1.0, 2.0], "interval_start": column})
    pyarrow.parquet.write_table(table, folder / "loads.parquet")
    with pytest.raises(ScenarioError, match=f"loads.parquet, row 1, column interval_start: {message}"):
        read_scenario(folder)


def test_numbered_buses_are_names_however_they_are_stored(tmp_path: Path) -> None:
    rows = {
        "buses.csv": "bus,base_kv,v_min_pu,v_max_pu\n1,1,0,1\n2,1,0,1\n",
        "branches.csv": "branch,from_bus,to_bus,r_pu,x_pu\na,1,2,0,1\n",
        "resources.csv": "resource,bus,eco_min_mw,eco_max_mw\ng,1,0,1\n",
        "offers.csv": "resource,segment,from_mw,to_mw,price\ng,1,0,1,1\n",
        "loads.csv": None,
    }
    folder = write(tmp_path, rows)
    for buses in ([1, 2], [1.0, 2.0], ["1", "2"]):
        pd.DataFrame({"bus": buses, "mw": [3.0, 4.0]}).to_parquet(folder / "loads.parquet")
        assert read_scenario(folder).tables["loads"]["bus"].tolist() == ["1", "2"]


def test_a_scenario_travels_to_workers(base: Scenario) -> None:
    _ = base.tables["loads"], base.network
    assert_same(pickle.loads(pickle.dumps(base)), base)


def test_hashes_are_of_the_bytes(base: Scenario) -> None:
    import hashlib

    assert set(base.hashes) == set(BASE)
    for name, text in BASE.items():
        assert base.hashes[name] == hashlib.sha256(text.encode()).hexdigest()


def test_frames_have_the_contract_columns_and_defaults(base: Scenario) -> None:
    assert set(base.tables) == set(TABLES)
    for name, frame in base.tables.items():
        assert tuple(frame.columns) == TABLES[name].column_names
    assert base.tables["branches"]["tap_ratio"].tolist() == [1.0, 0.98, 1.0]
    assert base.tables["offers"]["end_price"].tolist() == [10.0, 30.0, 40.0]
    assert str(base.tables["loads"]["interval_start"].dtype) == "datetime64[us, UTC]"
    assert str(base.tables["posted"]["interval_start"].dtype) == "datetime64[us, UTC]"
    assert base.tables["buses"]["map_x"].isna().tolist() == [False, False, True]
    assert base.tables["resources"]["fuel"].tolist() == ["water", "gas"]


def test_flags_in_words(tmp_path: Path) -> None:
    text = BASE["resources.csv"].replace("no_load_cost\n", "no_load_cost,in_service\n")
    text = text.replace("100\n", "100,No\n").replace("gas,\n", "gas,,\n")
    scenario = read(tmp_path, {"resources.csv": text})
    assert scenario.tables["resources"]["in_service"].tolist() == [False, True]
