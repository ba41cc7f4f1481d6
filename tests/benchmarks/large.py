"""Solve the large networks of the published library in every formulation, with prices and certificate.

    python -m tests.benchmarks.large --cases case6515_rte,case10000_goc --formulations dc,dc-loss,soc,ac --out large.csv

Needs the extra `published`. Every solve runs in a process of its own with a time limit, so that neither a crash nor a
wandering solver holds up the rest, and its peak memory is its own. One row is written as each solve ends. The AC
dispatch starts from the cone solution, as in a run; its row carries the cone's verdict too.

Source of the published figures: "The Power Grid Library for Benchmarking AC Optimal Power Flow Algorithms",
arXiv:1908.02788, baseline table.
"""

from __future__ import annotations

import argparse
import csv
import json
import os
import subprocess
import sys
import time
from dataclasses import dataclass
from pathlib import Path
from typing import Any

COLUMNS = (
    "case",
    "buses",
    "branches",
    "formulation",
    "status",
    "verdict",
    "objective",
    "published",
    "against_published",
    "primal_mw",
    "dual",
    "relative_gap",
    "price_residual",
    "marginal_cost_error",
    "fictitious_loss_mw",
    "solver_seconds",
    "total_seconds",
    "split_seconds",
    "cpu_seconds",
    "start_seconds",
    "memory_mb",
    "uniqueness_seconds",
    "not_unique",
    "soc_verdict",
    "soc_seconds",
    "message",
    "reasons",
    "notes",
)
"""Columns of the table: MW, $/MWh, $/h, seconds, MB. ``against_published`` is relative cost error, for ``soc`` the gap
minus the published gap in percentage points."""


@dataclass(frozen=True, kw_only=True)
class Trial:
    """One solve to be made."""

    case: str
    formulation: str
    uniqueness: bool
    cold: bool


def measure(trial: Trial) -> dict[str, Any]:
    """Solve in this process and return one row."""
    import resource

    import numpy as np

    from lmpgap.dispatch.ac_check import ac_check
    from lmpgap.dispatch.formulation import build_formulation
    from lmpgap.dispatch.limits import FlowLimits
    from lmpgap.dispatch.options import DispatchOptions
    from lmpgap.prices.certificate import certify
    from lmpgap.prices.components import split_prices
    from lmpgap.prices.uniqueness import price_intervals
    from lmpgap.scenario.settings import DcConvention
    from tests.support.published import load_published, published_figures

    network, inputs = load_published(trial.case)
    figures = published_figures().get(trial.case)
    # The library's own convention for the lossless dispatch, so that its cost can be compared; the usual one otherwise.
    library = DcConvention(susceptance="impedance", taps=False)
    options = DispatchOptions(
        dc=library if trial.formulation == "dc" else DcConvention(), keep_stationarity=trial.uniqueness
    )
    limits = FlowLimits.none(network.n_branch)
    weights = np.maximum(inputs.load_p, 0.0)
    weights /= weights.sum()
    row: dict[str, Any] = {"case": trial.case, "buses": network.n_bus, "branches": network.n_branch}
    row["formulation"] = trial.formulation
    start = None
    if trial.formulation == "ac" and not trial.cold:
        start = build_formulation("soc", network, inputs.branch_in_service, options).solve(inputs, limits)
        row["start_seconds"] = start.total_seconds
    cpu, began = time.process_time(), time.perf_counter()
    formulation = build_formulation(trial.formulation, network, inputs.branch_in_service, options)
    result = formulation.solve(inputs, limits, start)
    row["total_seconds"] = time.perf_counter() - began
    row["cpu_seconds"] = time.process_time() - cpu
    began = time.perf_counter()
    split = split_prices(network, inputs.branch_in_service, result, weights) if result.status.has_solution else None
    row["split_seconds"] = time.perf_counter() - began
    certificate = certify(network, inputs, result, split, ac=result if trial.formulation == "ac" else None)
    row |= {
        "status": certificate.status,
        "verdict": certificate.verdict,
        "objective": certificate.objective,
        "primal_mw": certificate.primal_residual,
        "dual": certificate.dual_residual,
        "relative_gap": certificate.duality_gap / max(abs(certificate.objective), 1.0),
        "price_residual": certificate.price_residual,
        "marginal_cost_error": certificate.marginal_cost_error,
        "fictitious_loss_mw": certificate.fictitious_loss_mw,
        "solver_seconds": certificate.solver_seconds,
        "message": result.message,
        "reasons": "; ".join(certificate.reasons),
        "notes": "; ".join(result.notes),
    }
    if figures is not None:
        row |= _against_published(trial.formulation, certificate.objective, figures)
    if start is not None and start.status.has_solution:
        began = time.perf_counter()
        relaxed = split_prices(network, inputs.branch_in_service, start, weights)
        check = ac_check(network, inputs, start, limits)
        row["soc_verdict"] = certify(network, inputs, start, relaxed, ac=result, check=check).verdict
        row["soc_seconds"] = time.perf_counter() - began
    if trial.uniqueness and result.stationarity is not None:
        began = time.perf_counter()
        intervals = price_intervals(result.stationarity, network.base_mva)
        row["uniqueness_seconds"] = time.perf_counter() - began
        width = np.nan_to_num(intervals.high - intervals.low)
        row["not_unique"] = int(np.count_nonzero(width > options.tolerances.interval_width))
    row["memory_mb"] = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    return row


def _against_published(formulation: str, objective: float, figures: Any) -> dict[str, float]:
    if formulation == "soc":
        gap = 100.0 * (1.0 - objective / figures.ac_cost)
        return {"published": figures.soc_gap, "against_published": gap - figures.soc_gap}
    if formulation in ("dc", "ac"):
        cost = figures.dc_cost if formulation == "dc" else figures.ac_cost
        return {"published": cost, "against_published": objective / cost - 1.0}
    return {}


def run(trial: Trial, seconds: float) -> dict[str, Any]:
    """Measure in a process of its own; a crash or a passed limit becomes a row as well."""
    command = [sys.executable, "-m", "tests.benchmarks.large", "--worker", trial.case, trial.formulation]
    command += ["--uniqueness"] * trial.uniqueness + ["--cold"] * trial.cold
    environment = os.environ | {"OMP_NUM_THREADS": "1", "OPENBLAS_NUM_THREADS": "1"}
    empty = {"case": trial.case, "formulation": trial.formulation}
    try:
        done = subprocess.run(
            command, capture_output=True, text=True, timeout=seconds, check=False, env=environment, cwd=_root()
        )
    except subprocess.TimeoutExpired:
        return empty | {"status": "time limit", "message": f"stopped after {seconds:g} s"}
    if done.returncode != 0:
        last = done.stderr.strip().splitlines()[-1:] or [f"exit status {done.returncode}"]
        return empty | {"status": "crash", "message": last[0]}
    answer: dict[str, Any] = json.loads(done.stdout.strip().splitlines()[-1])
    return answer


def large_cases(smallest: int = 1000, largest: int = 10000) -> list[str]:
    """Return the library's networks of typical condition between two sizes, smallest first."""
    from tests.support.published import published_figures

    sized = [(f.buses, name) for name, f in published_figures().items() if smallest <= f.buses <= largest]
    return [name for _, name in sorted(sized) if "__" not in name]


def main() -> None:
    """Run what the command line asks for."""
    parser = argparse.ArgumentParser(description="large networks of the published library")
    parser.add_argument("--cases", default="", help="comma-separated; all typical ones of 1,000 to 10,000 buses")
    parser.add_argument("--formulations", default="dc,dc-loss,soc,ac")
    parser.add_argument("--out", type=Path, default=Path("large.csv"))
    parser.add_argument("--seconds", type=float, default=600.0, help="time limit of each solve")
    parser.add_argument("--uniqueness", action="store_true", help="price intervals too")
    parser.add_argument("--cold", action="store_true", help="ac from a flat start")
    parser.add_argument("--worker", nargs=2, metavar=("CASE", "FORMULATION"), help=argparse.SUPPRESS)
    chosen = parser.parse_args()
    if chosen.worker:
        case, formulation = chosen.worker
        row = measure(Trial(case=case, formulation=formulation, uniqueness=chosen.uniqueness, cold=chosen.cold))
        sys.stdout.write(json.dumps(row) + "\n")
        return
    cases = [name for name in chosen.cases.split(",") if name] or large_cases()
    chosen.out.parent.mkdir(parents=True, exist_ok=True)
    with chosen.out.open("w", newline="") as file:
        writer = csv.DictWriter(file, COLUMNS)
        writer.writeheader()
        for case in cases:
            for formulation in chosen.formulations.split(","):
                trial = Trial(case=case, formulation=formulation, uniqueness=chosen.uniqueness, cold=chosen.cold)
                row = run(trial, chosen.seconds)
                writer.writerow({key: _short(value) for key, value in row.items()})
                file.flush()
                sys.stdout.write(_line(row) + "\n")
                sys.stdout.flush()


def _short(value: Any) -> Any:
    return f"{value:.7g}" if isinstance(value, float) else value


def _line(row: dict[str, Any]) -> str:
    shown = ("case", "formulation", "status", "verdict", "against_published", "price_residual", "total_seconds")
    cells = [f"{row[key]:.3g}" if isinstance(row.get(key), float) else str(row.get(key, "")) for key in shown]
    return "  ".join(cells) + f"  {row.get('memory_mb', float('nan')):.0f} MB  {row.get('message', '')}"


def _root() -> Path:
    return Path(__file__).resolve().parents[2]


if __name__ == "__main__":
    main()
