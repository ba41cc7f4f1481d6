"""One run in a process of its own, timed: ``python -m tests.benchmarks.trial SCENARIO RUN [options]`` prints JSON.

A process of its own, so that nothing is warm that is cold in real use, and so that its peak memory is that of the run.
"""

from __future__ import annotations

import argparse
import json
import os
import resource
import subprocess
import sys
import time
from dataclasses import dataclass
from importlib import import_module
from pathlib import Path


@dataclass(frozen=True, kw_only=True)
class Trial:
    """What one run took.

    Attributes
    ----------
    import_seconds, read_seconds, price_seconds : float
        Importing the package, reading the scenario, and the run itself with its tables written [s].
    bare_seconds : float
        Inside the solvers alone, on the matrices of this very run, summed over all solves [s].
    by_formulation
        The same by formulation [s].
    solves, intervals : int
    peak_mb : float
        Largest memory of the process, or of its largest worker if that is larger [MB].
    """

    import_seconds: float
    read_seconds: float
    price_seconds: float
    bare_seconds: float
    by_formulation: dict[str, float]
    solves: int
    intervals: int
    peak_mb: float

    @property
    def ratio(self) -> float:
        """Run over bare solver seconds [-]."""
        return self.price_seconds / self.bare_seconds

    @property
    def wall_seconds(self) -> float:
        """Everything: imports, reading and the run [s]."""
        return self.import_seconds + self.read_seconds + self.price_seconds


def trial(
    scenario: Path,
    run: Path,
    *,
    workers: int = 1,
    formulations: str = "",
    hours: str = "",
    processor: bool = False,
) -> Trial:
    """Run once in a new process and return what it took.

    Parameters
    ----------
    formulations
        Separated by commas; all by default.
    hours
        First and last position plus one, e.g. ``"0:24"``; all by default.
    processor
        Measure processor seconds of the one process instead of the time on the wall: on a machine that others use,
        what they do does not count then.
    """
    command = [sys.executable, "-m", "tests.benchmarks.trial", str(scenario), str(run), "--workers", str(workers)]
    command += ["--formulations", formulations] if formulations else []
    command += ["--hours", hours] if hours else []
    command += ["--processor"] if processor else []
    environment = {**os.environ, "OMP_NUM_THREADS": "1", "OPENBLAS_NUM_THREADS": "1"}
    root = Path(__file__).parent.parent.parent
    done = subprocess.run(command, env=environment, cwd=root, capture_output=True, text=True, check=False)
    if done.returncode != 0:
        raise RuntimeError(f"the run failed:\n{done.stderr}")
    return Trial(**json.loads(done.stdout.splitlines()[-1]))


def main() -> None:
    """Run once in this process and print what it took."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("scenario", type=Path)
    parser.add_argument("run", type=Path)
    parser.add_argument("--workers", type=int, default=1)
    parser.add_argument("--formulations", default="dc,dc-loss,soc,ac")
    parser.add_argument("--hours", default="")
    parser.add_argument("--processor", action="store_true", help="processor seconds; one worker only")
    chosen = parser.parse_args()
    if chosen.processor:
        # The solvers' seconds are read from the same clock.
        time.perf_counter = time.process_time

    began = time.perf_counter()
    from lmpgap.runs.price import price
    from lmpgap.scenario.read import read_scenario

    if chosen.workers == 1:
        # With workers this is imported over there, and that is part of the run.
        import_module("lmpgap.runs.interval")
    imported = time.perf_counter()
    scenario = read_scenario(chosen.scenario)
    read = time.perf_counter()
    positions = None
    if chosen.hours:
        first, _, last = chosen.hours.partition(":")
        positions = list(range(int(first), int(last)))
    folder = price(
        scenario,
        chosen.run,
        formulations=tuple(chosen.formulations.split(",")),
        workers=chosen.workers,
        positions=positions,
        # Solves that come on top of the four formulations have solver time of their own.
        audit=False,
    )
    priced = time.perf_counter()
    solves = folder.table("solves")
    by_formulation = solves.groupby("formulation")["solver_seconds"].sum()
    peak = max(resource.getrusage(who).ru_maxrss for who in (resource.RUSAGE_SELF, resource.RUSAGE_CHILDREN))
    print(  # noqa: T201 - this is the output of a script
        json.dumps(
            {
                "import_seconds": imported - began,
                "read_seconds": read - imported,
                "price_seconds": priced - read,
                "bare_seconds": float(by_formulation.sum()),
                "by_formulation": by_formulation.to_dict(),
                "solves": len(solves),
                "intervals": int(solves["interval_start"].nunique()),
                "peak_mb": peak / 1024.0,
            }
        )
    )


if __name__ == "__main__":
    main()
