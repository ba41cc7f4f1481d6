"""Growth with the size of the network: solve, price and certify one hour of library networks, and draw it.

``python -m tests.benchmarks.growth --svg tests/benchmarks/growth.svg`` writes the picture of the developers' guide.
Everything runs on one thread and in processor seconds, so that what others do on the machine does not count.
"""

from __future__ import annotations

import argparse
import time
from dataclasses import dataclass, replace
from pathlib import Path
from unittest.mock import patch

import numpy as np
from threadpoolctl import threadpool_limits

from lmpgap.dispatch.ac_check import ac_check
from lmpgap.dispatch.formulation import build_formulation
from lmpgap.dispatch.limits import FlowLimits
from lmpgap.dispatch.options import DispatchOptions
from lmpgap.dispatch.result import DispatchResult
from lmpgap.prices.certificate import certify
from lmpgap.prices.components import split_prices
from lmpgap.prices.uniqueness import price_intervals
from lmpgap.scenario.network import IntervalInputs, Network
from tests.support.published import load_published

NETWORKS = (
    "case14_ieee",
    "case30_ieee",
    "case57_ieee",
    "case118_ieee",
    "case300_ieee",
    "case793_goc",
    "case1354_pegase",
    "case2000_goc",
)
FORMULATIONS = ("dc", "dc-loss", "soc", "ac")


@dataclass(frozen=True, kw_only=True)
class Hour:
    """Seconds of one hour under one formulation; building is once per topology, the rest once per hour."""

    network: str
    n_bus: int
    formulation: str
    status: str
    build: float
    solver: float
    besides: float
    price_residual: float


def measure(name: str) -> list[Hour]:
    """Return the times of one network under all formulations."""
    network, inputs = load_published(name)
    hours: list[Hour] = []
    results: dict[str, DispatchResult] = {}
    # The dispatch reads its solver's seconds from the same clock.
    with threadpool_limits(limits=1), patch("time.perf_counter", time.process_time):
        for formulation in FORMULATIONS:
            began = time.perf_counter()
            dispatch = build_formulation(
                formulation, network, inputs.branch_in_service, DispatchOptions(keep_stationarity=True)
            )
            limits = FlowLimits.none(network.n_branch)
            # What a topology needs once (matrices, derivatives) is made at its first hour: the difference to the next.
            dispatch.solve(inputs, limits, results.get("soc"))
            first = time.perf_counter() - began
            nudged = replace(inputs, load_p=inputs.load_p * 0.999, load_q=inputs.load_q * 0.999)
            again = solver = besides = np.inf
            # The best of a few: caches are cold the first time.
            for _ in range(5 if network.n_bus < 500 else 2):
                began = time.perf_counter()
                result = dispatch.solve(nudged, limits, results.get("soc"))
                solved = time.perf_counter()
                residual = float("nan")
                if result.status.has_solution:
                    residual = _price(network, nudged, result, limits, results.get("ac"))
                took = time.perf_counter() - began
                again = min(again, solved - began)
                solver = min(solver, result.solver_seconds)
                besides = min(besides, took - result.solver_seconds)
            results[formulation] = result
            hours.append(
                Hour(
                    network=name,
                    n_bus=network.n_bus,
                    formulation=formulation,
                    status=result.status.value,
                    build=max(first - again, 0.0),
                    solver=solver,
                    besides=besides,
                    price_residual=residual,
                )
            )
    return hours


def _price(
    network: Network, inputs: IntervalInputs, result: DispatchResult, limits: FlowLimits, ac: DispatchResult | None
) -> float:
    """Split, search intervals and certify as a run does; return the price residual [$/MWh]."""
    weights = np.maximum(inputs.load_p, 0.0)
    split = split_prices(network, inputs.branch_in_service, result, weights / weights.sum(), reactive_sources=8)
    assert result.stationarity is not None
    price_intervals(result.stationarity, network.base_mva)
    check = ac_check(network, inputs, result, limits) if result.relaxed else None
    certify(network, inputs, result, split, ac=ac if result.relaxed else None, check=check)
    return split.price_residual


def exponent(hours: list[Hour], formulation: str, part: str, least: int = 100) -> float:
    """Return the growth exponent of seconds over buses from ``least`` buses on, by least squares on logarithms."""
    rows = [(h.n_bus, getattr(h, part)) for h in hours if h.formulation == formulation and h.n_bus >= least]
    buses, seconds = np.log(np.array(rows)).T
    return float(np.polyfit(buses, seconds, 1)[0])


# --- the picture ----------------------------------------------------------------------------------------

_WIDTH, _HEIGHT, _LEFT, _TOP, _PANEL = 860, 360, 64, 40, 360
_COLOURS = {"dc": "#4c6a92", "dc-loss": "#2a9d8f", "soc": "#c8763a", "ac": "#8a4f9e"}
_DASHES = {"solver": "", "besides": "5 4"}


def svg(hours: list[Hour]) -> str:
    """Return seconds per hour over buses, both logarithmic: solver on the left, everything besides on the right."""
    buses = [h.n_bus for h in hours]
    seconds = [value for h in hours for value in (h.solver, h.besides)]
    low_x, high_x = np.log10(min(buses)) - 0.05, np.log10(max(buses)) + 0.05
    low_y, high_y = np.floor(np.log10(min(seconds))), np.ceil(np.log10(max(seconds)))
    parts = [
        f'<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 {_WIDTH} {_HEIGHT}" '
        'font-family="system-ui, sans-serif" font-size="12" role="img">',
        "<title>Seconds per hour of the scenario over the number of buses</title>",
        f'<rect width="{_WIDTH}" height="{_HEIGHT}" fill="#fdfcfa"/>',
    ]
    for column, (part, title) in enumerate(
        (("solver", "inside the solver"), ("besides", "everything besides: reading back, split, certificate"))
    ):
        left = _LEFT + column * (_PANEL + 60)
        parts += _panel(hours, part, title, left, (low_x, high_x), (low_y, high_y))
    for n, (name, colour) in enumerate(_COLOURS.items()):
        x = _LEFT + 8 + 84 * n
        parts.append(
            f'<line x1="{x}" y1="{_HEIGHT - 12}" x2="{x + 22}" y2="{_HEIGHT - 12}" stroke="{colour}" stroke-width="3"/>'
        )
        parts.append(f'<text x="{x + 28}" y="{_HEIGHT - 8}" fill="#333">{name}</text>')
    parts.append(
        f'<text x="{_WIDTH - 12}" y="{_HEIGHT - 8}" text-anchor="end" fill="#555">one thread; library networks, '
        "processor seconds per solve</text></svg>"
    )
    return "\n".join(parts)


def _panel(
    hours: list[Hour], part: str, title: str, left: int, x_range: tuple[float, float], y_range: tuple[float, float]
) -> list[str]:
    bottom = _HEIGHT - 56

    def x(value: float) -> float:
        return left + _PANEL * (np.log10(value) - x_range[0]) / (x_range[1] - x_range[0])

    def y(value: float) -> float:
        return bottom - (bottom - _TOP) * (np.log10(value) - y_range[0]) / (y_range[1] - y_range[0])

    parts = [f'<text x="{left}" y="{_TOP - 14}" font-size="13" fill="#222">{title}</text>']
    for power in range(int(y_range[0]), int(y_range[1]) + 1):
        height = y(10.0**power)
        parts.append(f'<line x1="{left}" y1="{height:.1f}" x2="{left + _PANEL}" y2="{height:.1f}" stroke="#e2ded6"/>')
        label = f"{10.0**power:g} s"
        parts.append(f'<text x="{left - 6}" y="{height + 4:.1f}" text-anchor="end" fill="#555">{label}</text>')
    for tick in (10, 30, 100, 300, 1000, 3000, 10_000):
        if x_range[0] <= np.log10(tick) <= x_range[1]:
            parts.append(f'<line x1="{x(tick):.1f}" y1="{_TOP}" x2="{x(tick):.1f}" y2="{bottom}" stroke="#efece5"/>')
            parts.append(
                f'<text x="{x(tick):.1f}" y="{bottom + 16}" text-anchor="middle" fill="#555">{tick:,} buses</text>'
                if tick == 1000
                else f'<text x="{x(tick):.1f}" y="{bottom + 16}" text-anchor="middle" fill="#555">{tick:,}</text>'
            )
    for name, colour in _COLOURS.items():
        rows = sorted((h.n_bus, getattr(h, part)) for h in hours if h.formulation == name)
        points = " ".join(f"{x(n):.1f},{y(max(value, 1e-5)):.1f}" for n, value in rows)
        parts.append(f'<polyline points="{points}" fill="none" stroke="{colour}" stroke-width="2"/>')
        parts += [
            f'<circle cx="{x(n):.1f}" cy="{y(max(value, 1e-5)):.1f}" r="3" fill="{colour}"/>' for n, value in rows
        ]
    return parts


def table(hours: list[Hour]) -> str:
    """Return the times as a Markdown table [ms]."""
    lines = ["| buses | formulation | once per topology | solver | besides | status |", "|---|---|---|---|---|---|"]
    lines += [
        f"| {h.n_bus:,} | {h.formulation} | {1e3 * h.build:.0f} | {1e3 * h.solver:.1f} | {1e3 * h.besides:.1f} "
        f"| {h.status} |"
        for h in hours
    ]
    return "\n".join(lines)


def main() -> None:
    """Measure and write the picture and the table."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--svg", type=Path, required=True)
    chosen = parser.parse_args()
    measure(NETWORKS[0])  # imports
    hours = [hour for name in NETWORKS for hour in measure(name)]
    chosen.svg.write_text(svg(hours), encoding="utf-8")
    print(table(hours))  # noqa: T201 - this is the output of a script
    for name in FORMULATIONS:
        print(  # noqa: T201
            f"{name}: solver grows with buses to the power {exponent(hours, name, 'solver'):.2f}, "
            f"the rest {exponent(hours, name, 'besides'):.2f}"
        )


if __name__ == "__main__":
    main()
