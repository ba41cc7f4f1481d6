"""The cone relaxation: published gaps, computed prices, and what each of its limits reports."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from lmpgap.dispatch.branch_model import BranchModel, operating_point
from lmpgap.dispatch.options import DispatchOptions
from lmpgap.dispatch.result import SolveStatus
from lmpgap.scenario.settings import Penalties
from tests.dispatch.grids import finite_difference_price, grid, prices, solve
from tests.support.networks import load_network, scale_load

FREE = np.inf

# Published: "The Power Grid Library for Benchmarking AC Optimal Power Flow Algorithms", arXiv:1908.02788, baseline
# table: AC cost and gap of the SOC relaxation in percent.
PUBLISHED = {
    "case3": (5.8126e3, 1.32),
    "case5": (1.7552e4, 14.55),
    "case14": (2.1781e3, 0.11),
    "case30": (8.2085e3, 18.84),
    "case118": (9.7214e4, 0.91),
}


@pytest.mark.parametrize("name", PUBLISHED)
def test_gap_is_the_published_one(name: str) -> None:
    network, inputs = load_network(name)
    ac_cost, gap = PUBLISHED[name]
    result = solve("soc", network, inputs)
    assert result.status is SolveStatus.OPTIMAL
    assert 100 * (1 - result.objective / ac_cost) == pytest.approx(gap, abs=0.01)


# Computed independently in bus-injection form.
@pytest.mark.parametrize(
    ("name", "cost", "price"),
    [
        ("case3", 5736.174, [33.8762, 32.9284, 36.2895]),
        ("case5", 14999.716, [29.5212, 29.9859, 30, 29.8838, 29.4079]),
        (
            "case14",
            2175.70,
            [
                *(7.9210, 8.4615, 9.1048, 8.8938, 8.7378, 8.7452, 8.8986),
                *(8.8986, 8.9013, 8.9263, 8.8662, 8.8923, 8.9398, 9.1087),
            ],
        ),
    ],
)
def test_prices(name: str, cost: float, price: list[float]) -> None:
    network, inputs = load_network(name)
    result = solve("soc", network, inputs)
    assert result.objective == pytest.approx(cost, abs=0.006)
    assert prices(network, result) == pytest.approx(price, abs=1e-4)


def test_cone_is_slack_on_three_buses_and_tight_on_five() -> None:
    # Computed: slack 0.0103 on branch 3-2 of three buses; on five buses every cone is tight.
    for name, slack in (("case3", 0.0103), ("case5", 0.0)):
        network, inputs = load_network(name)
        point = solve("soc", network, inputs).point
        product = point.w[network.from_bus] * point.w[network.to_bus]
        assert np.max(product - point.c**2 - point.s**2) == pytest.approx(slack, abs=2e-4)


@pytest.mark.parametrize("name", ["case3", "case5", "case14", "case30"])
def test_prices_are_finite_differences_of_cost(name: str) -> None:
    network, inputs = load_network(name)
    price = prices(network, solve("soc", network, inputs))
    for bus in range(0, network.n_bus, max(1, network.n_bus // 4)):
        assert price[bus] == pytest.approx(finite_difference_price("soc", network, inputs, bus), abs=0.02)


@pytest.mark.parametrize("name", ["case5", "case30", "case118"])
def test_flows_are_those_of_the_pi_model(name: str) -> None:
    network, inputs = load_network(name)
    result = solve("soc", network, inputs)
    model = BranchModel.of(network, inputs.branch_in_service)
    point = result.point
    rebuilt = operating_point(network, model, point.w, point.c, point.s, point.angle)
    for name_ in ("p_from", "q_from", "p_to", "q_to", "dp_from", "dq_from", "dp_to", "dq_to"):
        assert getattr(point, name_) == pytest.approx(getattr(rebuilt, name_), abs=1e-6), name_
    leaving = network.from_incidence().T @ point.p_from + network.to_incidence().T @ point.p_to
    injected = network.bus_to_resource() @ result.p - inputs.load_p - network.shunt_g * point.w
    assert leaving == pytest.approx(injected, abs=1e-7)


def test_radial_network_is_solved_exactly() -> None:
    # "Branch Flow Model: Relaxations and Convexification", 2013: on a radial network the relaxation is exact. Check
    # against the closed form of one line: voltage 1 at both ends, load 1 pu through r + jx.
    network, inputs = grid([("1", "2", 0.02, 0.1, FREE)], [("1", 500.0, 20.0), ("2", 0.0, 0.0)], {"2": 100.0})
    result = solve("soc", network, inputs)
    y = 1 / (0.02 + 0.1j)
    angle = result.point.angle[0] - result.point.angle[1]
    received = np.real(np.conj(y) * (np.exp(-1j * angle) - 1.0))
    assert received == pytest.approx(1.0, abs=1e-6)
    loss = 2 * y.real * (1 - np.cos(angle))
    assert result.p.sum() - 1.0 == pytest.approx(loss, abs=1e-6)
    # price ratio = -dp_from/dp_to = (b cos + g sin)/(b cos - g sin)
    turn = y.real * np.sin(angle), -y.imag * np.cos(angle)
    assert prices(network, result)[1] == pytest.approx(20 * (turn[1] + turn[0]) / (turn[1] - turn[0]), abs=1e-4)


def test_parallel_branches_share_one_voltage_product() -> None:
    # Two parallel lines, one of them entered against the other, must carry what one line of half the impedance does.
    double, inputs = grid(
        [("1", "2", 0.04, 0.2, FREE), ("2", "1", 0.04, 0.2, FREE)], [("1", 500.0, 20.0), ("2", 0.0, 0.0)], {"2": 100.0}
    )
    single, single_inputs = grid([("1", "2", 0.02, 0.1, FREE)], [("1", 500.0, 20.0), ("2", 0.0, 0.0)], {"2": 100.0})
    pair, one = solve("soc", double, inputs), solve("soc", single, single_inputs)
    assert pair.objective == pytest.approx(one.objective, rel=1e-8)
    assert pair.point.p_from[0] == pytest.approx(pair.point.p_to[1], abs=1e-7)
    assert pair.point.p_from[0] == pytest.approx(0.5 * one.point.p_from[0], abs=1e-7)


def test_phase_shifter_splits_the_flow_of_parallel_branches() -> None:
    # A small resistance makes burning power cost something, so that the cone is tight and angles mean something.
    network, inputs = grid(
        [("1", "2", 1e-3, 0.1, FREE), ("1", "2", 1e-3, 0.1, FREE)],
        [("1", 500.0, 20.0), ("2", 0.0, 0.0)],
        {"2": 100.0},
    )
    shift, y = 0.02, 1 / (1e-3 + 0.1j)
    result = solve("soc", network.with_changes(shift=np.array([shift, 0.0])), inputs)
    d = result.point.angle[0] - result.point.angle[1] - np.array([shift, 0.0])
    assert result.point.p_from == pytest.approx(np.real(np.conj(y) * (1 - np.exp(1j * d))), abs=1e-5)
    assert -result.point.p_to.sum() == pytest.approx(1.0, abs=1e-7)


def test_rating_binds_in_apparent_power() -> None:
    network, inputs = grid(
        [("1", "2", 0.0, 0.1, 80.0)], [("1", 500.0, 20.0), ("2", 500.0, 50.0)], {"2": 100.0}, v=(0.95, 1.05)
    )
    result = solve("soc", network, inputs)
    point, rows = result.point, result.constraints
    thermal = [i for i in range(rows.n_row) if rows.kind[i] == "thermal"]
    assert max(np.hypot(point.p_from, point.q_from)[0], np.hypot(point.p_to, point.q_to)[0]) == pytest.approx(
        0.8, abs=1e-6
    )
    assert {(rows.monitored[i], rows.direction[i], rows.unit[i]) for i in thermal} == {("L1", "forward", "MVA")}
    total = sum(rows.multiplier[i] for i in thermal) / network.base_mva
    step = 0.1
    costs = [
        solve("soc", network.with_changes(normal_rating=np.array([(80 + d) / 100])), inputs).objective
        for d in (-step, step)
    ]
    assert total == pytest.approx((costs[0] - costs[1]) / (2 * step), abs=0.01)


@pytest.mark.parametrize("reverse", [False, True])
def test_angle_limit_multiplier_is_the_fall_of_cost_per_radian(reverse: bool) -> None:
    network, inputs = grid(
        [("1", "2", 0.01, 0.1, FREE)], [("1", 500.0, 10.0), ("2", 500.0, 30.0)], {"2": 100.0}, v=(0.95, 1.05)
    )

    def limited(limit: float, shift: float = 0.01):  # type: ignore[no-untyped-def]
        if reverse:
            return network.with_changes(
                from_bus=network.to_bus, to_bus=network.from_bus, angle_min=np.array([-limit]), shift=np.array([shift])
            )
        return network.with_changes(angle_max=np.array([limit]), shift=np.array([shift]))

    result = solve("soc", limited(0.05), inputs)
    rows = result.constraints
    row = rows.kind.index("angle")
    assert rows.direction[row] == ("lower" if reverse else "upper")
    assert rows.value[row] == pytest.approx(-0.05 if reverse else 0.05, abs=1e-7)
    assert rows.angle_gain.toarray()[row] == pytest.approx([-1.0 if reverse else 1.0])
    step = 1e-4
    costs = [solve("soc", limited(0.05 + d), inputs).objective for d in (-step, step)]
    assert rows.multiplier[row] == pytest.approx((costs[0] - costs[1]) / (2 * step), rel=1e-3)


def test_voltage_and_reactive_limits_report_the_fall_of_cost() -> None:
    network, inputs = grid(
        [("1", "2", 0.02, 0.1, FREE)],
        [("1", 500.0, 20.0), ("2", 0.0, 0.0)],
        {"2": 100.0},
        v=(0.9, 1.05),
        q_mvar=30.0,
    )
    inputs = replace(inputs, load_q=np.array([0.0, 0.45]))
    network = network.with_changes(q_max=np.array([5.0, 0.3]), q_min=np.array([-5.0, -0.3]))
    rows = solve("soc", network, inputs).constraints
    found = {(rows.kind[i], rows.monitored[i], rows.direction[i]): rows.multiplier[i] for i in range(rows.n_row)}
    step, first, second = 1e-3, np.array([1.0, 0.0]), np.array([0.0, 1.0])

    def slope(**changes: tuple[np.ndarray, np.ndarray]) -> float:
        name, (low, high) = next(iter(changes.items()))
        a, b = (solve("soc", network.with_changes(**{name: v}), inputs).objective for v in (low, high))
        return (a - b) / (2 * step)

    voltage = slope(v_max=(network.v_max - step * first, network.v_max + step * first))
    assert found["voltage", "1", "upper"] == pytest.approx(voltage, rel=1e-2)
    reactive = slope(q_max=(network.q_max - step * second, network.q_max + step * second))
    assert found["reactive", "G2", "upper"] == pytest.approx(reactive, rel=1e-2)
    assert reactive > 1.0


def test_money_balances_by_constraints() -> None:
    # load payments - receipts = sum mu limit + nu'(Qg - Qd) + sum sigma w, with the net multiplier on w.
    for name, factor in (("case5", 1.0), ("case14", 1.0), ("case30", 0.9)):
        network, inputs = load_network(name)
        inputs = scale_load(inputs, factor)
        result = solve("soc", network, inputs)
        multipliers, rows = result.multipliers, result.constraints
        collected = multipliers.active @ (inputs.load_p - network.bus_to_resource() @ result.p)
        rent = sum(rows.multiplier[i] * rows.limit[i] for i in range(rows.n_row) if rows.kind[i] == "thermal")
        reactive = multipliers.reactive @ (network.bus_to_resource() @ result.q - inputs.load_q)
        voltage = multipliers.squared_voltage @ result.point.w
        paid = multipliers.active @ inputs.load_p
        assert collected == pytest.approx(rent + reactive + voltage, abs=1e-5 * abs(paid)), name


def test_dead_buses_and_resources_out_of_service() -> None:
    network, inputs = grid(
        [("1", "2", 0.01, 0.1, FREE), ("3", "4", 0.01, 0.1, FREE)],
        [("1", 500.0, 20.0), ("2", 500.0, 30.0), ("3", 500.0, 5.0)],
        {"2": 100.0},
    )
    out = replace(
        inputs,
        resource_in_service=np.array([True, True, False]),
        segments=replace(inputs.segments, width=np.array([5.0, 5.0, 0.0])),
    )
    result = solve("soc", network, out)
    assert result.status is SolveStatus.OPTIMAL
    assert result.q[2] == 0.0
    assert np.all(np.isnan(result.multipliers.active[2:]))
    assert np.all(result.point.p_from[1:] == 0.0)


def test_infeasible_voltage_drop_is_told() -> None:
    network, inputs = grid([("1", "2", 0.1, 0.5, FREE)], [("1", 900.0, 20.0), ("2", 0.0, 0.0)], {"2": 500.0})
    assert solve("soc", network, inputs).status is SolveStatus.INFEASIBLE
    soft = solve("soc", network, inputs, DispatchOptions(penalties=Penalties(power_balance=1000.0)))
    assert soft.status is SolveStatus.OPTIMAL
    assert soft.unserved[1] > 0.0


def test_fixed_voltages_leave_no_interior_and_still_solve() -> None:
    network, inputs = load_network("case14")
    fixed = network.with_changes(
        v_min=np.full(14, 1.0), v_max=np.full(14, 1.0), q_min=np.full(5, -9.0), q_max=np.full(5, 9.0)
    )
    supported = fixed.with_changes(
        shunt_b=fixed.shunt_b,
        resources=(*fixed.resources, *(f"S{i}" for i in range(14))),
        resource_bus=np.concatenate([fixed.resource_bus, np.arange(14)]),
        q_min=np.full(19, -np.inf),
        q_max=np.full(19, np.inf),
    )
    more = replace(
        inputs,
        resource_in_service=np.ones(19, dtype=bool),
        p_min=np.concatenate([inputs.p_min, np.zeros(14)]),
        p_max=np.concatenate([inputs.p_max, np.zeros(14)]),
        fixed_cost=np.concatenate([inputs.fixed_cost, np.zeros(14)]),
    )
    result = solve("soc", supported, more)
    assert result.status is SolveStatus.OPTIMAL
    assert result.point.w == pytest.approx(np.ones(14))
    assert result.residuals.dual < 1e-3
    assert result.multipliers.reactive == pytest.approx(np.zeros(14), abs=1e-3)
