"""One hour with every single outage, in every formulation: how the time grows with the network.

    python -m pytest tests/benchmarks/test_secure_hours.py -m benchmark_suite

Seconds are those of the processor, so that other work on the machine does not count. Ratings after an outage are 1.1
times those of the library and give way at 1,500 $/MWh: not every network withstands every outage.
"""

from __future__ import annotations

import time

import pytest
from threadpoolctl import threadpool_limits

from lmpgap.dispatch.formulation import build_formulation
from lmpgap.dispatch.limits import FlowLimits
from lmpgap.dispatch.options import DispatchOptions
from lmpgap.dispatch.outage_factors import OutageFactors
from lmpgap.dispatch.security import solve_secure
from lmpgap.scenario.settings import Penalties
from tests.benchmarks.test_growth import with_all_single_outages
from tests.support.published import load_published

OPTIONS = DispatchOptions(penalties=Penalties(transmission=1500.0))
HOUR_SECONDS = 60.0
"""A secure hour in one formulation."""


@pytest.mark.usefixtures("library")
@pytest.mark.parametrize("name", ["case300_ieee", "case793_goc", "case1354_pegase", "case2000_goc"])
def test_secure_hour_in_every_formulation(name, record):
    plain, inputs = load_published(name)
    network = with_all_single_outages(plain, plain.n_branch)
    none = FlowLimits.none(network.n_branch)
    outages = OutageFactors(network, inputs.branch_in_service, OPTIONS.dc)
    start = None
    for formulation in ("dc", "dc-loss", "soc", "ac"):
        dispatch = build_formulation(formulation, network, inputs.branch_in_service, OPTIONS)
        with threadpool_limits(limits=1):
            began = time.process_time()
            alone = dispatch.solve(inputs, none, start)
            solved = time.process_time()
            result, limits = solve_secure(dispatch, inputs, none, outages, OPTIONS.tolerances, start)
            secured = time.process_time()
        start = result if formulation == "soc" else None
        (told,) = [note for note in result.notes if "pairs enforced" in note]
        record(
            f"{network.n_bus:,} buses x {network.n_branch:,} outages, {formulation}: {secured - solved:.1f} s "
            f"({solved - began:.2f} s without), {told}"
        )
        assert result.status.has_solution, formulation
        assert limits.n_row > 0
        assert result.objective > alone.objective
        assert secured - solved < HOUR_SECONDS
