"""The linear dispatch with losses: closed forms, computed figures, and the open slack under negative prices."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from lmpgap.dispatch.options import DispatchOptions
from lmpgap.dispatch.result import SolveStatus
from lmpgap.prices.certificate import certify
from lmpgap.prices.components import split_prices
from lmpgap.scenario.settings import DcConvention
from tests.dispatch.grids import finite_difference_price, grid, prices, solve
from tests.support.networks import load_network

FREE = np.inf
IMPEDANCE = DispatchOptions(dc=DcConvention(susceptance="impedance"))


def test_five_bus_with_the_limit_at_the_larger_end() -> None:
    # Computed independently with g + jb = 1/(r + jx); the AC optimum of the same network costs 17,551.891.
    network, inputs = load_network("case5")
    result = solve("dc-loss", network, inputs, IMPEDANCE)
    assert result.objective == pytest.approx(17650.06, abs=0.005)
    assert prices(network, result) == pytest.approx([16.8941, 26.4697, 30.0, 39.7489, 10.0], abs=1e-4)
    assert result.point.loss.sum() * 100 == pytest.approx(4.8934, abs=1e-4)
    assert result.constraints.monitored == ("L6",)
    assert result.constraints.direction == ("reverse",)
    assert result.point.p_to[5] * 100 == pytest.approx(240.0, abs=1e-6)


@pytest.mark.parametrize(
    ("susceptance", "cost", "price", "loss"),
    [
        ("impedance", 17597.57, [16.8933, 26.4693, 30, 39.7449, 10], 4.9357),
        ("reactance", 17596.40, [16.8941, 26.4685, 30, 39.7468, 10], 4.8869),
    ],
)
def test_five_bus_with_the_limit_at_mid_branch(susceptance: str, cost: float, price: list[float], loss: float) -> None:
    # Computed independently. Widening the rating by half the loss at the limit turns the limit at the larger end
    # into one at mid-branch, up to its derivative: the shadow price, not the dispatch, sees the difference.
    network, inputs = load_network("case5")
    options = DispatchOptions(dc=DcConvention(susceptance=susceptance))  # type: ignore[arg-type]
    factor = {
        "impedance": network.r[5] * (network.r[5] ** 2 + network.x[5] ** 2) / network.x[5] ** 2,
        "reactance": network.r[5],
    }[susceptance]
    rating = network.normal_rating.copy()
    rating[5] += 0.5 * factor * rating[5] ** 2
    result = solve("dc-loss", network.with_changes(normal_rating=rating), inputs, options)
    assert result.objective == pytest.approx(cost, abs=0.005)
    assert prices(network, result) == pytest.approx(price, abs=1e-3)
    assert result.point.loss.sum() * 100 == pytest.approx(loss, abs=1e-3)


def test_two_buses_and_the_over_collection() -> None:
    # "Pricing the Grid: Comparing Transmission Rates of US ISOs", Public Utilities Fortnightly, February 2000:
    # generators $20 west, $21 east, loads 500 and 392 MW, loss 1e-4 F^2, half at each end: F = 250, loss 6.25 MW,
    # load pays $18,232, generation costs $18,110, over-collection $122.
    r = 1e-4 * 100.0  # loss in pu = r F^2 in pu, 1e-4 per MW at 100 MVA
    network, inputs = grid(
        [("west", "east", r, 0.1, FREE)],
        [("west", 2000.0, 20.0), ("east", 2000.0, 21.0)],
        {"west": 500.0, "east": 392.0},
    )
    result = solve("dc-loss", network, inputs)
    flow = 50 * (result.point.p_from - result.point.p_to)[0]
    # Marginal delivery of west to east is (1 - k F)/(1 + k F) = 20/21 at F = 243.9, published rounded to 250.
    assert flow == pytest.approx(10_000 * (1 / 41), rel=1e-5)
    price = prices(network, result)
    assert price == pytest.approx([20.0, 21.0], abs=1e-5)
    paid = price @ (100 * inputs.load_p)
    assert paid == pytest.approx(18232, abs=0.1)
    surplus = paid - price @ (100 * (network.bus_to_resource() @ result.p))
    loss = 100 * result.point.loss.sum()
    # loss x mean of the prices, as for any line with half of its loss at each end
    assert surplus == pytest.approx(loss * 20.5, rel=1e-4)
    assert surplus == pytest.approx(122, abs=0.5)
    assert result.objective == pytest.approx(18110, abs=0.5)


def test_closed_form_with_half_of_the_loss_at_each_end() -> None:
    # Computed in closed form: k = 1e-4 per MW, D = 300, c = 20: F = D + k F^2/2, price ratio (1 + kF)/(1 - kF).
    network, inputs = grid([("1", "2", 0.01, 0.1, FREE)], [("1", 2000.0, 20.0)], {"2": 300.0})
    result = solve("dc-loss", network, inputs)
    k, load = 1e-4, 300.0
    flow = (1 - np.sqrt(1 - 2 * k * load)) / k
    price = prices(network, result)
    assert price[1] == pytest.approx(20 * (1 + k * flow) / (1 - k * flow), abs=1e-5)
    assert price[1] == pytest.approx(21.2568, abs=1e-4)
    loss = 100 * result.point.loss.sum()
    assert loss == pytest.approx(9.2806, abs=1e-4)
    surplus = price[1] * load - 20 * (load + loss)
    assert surplus == pytest.approx(191.44, abs=0.01)
    assert surplus == pytest.approx(loss * price.mean(), abs=0.01)


def test_lossless_branches_give_the_lossless_dispatch() -> None:
    network, inputs = load_network("case5")
    lossless = network.with_changes(r=np.zeros(network.n_branch))
    with_losses, without = solve("dc-loss", lossless, inputs), solve("dc", lossless, inputs)
    assert with_losses.objective == pytest.approx(without.objective, rel=1e-7)
    assert prices(network, with_losses) == pytest.approx(prices(network, without), abs=1e-4)


def test_where_no_line_carries_power_losses_do_not_matter() -> None:
    # Common practice: if every bus serves its own load, linear dispatches and their prices coincide.
    network, inputs = grid(
        [("1", "2", 0.02, 0.1, FREE)], [("1", 500.0, 20.0), ("2", 500.0, 20.0)], {"1": 100.0, "2": 50.0}
    )
    result = solve("dc-loss", network, inputs)
    assert prices(network, result) == pytest.approx([20.0, 20.0], abs=1e-4)
    assert result.point.loss.sum() == pytest.approx(0.0, abs=1e-7)


@pytest.mark.parametrize("name", ["case3", "case5", "case14", "case30"])
def test_prices_are_finite_differences_of_cost(name: str) -> None:
    network, inputs = load_network(name)
    price = prices(network, solve("dc-loss", network, inputs))
    for bus in range(0, network.n_bus, max(1, network.n_bus // 4)):
        assert price[bus] == pytest.approx(finite_difference_price("dc-loss", network, inputs, bus), abs=0.01)


def test_generation_exceeds_load_by_the_loss() -> None:
    network, inputs = load_network("case118")
    result = solve("dc-loss", network, inputs)
    loss = result.point.loss.sum()
    assert loss > 0.0
    assert result.p.sum() - inputs.load_p.sum() - network.shunt_g.sum() == pytest.approx(loss, abs=1e-6)
    assert result.fictitious_loss * 100 < 1e-3


def test_voltage_profile_lowers_the_loss_with_its_square() -> None:
    network, inputs = grid([("1", "2", 0.01, 0.1, FREE)], [("1", 2000.0, 20.0)], {"2": 300.0})
    high = DispatchOptions(voltage_profile=np.full(2, 1.1))
    k, load = 1e-4 / 1.1**2, 300.0
    flow = (1 - np.sqrt(1 - 2 * k * load)) / k
    result = solve("dc-loss", network, inputs, high)
    assert 100 * result.point.loss.sum() == pytest.approx(k * flow**2, abs=1e-4)


def test_negative_resistance_counts_as_lossless() -> None:
    network, inputs = load_network("case5")
    r = network.r.copy()
    r[0] = -r[0]
    result = solve("dc-loss", network.with_changes(r=r), inputs)
    assert result.status is SolveStatus.OPTIMAL
    assert result.point.loss[0] == 0.0


def test_negative_prices_open_the_slack_and_are_solved_again() -> None:
    # "Fictitious losses in the DCOPF with a piecewise linear approximation of losses", IEEE PES General Meeting,
    # 2013. Must-run surplus: burning power would be free, so the relaxed price is 0 where the truth is below -20.
    network, inputs = grid([("1", "2", 0.01, 0.1, FREE)], [("1", 400.0, -20.0), ("2", 300.0, 30.0)], {"2": 300.0})
    must_run = replace(
        inputs, p_min=np.array([0.0, 0.0]), segments=replace(inputs.segments, width=np.array([4.0, 3.0]))
    )
    result = solve("dc-loss", network, must_run)
    assert result.status is SolveStatus.OPTIMAL
    assert result.loss_slack_open
    assert any("MW that no flow causes" in note for note in result.notes)
    # Physical loss of the flow that serves 300 MW, and the delivery factor of that flow at a price of -20.
    k, load = 1e-4, 300.0
    flow = (1 - np.sqrt(1 - 2 * k * load)) / k
    assert 100 * result.point.loss.sum() == pytest.approx(k * flow**2, abs=1e-3)
    assert abs(result.fictitious_loss) * 100 <= 0.01
    assert prices(network, result) == pytest.approx([-20.0, -20 * (1 + k * flow) / (1 - k * flow)], abs=2e-3)


def test_a_pocket_of_negative_prices_in_a_network_of_positive_ones() -> None:
    # Wind at W1 fills a line out of the pocket W1-W4 and is worth -30 in it; burning would pay on each of its four
    # lossy lines in turn. Outside prices are positive and the losses stay in their cones.
    network, inputs = grid(
        [
            ("W1", "W2", 0.02, 0.1, FREE),
            ("W2", "W3", 0.03, 0.1, FREE),
            ("W3", "W4", 0.01, 0.1, FREE),
            ("W1", "W3", 0.02, 0.2, FREE),
            ("W4", "A", 0.01, 0.1, 60.0),
            ("A", "B", 0.02, 0.1, FREE),
        ],
        [("W1", 200.0, -30.0), ("B", 200.0, 25.0)],
        {"W4": 20.0, "A": 90.0, "B": 10.0},
    )
    result = solve("dc-loss", network, inputs)
    weights = inputs.load_p / inputs.load_p.sum()
    split = split_prices(network, inputs.branch_in_service, result, weights)
    certificate = certify(network, inputs, result, split)
    assert result.loss_slack_open
    assert certificate.verdict == "certified", certificate.reasons
    assert prices(network, result)[[0, 5]] == pytest.approx([-30.0, 25.0], abs=1e-5)
    flow = 0.5 * (result.point.p_from - result.point.p_to)
    physical = network.r * flow**2  # b = 1/x: (g/b^2) flow^2 = r flow^2
    assert result.point.loss == pytest.approx(physical, abs=1e-7)
    for bus in (1, 3, 4):
        assert prices(network, result)[bus] == pytest.approx(
            finite_difference_price("dc-loss", network, inputs, bus, 0.05), abs=1e-3
        )


def test_must_run_that_only_fictitious_losses_could_absorb_is_infeasible() -> None:
    # 320 MW must run against 300 MW of load; the flow can lose 9.3 MW, the relaxation anything.
    network, inputs = grid([("1", "2", 0.01, 0.1, FREE)], [("1", 320.0, 10.0), ("2", 0.0, 0.0)], {"2": 300.0})
    forced = replace(inputs, p_min=np.array([3.2, 0.0]), segments=replace(inputs.segments, width=np.zeros(2)))
    result = solve("dc-loss", network, forced)
    assert result.status is SolveStatus.INFEASIBLE
    assert result.message.startswith("feasible only by burning ")


def test_positive_prices_keep_the_slack_closed() -> None:
    network, inputs = load_network("case30")
    result = solve("dc-loss", network, inputs)
    assert not result.loss_slack_open
    assert abs(result.fictitious_loss) * 100 < 1e-4


def test_load_beyond_capacity_is_infeasible_only_with_losses() -> None:
    network, inputs = grid([("1", "2", 0.01, 0.1, FREE)], [("1", 305.0, 20.0)], {"2": 300.0})
    assert solve("dc", network, inputs).status is SolveStatus.OPTIMAL
    assert solve("dc-loss", network, inputs).status is SolveStatus.INFEASIBLE
