"""Growth with the number of buses, with outages screened, and memory over a year of hours."""

from __future__ import annotations

import time

import numpy as np
import pytest
from threadpoolctl import threadpool_limits

from lmpgap.dispatch.formulation import build_formulation
from lmpgap.dispatch.limits import FlowLimits
from lmpgap.dispatch.options import DispatchOptions
from lmpgap.dispatch.outage_factors import OutageFactors
from lmpgap.dispatch.security import solve_secure
from lmpgap.scenario.network import Contingencies, Network
from lmpgap.scenario.settings import DcConvention, Penalties
from lmpgap.tolerances import DEFAULT_TOLERANCES
from tests.benchmarks import growth
from tests.benchmarks.trial import trial
from tests.benchmarks.year import write_year
from tests.support.published import load_published

LARGE = "case2000_goc"
PASS_SECONDS = 5.0


@pytest.mark.usefixtures("library")
def test_growth_with_buses(record, benchmark):
    hours = benchmark.pedantic(lambda: [h for name in growth.NETWORKS for h in growth.measure(name)], rounds=1)
    for row in growth.table(hours).splitlines():
        record(row)
    for name in growth.FORMULATIONS:
        solver, besides = (growth.exponent(hours, name, part) for part in ("solver", "besides"))
        record(f"{name}: solver grows with buses to the power {solver:.2f}, everything besides {besides:.2f}")
        benchmark.extra_info[name] = {"solver": solver, "besides": besides}
        assert besides < 1.6  # sparse all the way: anything dense would show as 2 or more
    assert all(h.price_residual < 1e-2 for h in hours if np.isfinite(h.price_residual))


def with_all_single_outages(network: Network, n_outage: int) -> Network:
    """Return the network with its first so many branches as single outages, everything with a rating monitored."""
    chosen = np.arange(min(n_outage, network.n_branch))
    contingencies = Contingencies(
        names=tuple(f"loss of {network.branches[k]}" for k in chosen),
        branches=tuple(np.array([k], dtype=np.int64) for k in chosen),
        monitored=np.isfinite(network.normal_rating),
    )
    return network.with_changes(contingencies=contingencies, emergency_rating=1.1 * network.normal_rating)


@pytest.mark.usefixtures("library")
@pytest.mark.parametrize(("name", "n_outage"), [("case793_goc", 900), (LARGE, 1500), (LARGE, 3000)])
def test_screening_pass(record, benchmark, name, n_outage):
    """Processor seconds of one thread, so that what others do on the machine does not count."""
    plain, inputs = load_published(name)
    network = with_all_single_outages(plain, n_outage)
    dispatch = build_formulation("dc", plain, inputs.branch_in_service, DispatchOptions())
    flows = dispatch.solve(inputs, FlowLimits.none(network.n_branch)).point.p_from
    with threadpool_limits(limits=1):
        began = time.process_time()
        outages = OutageFactors(network, inputs.branch_in_service, DcConvention())
        prepared = time.process_time()
        found = outages.screen(flows, DEFAULT_TOLERANCES.security_excess)
        screened = time.process_time()
        again = benchmark.pedantic(outages.screen, args=(flows, DEFAULT_TOLERANCES.security_excess), rounds=1)
        ended = time.process_time()
    assert again.n_pair == found.n_pair
    record(
        f"{network.n_bus:,} buses x {n_outage:,} outages: {prepared - began:.2f} s once per topology, first pass "
        f"{screened - prepared:.2f} s, further passes {ended - screened:.2f} s, {found.n_pair} violated pairs"
    )
    assert screened - began < PASS_SECONDS


@pytest.mark.usefixtures("library")
@pytest.mark.parametrize(("name", "n_outage"), [("case793_goc", 900), (LARGE, 3000)])
def test_secure_dispatch_of_one_hour(record, benchmark, name, n_outage):
    """All single outages within one hour's solve; soft, as not every outage of a library network can be survived."""
    plain, inputs = load_published(name)
    network = with_all_single_outages(plain, n_outage)
    options = DispatchOptions(penalties=Penalties(power_balance=10_000.0, transmission=3_000.0))
    outages = OutageFactors(network, inputs.branch_in_service, options.dc)
    dispatch = build_formulation("dc", network, inputs.branch_in_service, options)
    alone = dispatch.solve(inputs, FlowLimits.none(network.n_branch))
    result, _ = benchmark.pedantic(
        solve_secure,
        args=(dispatch, inputs, FlowLimits.none(network.n_branch), outages, options.tolerances),
        rounds=1,
    )
    took = benchmark.stats.stats.median
    record(
        f"{network.n_bus:,} buses with {n_outage:,} outages, dc: {took:.1f} s ({result.solver_seconds:.1f} s in the "
        f"solver, {alone.solver_seconds:.2f} s without outages), {result.notes[-1]}"
    )
    assert result.status.has_solution
    assert not any("still violated" in note for note in result.notes)


@pytest.mark.parametrize("formulations", ["dc", "dc-loss"])
def test_a_year_in_constant_memory(demo, tmp_path, record, benchmark, formulations):
    """The year's memory beyond what its tables of inputs take is that of a week."""
    scenario = write_year(demo, tmp_path / "year")
    week = trial(scenario, tmp_path / "week", formulations=formulations, hours="0:168")
    year = benchmark.pedantic(trial, args=(scenario, tmp_path / "run"), kwargs={"formulations": formulations}, rounds=1)
    record(
        f"demo, {formulations}, {year.intervals:,} hours: {year.price_seconds:.0f} s "
        f"({1e3 * year.price_seconds / year.intervals:.1f} ms per hour, {year.ratio:.2f} x bare), "
        f"peak {year.peak_mb:.0f} MB; its first week alone {week.peak_mb:.0f} MB"
    )
    benchmark.extra_info.update(peak_mb=year.peak_mb, week_mb=week.peak_mb)
    assert year.intervals == 8760
    assert year.peak_mb < 1.25 * week.peak_mb
