"""The order in which the AC dispatch is tried, and what counts as solved."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from lmpgap.dispatch.ac import AcDispatch
from lmpgap.dispatch.ac_ladder import LADDER, STATUS, Start, ladder
from lmpgap.dispatch.limits import FlowLimits
from lmpgap.dispatch.options import DispatchOptions
from lmpgap.dispatch.result import SolveStatus
from tests.dispatch import grids
from tests.support.networks import load_network


@pytest.mark.parametrize(
    ("given", "far", "starts"),
    [
        (True, False, [Start.GIVEN, Start.LINEAR, Start.FLAT, Start.FLAT, Start.GIVEN]),
        (True, True, [Start.LINEAR, Start.FLAT, Start.GIVEN, Start.FLAT, Start.GIVEN]),
        (False, False, [Start.FLAT, Start.LINEAR, Start.FLAT]),
    ],
)
def test_order_of_attempts(given: bool, far: bool, starts: list[Start]) -> None:
    attempts = ladder(given=given, far=far)
    assert [attempt.start for attempt in attempts] == starts
    assert len({attempt.name for attempt in attempts}) == len(attempts)


def test_a_start_with_absurd_angles_gives_way_to_the_linear_dispatch() -> None:
    network, inputs = load_network("case14")
    # A short branch across which the angles gape: its flow is hundreds of times its rating.
    first = np.arange(network.n_branch) == 0
    short = replace(network, r=np.where(first, 1e-5, network.r), x=np.where(first, 1e-4, network.x))
    cone = grids.solve("soc", short, inputs)
    wild = replace(cone, point=replace(cone.point, angle=np.linspace(0.0, 2.0, network.n_bus)))
    dispatch, limits = AcDispatch(short, inputs.branch_in_service, DispatchOptions()), FlowLimits.none(20)
    plain, result = (dispatch.solve(inputs, limits, start) for start in (cone, wild))
    assert plain.status is result.status is SolveStatus.LOCALLY_OPTIMAL
    assert plain.notes == ()
    assert result.notes == (
        "the given start overloads a branch many times over",
        "solved from the linear dispatch with losses",
    )
    assert result.objective == pytest.approx(plain.objective, rel=1e-7)
    assert result.multipliers.active == pytest.approx(plain.multipliers.active, abs=1e-3 * network.base_mva)


def test_an_acceptable_point_counts_as_solved_only_where_its_residuals_say_so(monkeypatch: pytest.MonkeyPatch) -> None:
    network, inputs = load_network("case5")
    limits = FlowLimits.none(network.n_branch)
    monkeypatch.setitem(STATUS, "Solve_Succeeded", SolveStatus.INACCURATE)
    good = AcDispatch(network, inputs.branch_in_service, DispatchOptions()).solve(inputs, limits)
    assert good.status is SolveStatus.LOCALLY_OPTIMAL
    assert good.message == "solve succeeded, confirmed by its residuals"
    strict = DispatchOptions(tolerances=replace(DispatchOptions().tolerances, price_residual=1e-13))
    poor = AcDispatch(network, inputs.branch_in_service, strict).solve(inputs, limits)
    assert poor.status is SolveStatus.INACCURATE
    assert len(poor.notes) == len(LADDER) - 2  # every start of its own was tried
