"""Frozen losses and delivery factors: their own base, double counting, references, age of the base."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from lmpgap.dispatch.frozen import DeliveryFactorDispatch, FrozenLossDispatch
from lmpgap.dispatch.limits import FlowLimits
from lmpgap.dispatch.options import DispatchOptions
from lmpgap.dispatch.result import DispatchResult, SolveStatus
from lmpgap.errors import LmpgapError
from lmpgap.prices.components import split_prices
from lmpgap.scenario.network import IntervalInputs, Network
from lmpgap.tolerances import DEFAULT_TOLERANCES
from tests.dispatch.grids import add_load, finite_difference_price, grid, prices, solve
from tests.support.networks import load_network, scale_load

OPTIONS = DispatchOptions()


def weights_of(inputs: IntervalInputs) -> np.ndarray:
    return np.maximum(inputs.load_p, 0.0) / np.maximum(inputs.load_p, 0.0).sum()


def with_factors(
    network: Network,
    inputs: IntervalInputs,
    factor: np.ndarray,
    *,
    distribution: np.ndarray | None = None,
    base: DispatchResult | None = None,
) -> DispatchResult:
    share = weights_of(inputs) if distribution is None else distribution
    dispatch = DeliveryFactorDispatch(
        network,
        inputs.branch_in_service,
        OPTIONS,
        delivery_factor=factor,
        loss_distribution=share,
        base=base,
    )
    return dispatch.solve(inputs, FlowLimits.none(network.n_branch))


def own_factors(network: Network, inputs: IntervalInputs) -> tuple[DispatchResult, np.ndarray]:
    convex = solve("dc-loss", network, inputs)
    split = split_prices(network, inputs.branch_in_service, convex, weights_of(inputs))
    return convex, split.delivery_factor


@pytest.mark.parametrize("name", ["case5", "case14", "case30", "case118"])
def test_at_its_own_base_the_frozen_dispatch_has_the_convex_prices(name: str) -> None:
    network, inputs = load_network(name)
    convex = solve("dc-loss", network, inputs)
    frozen = FrozenLossDispatch(
        network, inputs.branch_in_service, OPTIONS, convex, proximal=DEFAULT_TOLERANCES.proximal_at_base
    ).solve(inputs, FlowLimits.none(network.n_branch))
    assert frozen.status is SolveStatus.OPTIMAL
    assert prices(network, frozen) == pytest.approx(prices(network, convex), abs=5e-4)
    assert frozen.objective == pytest.approx(convex.objective, rel=1e-6)
    assert abs(frozen.fictitious_loss) * network.base_mva < 1e-3
    split = split_prices(network, inputs.branch_in_service, frozen, weights_of(inputs))
    assert split.price_residual < 1e-6


def test_frozen_losses_away_from_their_base_stay_priced_exactly() -> None:
    network, inputs = load_network("case30")
    base = solve("dc-loss", network, scale_load(inputs, 0.9))
    dispatch = FrozenLossDispatch(network, inputs.branch_in_service, OPTIONS, base)
    none = FlowLimits.none(network.n_branch)
    result = dispatch.solve(inputs, none)
    price = prices(network, result)
    for bus in (0, 4, 20, 29):
        costs = [dispatch.solve(add_load(network, inputs, bus, d), none).objective for d in (-0.1, 0.1)]
        assert price[bus] == pytest.approx((costs[1] - costs[0]) / 0.2, abs=0.01)
    split = split_prices(network, inputs.branch_in_service, result, weights_of(inputs))
    assert split.price_residual < 1e-5
    # A linear loss lies below the physical one away from the base.
    assert result.fictitious_loss < 0.0


def test_prices_drift_with_the_age_of_the_base() -> None:
    network, inputs = load_network("case14")
    now = prices(network, solve("dc-loss", network, inputs))
    none = FlowLimits.none(network.n_branch)
    drift = []
    for factor in (1.0, 0.9, 0.7, 0.4):
        base = solve("dc-loss", network, scale_load(inputs, factor))
        frozen = FrozenLossDispatch(network, inputs.branch_in_service, OPTIONS, base).solve(inputs, none)
        drift.append(np.abs(prices(network, frozen) - now).max())
    assert drift[0] < 1e-3
    assert drift == sorted(drift)
    assert drift[-1] > 0.1


@pytest.mark.parametrize("name", ["case14", "case118"])
def test_losses_are_bought_once(name: str) -> None:
    """The double-count test: with c0 the loss bought is that of the flows, without it about twice as much."""
    network, inputs = load_network(name)
    _, factor = own_factors(network, inputs)
    result = with_factors(network, inputs, factor)
    bought = result.p.sum() - inputs.load_p.sum() - network.shunt_g.sum()
    assert bought == pytest.approx(result.point.loss.sum(), abs=1e-6)

    class WithoutOffset(DeliveryFactorDispatch):
        def _fill(self, *args):  # type: ignore[no-untyped-def]
            self._offset = np.zeros_like(self._offset)
            return super()._fill(*args)

    naive = WithoutOffset(
        network,
        inputs.branch_in_service,
        OPTIONS,
        delivery_factor=factor,
        loss_distribution=weights_of(inputs),
        base=result,
    ).solve(inputs, FlowLimits.none(network.n_branch))
    twice = naive.p.sum() - inputs.load_p.sum() - network.shunt_g.sum()
    assert 1.9 <= twice / bought <= 2.7


def test_closed_form_with_the_loss_bought_at_the_sending_bus() -> None:
    # Computed in closed form: cost c at bus 1, load D at bus 2, loss k D^2 bought at bus 1: price 2 = c (1 + 2 k D),
    # over-collection c k D^2 = c x loss. k = 1e-4 per MW, D = 300, c = 20: 21.20 and 180.00.
    network, inputs = grid([("1", "2", 0.01, 0.1, np.inf)], [("1", 2000.0, 20.0)], {"2": 300.0})
    result = with_factors(network, inputs, np.array([1.0, 1.06]), distribution=np.array([1.0, 0.0]))
    price = prices(network, result)
    assert price == pytest.approx([20.0, 21.20], abs=1e-9)
    assert result.p[0] * 100 == pytest.approx(309.0, abs=1e-3)
    assert result.point.loss[0] * 100 == pytest.approx(9.0, abs=1e-6)
    assert price[1] * 300.0 - price[0] * result.p[0] * 100 == pytest.approx(180.0, abs=0.02)


def test_without_congestion_the_factors_alone_give_the_convex_prices() -> None:
    network, inputs = load_network("case14")
    convex, factor = own_factors(network, inputs)
    result = with_factors(network, inputs, factor)
    assert result.solver.startswith("HiGHS")
    assert prices(network, result) == pytest.approx(prices(network, convex), abs=1e-4)


@pytest.mark.parametrize("name", ["case5", "case30"])
def test_scaling_the_factors_moves_no_price(name: str) -> None:
    network, inputs = load_network(name)
    convex, factor = own_factors(network, inputs)
    for base in (None, convex):
        one, other = (with_factors(network, inputs, scale * factor, base=base) for scale in (1.0, 1.37))
        assert prices(network, other) == pytest.approx(prices(network, one), abs=1e-6)
        assert other.p == pytest.approx(one.p, abs=1e-7)
        assert other.frozen is not None
        assert weights_of(inputs) @ other.frozen.delivery_factor == pytest.approx(1.0)


def test_the_loss_distribution_moves_prices_and_is_on_record() -> None:
    network, inputs = load_network("case30")
    _, factor = own_factors(network, inputs)
    by_load = with_factors(network, inputs, factor)
    at_one_bus = with_factors(network, inputs, factor, distribution=np.eye(30)[0])
    assert np.abs(prices(network, by_load) - prices(network, at_one_bus)).max() > 0.01
    assert at_one_bus.frozen is not None
    assert at_one_bus.frozen.loss_distribution == pytest.approx(np.eye(30)[0])


@pytest.mark.parametrize("name", ["case5", "case30", "case118"])
def test_price_is_energy_times_factor_plus_congestion(name: str) -> None:
    network, inputs = load_network(name)
    _, factor = own_factors(network, inputs)
    result = with_factors(network, inputs, factor)
    split = split_prices(network, inputs.branch_in_service, result, weights_of(inputs))
    assert split.price_residual < 1e-8
    assert split.lmp == pytest.approx(prices(network, result), abs=1e-8)


def test_prices_with_a_fixed_offset_are_finite_differences() -> None:
    network, inputs = load_network("case30")
    convex, factor = own_factors(network, inputs)
    price = prices(network, with_factors(network, inputs, factor, base=convex))
    for bus in (1, 10, 29):
        costs = [
            with_factors(
                network, add_load(network, inputs, bus, d), factor, base=convex, distribution=weights_of(inputs)
            )
            for d in (-0.01, 0.01)
        ]
        assert price[bus] == pytest.approx((costs[1].objective - costs[0].objective) / 0.02, abs=1e-3)


def test_islands_have_their_own_energy_price_and_loss() -> None:
    network, inputs = grid(
        [("1", "2", 0.01, 0.1, np.inf), ("3", "4", 0.01, 0.1, np.inf)],
        [("1", 500.0, 10.0), ("3", 500.0, 30.0)],
        {"2": 100.0, "4": 50.0},
    )
    convex, _ = own_factors(network, inputs)
    factor = prices(network, convex) / np.array([10.0, 10.0, 30.0, 30.0])
    result = with_factors(network, inputs, factor, distribution=np.array([0.5, 0.5, 0.5, 0.5]))
    assert prices(network, result) == pytest.approx(prices(network, convex), abs=1e-4)
    assert result.frozen is not None
    assert result.frozen.energy_multiplier[0] != pytest.approx(result.frozen.energy_multiplier[2])


def test_factors_and_shares_are_checked() -> None:
    network, inputs = load_network("case5")
    build = {"delivery_factor": np.ones(5), "loss_distribution": np.full(5, 0.2)}
    for wrong, message in (
        ({"delivery_factor": np.ones(4)}, "one figure per bus"),
        ({"loss_distribution": np.array([1.0, -1.0, 0, 0, 0])}, "adds up to zero"),
        ({"delivery_factor": np.array([1.0, -1.0, 0, 0, 0])}, "average to zero"),
    ):
        with pytest.raises(LmpgapError, match=message):
            DeliveryFactorDispatch(network, inputs.branch_in_service, OPTIONS, **{**build, **wrong})
    infeasible = solve("dc", network, scale_load(inputs, 3.0))
    with pytest.raises(LmpgapError, match="without a solution"):
        FrozenLossDispatch(network, inputs.branch_in_service, OPTIONS, infeasible)


def test_infeasible_interval_is_told() -> None:
    network, inputs = load_network("case5")
    _, factor = own_factors(network, inputs)
    result = with_factors(network, scale_load(inputs, 3.0), factor)
    assert result.status is SolveStatus.INFEASIBLE
    assert result.formulation == "dc-loss"


def test_negative_prices_are_re_solved_to_their_finite_difference() -> None:
    network, inputs = load_network("case14")
    negative = replace(
        inputs,
        segments=replace(
            inputs.segments,
            price_start=np.full(inputs.segments.width.size, -20.0),
            price_end=np.full(inputs.segments.width.size, -20.0),
        ),
    )
    result = solve("dc-loss", network, negative)
    assert result.loss_slack_open
    assert np.all(prices(network, result) < -19.9)
    for bus in (5, 13):
        assert prices(network, result)[bus] == pytest.approx(
            finite_difference_price("dc-loss", network, negative, bus, 0.5), abs=1e-3
        )
