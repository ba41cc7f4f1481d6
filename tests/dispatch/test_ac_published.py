"""The AC dispatch over the whole published library up to 800 buses; needs the extra `published`.

Source of the costs: "The Power Grid Library for Benchmarking AC Optimal Power Flow Algorithms", arXiv:1908.02788,
baseline table, typical, heavily loaded (api) and small-angle (sad) conditions.
"""

from __future__ import annotations

import numpy as np
import pytest

from lmpgap.dispatch.ac import AcDispatch
from lmpgap.dispatch.limits import FlowLimits
from lmpgap.dispatch.options import DispatchOptions
from lmpgap.dispatch.result import SolveStatus
from lmpgap.dispatch.soc import SocDispatch
from lmpgap.prices.components import split_prices
from lmpgap.tolerances import DEFAULT_TOLERANCES
from tests.support.published import load_published, published_figures

FIGURES = {name: figures for name, figures in published_figures().items() if figures.buses <= 800}
EVERY = sorted(FIGURES, key=lambda name: (FIGURES[name].buses, name))

pytestmark = pytest.mark.slow


@pytest.mark.parametrize("from_cone", [False, True], ids=["flat", "cone"])
@pytest.mark.parametrize("name", EVERY)
def test_ac_cost_and_prices(name: str, from_cone: bool) -> None:
    network, inputs = load_published(name)
    on, options, none = inputs.branch_in_service, DispatchOptions(), FlowLimits.none(network.n_branch)
    start = SocDispatch(network, on, options).solve(inputs, none) if from_cone else None
    result = AcDispatch(network, on, options).solve(inputs, none, start)
    assert result.status is SolveStatus.LOCALLY_OPTIMAL
    assert result.objective == pytest.approx(FIGURES[name].ac_cost, rel=1e-4)
    load = np.maximum(inputs.load_p, 0.0)
    split = split_prices(network, on, result, load / load.sum(), DEFAULT_TOLERANCES)
    parts = split.energy + split.congestion + split.loss + split.reactive
    assert np.nanmax(np.abs(split.lmp - parts)) < 1e-6
    assert split.price_residual < 1e-3
