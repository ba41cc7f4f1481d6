# ruff: noqa: T201
"""Speed and memory of reading; run with -m benchmark_suite. Figures are printed with -s.

Times are those of this process alone, so that a busy machine does not fail the tests.
"""

from __future__ import annotations

import time
import tracemalloc
from pathlib import Path

import numpy as np
import pytest

from lmpgap.errors import ScenarioError
from lmpgap.scenario.read import read_scenario
from tests.scenario.folder import write

pytestmark = pytest.mark.benchmark_suite

READ_SECONDS = 10.0
"""A million rows took 3 s on two busy cores; more than three times that means that something became quadratic."""
INPUTS_SECONDS = 1e-3


def ring(n_bus: int, loads: str) -> dict[str, str]:
    """Return a ring of buses with a resource of three segments at each."""
    names = range(n_bus)
    return {
        "buses.csv": "bus,base_kv,v_min_pu,v_max_pu\n" + "".join(f"B{i},230,0.9,1.1\n" for i in names),
        "branches.csv": "branch,from_bus,to_bus,r_pu,x_pu\n"
        + "".join(f"L{i},B{i},B{(i + 1) % n_bus},0.01,0.1\n" for i in names),
        "resources.csv": "resource,bus,eco_min_mw,eco_max_mw\n" + "".join(f"G{i},B{i},0,300\n" for i in names),
        "offers.csv": "resource,segment,from_mw,to_mw,price\n"
        + "".join(f"G{i},{s},{100 * s},{100 * s + 100},{i % 50 + 10 * s}\n" for i in names for s in range(3)),
        "loads.csv": loads,
    }


def starts(n: int) -> list[str]:
    times = np.datetime64("2026-01-01T07:00") + np.arange(n) * np.timedelta64(1, "h")
    return [f"{time}:00Z" for time in times]


def test_a_million_rows(tmp_path: Path) -> None:
    loads = "bus,interval_start,mw,mvar\n" + "".join(
        f"B{i},{start},{(i * 37 + k) % 97}.{k % 10},5\n" for k, start in enumerate(starts(8760)) for i in range(120)
    )
    folder = write(tmp_path, ring(120, loads))
    began = time.process_time()
    scenario = read_scenario(folder)
    seconds = time.process_time() - began
    print(f"\n{8760 * 120:,} rows: {seconds:.1f} s")
    assert scenario.n_interval == 8760
    assert seconds < READ_SECONDS
    write(tmp_path, {**ring(120, loads.replace(",5\n", ",5x\n"))})
    began = time.process_time()
    with pytest.raises(ScenarioError) as caught:
        read_scenario(folder)
    seconds = time.process_time() - began
    print(f"the same with a fault in each row: {seconds:.1f} s")
    assert len(str(caught.value)) < 10_000
    assert seconds < 2 * READ_SECONDS


@pytest.mark.parametrize("n_bus", [50, 3000])
def test_an_interval_takes_less_than_a_millisecond(tmp_path: Path, n_bus: int) -> None:
    loads = "bus,interval_start,mw,mvar\n" + "".join(f"B{i},{s},1,0.5\n" for s in starts(24) for i in range(n_bus))
    scenario = read_scenario(write(tmp_path, ring(n_bus, loads)))
    scenario.inputs(0)
    began = time.process_time()
    for _ in range(20):
        for k in range(24):
            scenario.inputs(k)
    seconds = (time.process_time() - began) / 480
    print(f"\n{n_bus} buses, {3 * n_bus} segments: {1e6 * seconds:.0f} us per interval")
    assert seconds < INPUTS_SECONDS


def test_a_year_needs_no_memory_for_what_does_not_change(tmp_path: Path) -> None:
    loads = "bus,interval_start,mw\n" + "".join(f"B0,{start},1\n" for start in starts(8760))
    scenario = read_scenario(write(tmp_path, ring(1000, loads)))
    tracemalloc.start()
    for k in range(0, 8760, 100):
        scenario.inputs(k)
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    held = sum(
        array.nbytes
        for part in (scenario.source.load, scenario.source.p_range, scenario.source.curves, scenario.source.bids)
        for array in vars(part).values()
        if isinstance(array, np.ndarray)
    )
    print(f"\nheld {held / 1e6:.1f} MB, peak of an interval {peak / 1e6:.1f} MB")
    assert held < 5e6
    assert peak < 5e6
