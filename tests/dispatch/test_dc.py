"""The lossless linear dispatch against published figures, hand calculations, and itself."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from lmpgap.dispatch.formulation import build_formulation
from lmpgap.dispatch.limits import FlowLimits
from lmpgap.dispatch.options import DispatchOptions
from lmpgap.dispatch.result import SolveStatus
from lmpgap.errors import DataError, LmpgapError
from lmpgap.scenario.network import BidSegments
from lmpgap.scenario.settings import DcConvention
from tests.dispatch.grids import (
    add_load,
    finite_difference_price,
    five_bus_growth,
    grid,
    prices,
    solve,
)
from tests.support.networks import load_network, scale_load

FREE = np.inf
IMPEDANCE = DispatchOptions(dc=DcConvention(susceptance="impedance", taps=True))
LIBRARY = DispatchOptions(dc=DcConvention(susceptance="impedance", taps=False))

# Published DC costs: "The Power Grid Library for Benchmarking AC Optimal Power Flow Algorithms", arXiv:1908.02788,
# baseline table; five digits are given. They leave taps and shifts out of the susceptance.
PUBLISHED_COST = {"case3": 5.6959e3, "case5": 1.7480e4, "case14": 2.0515e3, "case30": 7.4728e3, "case118": 9.3101e4}


@pytest.mark.parametrize("name", PUBLISHED_COST)
def test_cost_is_the_published_one(name: str) -> None:
    network, inputs = load_network(name)
    result = solve("dc", network, inputs, LIBRARY)
    assert result.status is SolveStatus.OPTIMAL
    assert result.objective == pytest.approx(PUBLISHED_COST[name], rel=5e-5)


# Computed from the same data with taps in the susceptance; the size of the difference is the point.
@pytest.mark.parametrize(
    ("name", "susceptance", "cost"),
    [
        ("case30", "impedance", 7.47093e3),
        ("case118", "impedance", 9.30887e4),
        ("case30", "reactance", 7.50444e3),
        ("case118", "reactance", 9.31327e4),
    ],
)
def test_cost_with_taps(name: str, susceptance: str, cost: float) -> None:
    network, inputs = load_network(name)
    options = DispatchOptions(dc=DcConvention(susceptance=susceptance, taps=True))  # type: ignore[arg-type]
    assert solve("dc", network, inputs, options).objective == pytest.approx(cost, rel=1e-6)


def test_five_bus_dispatch_prices_and_flows() -> None:
    # Computed from the published data; the cost matches the published one to its five digits.
    network, inputs = load_network("case5")
    result = solve("dc", network, inputs)
    assert result.objective == pytest.approx(17479.897, abs=1e-3)
    assert prices(network, result) == pytest.approx([16.9774, 26.3845, 30.0, 39.9427, 10.0], abs=1e-4)
    assert result.p * 100 == pytest.approx([40.0, 170.0, 323.495, 0.0, 466.505], abs=1e-3)
    assert result.point.p_from * 100 == pytest.approx([249.717, 186.788, -226.505, -50.283, -26.788, -240.0], abs=1e-3)
    assert result.point.p_to == pytest.approx(-result.point.p_from)
    rows = result.constraints
    assert rows.kind == ("thermal",)
    assert (rows.monitored, rows.direction, rows.unit) == (("L6",), ("reverse",), ("MW",))
    assert rows.multiplier / rows.to_unit == pytest.approx([62.3220], abs=1e-4)
    assert rows.limit * rows.to_unit == pytest.approx([240.0])
    assert rows.value * rows.to_unit == pytest.approx([240.0])
    assert not rows.at_penalty[0]
    # Congestion rent: shadow price times limit equals what loads pay more than generators receive.
    surplus = result.multipliers.active @ (inputs.load_p - network.bus_to_resource() @ result.p)
    assert surplus == pytest.approx(62.3220 * 240, rel=1e-5)
    assert surplus == pytest.approx(14957.29, abs=0.01)


@pytest.mark.parametrize(
    ("susceptance", "cost", "price"),
    [
        ("impedance", 5695.896, [36.8231, 30.1594, 41.4539]),
        ("reactance", 5693.803, [36.7533, 30.2133, 41.2587]),
    ],
)
def test_three_bus_susceptance_convention(susceptance: str, cost: float, price: list[float]) -> None:
    # The published cost 5.6959e3 belongs to b = x/(r^2+x^2); sloped offers, so this is the quadratic path.
    network, inputs = load_network("case3")
    options = DispatchOptions(dc=DcConvention(susceptance=susceptance))  # type: ignore[arg-type]
    result = solve("dc", network, inputs, options)
    assert result.objective == pytest.approx(cost, abs=1e-3)
    assert prices(network, result) == pytest.approx(price, abs=1e-4)


def test_fourteen_bus_price_is_flat() -> None:
    network, inputs = load_network("case14")
    result = solve("dc", network, inputs)
    assert prices(network, result) == pytest.approx(np.full(14, 7.920951), abs=1e-6)
    assert result.constraints.n_row == 0


# Published critical load levels of the 2007 paper named at `five_bus_growth`; prices computed from its data.
STEPS = [
    (0.0, [10, 10, 10, 10, 10]),
    (600.00, [14, 14, 14, 14, 14]),
    (640.00, [15, 15, 15, 15, 15]),
    (711.81, [15, 21.7412, 24.3321, 31.4571, 10]),
    (742.80, [15.8256, 23.6798, 26.6985, 35, 10]),
    (963.94, [15.2379, 28.1818, 30, 35, 10]),
    (1137.02, [16.9774, 26.3845, 30, 39.9427, 10]),
    (1484.06, None),
]


@pytest.mark.parametrize(("step", "price"), list(enumerate(price for _, price in STEPS[:-1])))
def test_prices_step_with_load(step: int, price: list[float]) -> None:
    low, high = max(STEPS[step][0], 100.0), STEPS[step + 1][0]
    for total in (low + 0.1, 0.5 * (low + high), high - 0.1):
        network, inputs = five_bus_growth(total)
        result = solve("dc", network, inputs)
        found = dict(zip(network.buses, prices(network, result), strict=True))
        assert [found[bus] for bus in "ABCDE"] == pytest.approx(price, abs=1e-4)


def test_load_beyond_the_last_step_is_infeasible() -> None:
    feasible, infeasible = (solve("dc", *five_bus_growth(total)) for total in (1484.0, 1484.12))
    assert feasible.status is SolveStatus.OPTIMAL
    assert infeasible.status is SolveStatus.INFEASIBLE
    assert np.isnan(infeasible.objective)
    assert np.all(np.isnan(infeasible.multipliers.active))


def test_price_above_the_dearest_offer() -> None:
    # Worked by hand: line 1-3 takes 1/2 of an injection at 1 and 1/3 of one at 2, so another MW at 3 is -2 MW at $10
    # and +3 MW at $30. With 100 MW the limit of 50 MW is just reached and any price in [10, 70] would do.
    network, inputs = grid(
        [("1", "3", 0, 0.3, 50.0), ("1", "2", 0, 0.1, FREE), ("2", "3", 0, 0.2, FREE)],
        [("1", 500.0, 10.0), ("2", 500.0, 30.0)],
        {"3": 101.0},
    )
    found = dict(zip(network.buses, prices(network, solve("dc", network, inputs)), strict=True))
    assert found == pytest.approx({"1": 10.0, "2": 30.0, "3": 70.0})


def test_equal_impedances_split_two_thirds_to_one_third() -> None:
    # "Pricing the Grid: Comparing Transmission Rates of US ISOs", Public Utilities Fortnightly, February 2000:
    # with line 1-3 at its limit another MW at 3 costs -1 MW at 1 and +2 MW at 2, and the limit 25 - 15 over 1/3.
    network, inputs = grid(
        [("1", "2", 0, 0.1, FREE), ("1", "3", 0, 0.1, 100.0), ("2", "3", 0, 0.1, FREE)],
        [("1", 500.0, 15.0), ("2", 500.0, 25.0)],
        {"3": 200.0},
    )
    result = solve("dc", network, inputs)
    more = solve("dc", network, add_load(network, inputs, network.buses.index("3"), 1.0))
    assert (more.p - result.p) * 100 == pytest.approx([-1.0, 2.0], abs=1e-9)
    assert result.constraints.multiplier / 100 == pytest.approx([30.0])
    assert result.constraints.direction == ("forward",)


@pytest.mark.parametrize("name", ["case3", "case5", "case30"])
def test_prices_are_finite_differences_of_cost(name: str) -> None:
    network, inputs = load_network(name)
    price = prices(network, solve("dc", network, inputs))
    for bus in range(0, network.n_bus, max(1, network.n_bus // 5)):
        assert price[bus] == pytest.approx(finite_difference_price("dc", network, inputs, bus, 0.01), abs=0.01)


def test_angle_limit_binds_and_its_multiplier_is_per_radian() -> None:
    network, inputs = grid([("1", "2", 0, 0.1, FREE)], [("1", 500.0, 10.0), ("2", 500.0, 30.0)], {"2": 100.0})
    limit = 0.05
    for reverse in (False, True):
        turned = network.with_changes(
            from_bus=network.to_bus if reverse else network.from_bus,
            to_bus=network.from_bus if reverse else network.to_bus,
            angle_min=np.array([-limit]) if reverse else network.angle_min,
            angle_max=network.angle_max if reverse else np.array([limit]),
        )
        result = solve("dc", turned, inputs)
        # flow = 10 * 0.05 pu = 50 MW; 20 $/MWh * 10 pu/rad * 100 MVA per radian.
        assert result.p * 100 == pytest.approx([50.0, 50.0])
        rows = result.constraints
        assert (rows.kind, rows.unit) == (("angle",), ("deg",))
        assert rows.direction == (("lower",) if reverse else ("upper",))
        assert rows.multiplier == pytest.approx([20_000.0])
        assert rows.angle_gain.toarray() == pytest.approx(np.array([[-1.0 if reverse else 1.0]]))
        assert rows.value == pytest.approx([-limit if reverse else limit])


def test_phase_shifter_and_tap_follow_the_convention() -> None:
    network, inputs = grid([("1", "2", 0, 0.1, FREE), ("1", "2", 0, 0.1, FREE)], [("1", 500.0, 10.0)], {"2": 100.0})
    shifted = network.with_changes(shift=np.array([0.02, 0.0]), tap=np.array([1.0, 0.8]))
    flow = solve("dc", shifted, inputs).point.p_from
    # 10 (d - 0.02) + 12.5 d = 1: d = 1.2/22.5
    assert flow == pytest.approx([10 * (1.2 / 22.5 - 0.02), 12.5 * 1.2 / 22.5])
    plain = solve("dc", shifted, inputs, DispatchOptions(dc=DcConvention(taps=False))).point.p_from
    assert plain == pytest.approx([0.5, 0.5])


@pytest.mark.parametrize("susceptance", ["reactance", "impedance"])
def test_branch_without_reactance_still_connects(susceptance: str) -> None:
    network, inputs = grid([("1", "2", 0.1, 0.0, FREE), ("1", "2", 0.0, 0.1, FREE)], [("1", 500.0, 10.0)], {"2": 100.0})
    options = DispatchOptions(dc=DcConvention(susceptance=susceptance))  # type: ignore[arg-type]
    assert solve("dc", network, inputs, options).point.p_from == pytest.approx([0.5, 0.5])
    loss = solve("dc-loss", network, inputs, options).point.loss
    flow = 0.5 + 0.25 * loss.sum()
    assert loss == pytest.approx([0.1 * flow**2, 0.0], abs=1e-3)


def test_shunt_is_load_at_nominal_voltage() -> None:
    network, inputs = grid([("1", "2", 0, 0.1, FREE)], [("1", 500.0, 10.0)], {"2": 100.0})
    result = solve("dc", network.with_changes(shunt_g=np.array([0.0, 0.05])), inputs)
    assert result.p * 100 == pytest.approx([105.0])


def test_bid_is_served_up_to_its_price() -> None:
    network, inputs = grid([("1", "2", 0, 0.1, FREE)], [("1", 80.0, 10.0), ("1", 100.0, 40.0)], {"2": 50.0})
    bids = BidSegments(bus=np.array([1, 1]), width=np.array([0.5, 0.5]), price=np.array([100.0, 25.0]))
    result = solve("dc", network, replace(inputs, bids=bids))
    # 50 MW fixed and 50 MW of the dear bid need 20 MW at $40; the other bid would take power only below $25.
    assert result.bid_served * 100 == pytest.approx([50.0, 0.0])
    assert prices(network, result) == pytest.approx([40.0, 40.0])
    assert result.objective == pytest.approx(80 * 10 + 20 * 40 - 50 * 100)


def test_must_run_output_and_fixed_cost_are_counted_once() -> None:
    network, inputs = grid([("1", "2", 0, 0.1, FREE)], [("1", 80.0, 10.0), ("2", 100.0, 40.0)], {"2": 100.0})
    segments = replace(inputs.segments, width=np.array([0.8, 0.5]))
    fixed = replace(inputs, p_min=np.array([0.0, 0.5]), segments=segments, fixed_cost=np.array([5.0, 50 * 40.0 + 7.0]))
    result = solve("dc", network, fixed)
    assert result.p * 100 == pytest.approx([50.0, 50.0])
    assert result.resource_cost == pytest.approx([505.0, 2007.0])
    assert result.objective == pytest.approx(2512.0)


def test_islands_have_their_own_prices() -> None:
    network, inputs = grid(
        [("1", "2", 0, 0.1, FREE), ("3", "4", 0, 0.1, FREE)],
        [("1", 500.0, 10.0), ("3", 500.0, 30.0)],
        {"2": 100.0, "4": 50.0},
    )
    result = solve("dc", network, inputs)
    assert prices(network, result) == pytest.approx([10.0, 10.0, 30.0, 30.0])


def test_bus_without_resource_has_no_price() -> None:
    network, inputs = grid([("1", "2", 0, 0.1, FREE), ("3", "4", 0, 0.1, FREE)], [("1", 500.0, 10.0)], {"2": 100.0})
    result = solve("dc", network, inputs)
    assert prices(network, result)[:2] == pytest.approx([10.0, 10.0])
    assert np.all(np.isnan(result.multipliers.active[2:]))
    assert result.notes == ("no price at 3, 4: no resource in service is connected",)
    stranded = solve("dc", network, add_load(network, inputs, 3, 10.0))
    assert stranded.status is SolveStatus.INFEASIBLE
    assert stranded.message == "no resource in service is connected to the load at 4"


def test_branch_out_of_service_carries_nothing() -> None:
    network, inputs = grid([("1", "2", 0, 0.1, FREE), ("1", "2", 0, 0.1, FREE)], [("1", 500.0, 10.0)], {"2": 100.0})
    out = replace(inputs, branch_in_service=np.array([True, False]))
    result = solve("dc", network, out)
    assert result.point.p_from == pytest.approx([1.0, 0.0])
    assert result.point.dp_from[1] == 0.0


def test_another_topology_is_refused() -> None:
    network, inputs = grid([("1", "2", 0, 0.1, FREE)], [("1", 500.0, 10.0)], {"2": 100.0})
    dispatch = build_formulation("dc", network, np.array([True]), DispatchOptions())
    with pytest.raises(LmpgapError, match="differ from the topology"):
        dispatch.solve(replace(inputs, branch_in_service=np.array([False])), FlowLimits.none(1))


def test_branch_without_impedance_is_refused_by_name() -> None:
    network, inputs = grid([("1", "2", 0, 0.0, FREE)], [("1", 500.0, 10.0)], {"2": 100.0})
    with pytest.raises(DataError, match="branch 'L1' has no series impedance"):
        solve("dc", network, inputs)


def test_result_does_not_depend_on_what_was_solved_before() -> None:
    network, inputs = load_network("case30")
    none = FlowLimits.none(network.n_branch)
    dispatch = build_formulation("dc", network, inputs.branch_in_service, DispatchOptions())
    first = dispatch.solve(inputs, none)
    dispatch.solve(scale_load(inputs, 0.6), none)
    again = dispatch.solve(inputs, none)
    assert first.objective == again.objective
    assert np.array_equal(first.multipliers.active, again.multipliers.active)


def test_zero_width_segments_of_a_sloped_offer_are_harmless() -> None:
    network, inputs = load_network("case3")
    widths = inputs.segments.width.copy()
    widths[2] = 0.0
    result = solve("dc", network, replace(inputs, segments=replace(inputs.segments, width=widths)))
    reference = solve("dc", network, inputs)
    assert result.objective == pytest.approx(reference.objective, rel=1e-8)  # the third unit is idle anyway
    assert result.residuals.primal < 1e-8


def test_unbounded_cost_is_told() -> None:
    network, inputs = grid([("1", "2", 0, 0.1, FREE)], [("1", FREE, -10.0)], {"2": 100.0})
    bids = BidSegments(bus=np.array([1]), width=np.array([FREE]), price=np.array([5.0]))
    result = solve("dc", network, replace(inputs, bids=bids))
    assert result.status is SolveStatus.UNBOUNDED
