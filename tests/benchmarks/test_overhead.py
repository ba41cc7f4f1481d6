"""What the whole way from hours to priced and certified tables takes, against the solvers alone.

The solver seconds are those of the very matrices of the run, measured inside it, so that the machine's load weighs on
both sides of the ratio. Absolute times are recorded and never asserted.
"""

from __future__ import annotations

import os
from pathlib import Path
from statistics import median

import pytest

from tests.benchmarks.trial import Trial, trial

REPEATS = 3


def repeated(scenario: Path, folder: Path, workers: int, repeats: int = REPEATS) -> list[Trial]:
    return [trial(scenario, folder / f"run{n}", workers=workers) for n in range(repeats)]


def in_processor_seconds(scenario: Path, folder: Path) -> Trial:
    return trial(scenario, folder, processor=True)


def line(name: str, workers: int, trials: list[Trial]) -> str:
    middle = sorted(trials, key=lambda t: t.price_seconds)[len(trials) // 2]
    hour = 1e3 / middle.intervals
    return (
        f"{name}, {workers} worker(s): {median(t.ratio for t in trials):.2f} x bare solver seconds; "
        f"{middle.price_seconds:.1f} s for {middle.solves} solves, bare {middle.bare_seconds:.1f} s, "
        f"{hour * (middle.price_seconds - middle.bare_seconds):.1f} ms besides per hour, "
        f"imports {middle.import_seconds:.2f} s, reading {middle.read_seconds:.2f} s, peak {middle.peak_mb:.0f} MB"
    )


def test_73_buses_one_and_two_workers(week73, tmp_path, record, benchmark):
    one = repeated(week73, tmp_path / "one", workers=1)
    two = benchmark.pedantic(repeated, args=(week73, tmp_path / "two", 2), rounds=1)
    speedup = median(t.price_seconds for t in one) / median(t.price_seconds for t in two)
    record(line("73 buses, one week", 1, one))
    record(line("73 buses, one week", 2, two) + f"; {speedup:.2f} x faster than with one")
    alone = in_processor_seconds(week73, tmp_path / "processor")
    record(line("73 buses, one week, processor seconds", 1, [alone]))
    benchmark.extra_info.update(ratio=alone.ratio, speedup=speedup)
    assert alone.ratio < 1.7
    # Two processes are only twice as fast where two cores are free.
    if os.getloadavg()[0] < 2.5:
        assert speedup > 1.5


def test_demo_one_and_two_workers(demo, tmp_path, record, benchmark):
    one = repeated(demo, tmp_path / "one", workers=1)
    two = benchmark.pedantic(repeated, args=(demo, tmp_path / "two", 2, 1), rounds=1)
    record(line("demo week", 1, one))
    record(line("demo week", 2, two))
    alone = in_processor_seconds(demo, tmp_path / "processor")
    record(line("demo week, processor seconds", 1, [alone]))
    benchmark.extra_info.update(ratio=alone.ratio)
    assert alone.ratio < 2.0
    assert max(t.peak_mb for t in one) < 1500.0


@pytest.mark.parametrize("part", ["0:24", "0:72", "0:168"])
def test_growth_with_hours(week73, tmp_path, record, benchmark, part):
    """Time per hour does not rise with the number of hours, and neither does memory."""
    measured = benchmark.pedantic(
        trial, args=(week73, tmp_path / "run"), kwargs={"formulations": "dc,dc-loss", "hours": part}, rounds=1
    )
    per_hour = 1e3 * measured.price_seconds / measured.intervals
    record(
        f"73 buses, dc and dc-loss, {measured.intervals} hours: {per_hour:.1f} ms per hour, "
        f"{measured.ratio:.2f} x bare, peak {measured.peak_mb:.0f} MB"
    )
    benchmark.extra_info.update(ms_per_hour=per_hour, peak_mb=measured.peak_mb)
    assert measured.intervals == int(part.partition(":")[2])
