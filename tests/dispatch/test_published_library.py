"""The convex formulations over the whole published library up to 800 buses; needs the extra `published`.

Source of all figures: "The Power Grid Library for Benchmarking AC Optimal Power Flow Algorithms", arXiv:1908.02788,
baseline table, typical, heavily loaded (api) and small-angle (sad) conditions.
"""

from __future__ import annotations

import numpy as np
import pytest

from lmpgap.dispatch.options import DispatchOptions
from lmpgap.dispatch.result import SolveStatus
from lmpgap.prices.components import split_prices
from lmpgap.scenario.settings import DcConvention
from tests.dispatch.grids import solve
from tests.support.published import load_published, published_figures

LIBRARY = DispatchOptions(dc=DcConvention(susceptance="impedance", taps=False))
FIGURES = {name: figures for name, figures in published_figures().items() if figures.buses <= 800}
TYPICAL = sorted((name for name in FIGURES if "__" not in name), key=lambda name: FIGURES[name].buses)
VARIANTS = sorted((name for name in FIGURES if "__" in name), key=lambda name: FIGURES[name].buses)

pytestmark = pytest.mark.slow


@pytest.mark.parametrize("name", TYPICAL + VARIANTS)
def test_dc_cost(name: str) -> None:
    network, inputs = load_published(name)
    result = solve("dc", network, inputs, LIBRARY)
    published = FIGURES[name].dc_cost
    if np.isnan(published):
        assert result.status is SolveStatus.INFEASIBLE
    else:
        assert result.objective == pytest.approx(published, rel=1e-4)


@pytest.mark.parametrize("name", TYPICAL + VARIANTS)
def test_soc_gap(name: str) -> None:
    network, inputs = load_published(name)
    result = solve("soc", network, inputs)
    figures = FIGURES[name]
    assert result.status is SolveStatus.OPTIMAL
    # The published AC cost has five digits, the gap two decimals.
    gap = 100 * (1 - result.objective / figures.ac_cost)
    if name.endswith("__sad"):
        # The published relaxation also bounds the products c and s by what voltage and angle limits allow, which
        # bites where angles are small: measured up to 0.09 points on 6 of 21 networks. Those bounds are no limits
        # of the grid and would carry prices of their own, so they are left out here.
        assert -0.02 <= gap - figures.soc_gap <= 0.12
    else:
        assert gap == pytest.approx(figures.soc_gap, abs=0.02)


@pytest.mark.parametrize("name", TYPICAL)
@pytest.mark.parametrize("formulation", ["dc", "dc-loss", "soc"])
def test_prices_add_up(name: str, formulation: str) -> None:
    network, inputs = load_published(name)
    result = solve(formulation, network, inputs)
    if not result.status.has_solution:
        pytest.skip(f"{formulation} is {result.status.value} on {name}")
    weights = np.maximum(inputs.load_p, 0.0)
    split = split_prices(network, inputs.branch_in_service, result, weights / weights.sum())
    assert split.price_residual < 1e-3
    assert result.residuals.primal * network.base_mva < 1e-3
    assert result.residuals.dual / network.base_mva < 1e-2
