"""The split of prices, on published cases, by hand, and on AC operating points with known multipliers."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy import sparse

from lmpgap.dispatch.branch_model import BranchModel, operating_point, voltage_products
from lmpgap.dispatch.result import (
    BalanceMultipliers,
    ConstraintRows,
    DispatchResult,
    FrozenFactors,
    SolverResiduals,
    SolveStatus,
    no_solution,
)
from lmpgap.errors import LmpgapError, NotIdentifiableError
from lmpgap.prices.components import OTHER_SOURCES, constraints_of, multiplier_to_price, split_prices
from lmpgap.prices.keys import ConstraintKey
from tests.prices.support import (
    branch_flows,
    injections,
    jacobian_by_difference,
    lossless_dispatch,
    simple_inputs,
    small_network,
)
from tests.support.networks import load_network


def unit_weight(n_bus: int, bus: int) -> np.ndarray:
    weights = np.zeros(n_bus)
    weights[bus] = 1.0
    return weights


# --- published and hand-made lossless cases ------------------------------------------------------------


@pytest.fixture(scope="module")
def five_bus():
    network, inputs = load_network("case5")
    return network, inputs, lossless_dispatch(network, inputs)


def test_five_bus_prices_on_bus_4(five_bus):
    """Data: arXiv:1908.02788, case of 5 buses (published DC cost 1.7480e4 $/h); split computed from it."""
    network, inputs, result = five_bus
    assert result.objective == pytest.approx(17_479.897, abs=1e-3)
    split = split_prices(network, inputs.branch_in_service, result, unit_weight(5, 3))
    np.testing.assert_allclose(split.lmp, [16.9774, 26.3845, 30.0, 39.9427, 10.0], atol=5e-5)
    np.testing.assert_allclose(split.energy, 39.9427, atol=5e-5)
    np.testing.assert_allclose(split.congestion, [-22.9654, -13.5583, -9.9427, 0.0, -29.9427], atol=6e-5)
    np.testing.assert_allclose(split.loss, 0.0, atol=1e-10)
    np.testing.assert_allclose(split.reactive, 0.0, atol=1e-12)
    assert split.price_residual < 5e-12 * 10
    (key,) = split.keys
    assert key.direction == "reverse"
    assert key.name == f"{key.monitored} reverse"
    assert split.shadow_price == pytest.approx([62.3220], abs=5e-5)
    # Shift factors of branch 4-5 for buses 1, 2, 3, 5 with reference 4; the limited direction is 5 to 4.
    np.testing.assert_allclose(-split.shift_factor[0], [-0.3685, -0.2176, -0.1595, 0.0, -0.4805], atol=5e-5)
    assert 100 * result.point.p_from[-1] == pytest.approx(-240.0, abs=1e-6)


def test_five_bus_prices_load_weighted(five_bus):
    network, inputs, result = five_bus
    split = split_prices(network, inputs.branch_in_service, result, inputs.load_p)
    np.testing.assert_allclose(split.weights, [0, 0.3, 0.3, 0.4, 0], atol=1e-12)
    np.testing.assert_allclose(split.energy, 32.8924, atol=5e-5)
    np.testing.assert_allclose(split.congestion, [-15.9151, -6.5080, -2.8924, 7.0503, -22.8924], atol=6e-5)


def test_shift_factors_do_not_depend_on_which_bus_is_pinned(five_bus):
    """Shift factors of every branch of the five-bus case, computed from the published data."""
    network, inputs, result = five_bus
    base = result.constraints
    n = network.n_branch
    b = np.abs(result.point.dp_from)
    rows = ConstraintRows(
        kind=("thermal",) * n,
        contingency=("",) * n,
        monitored=network.branches,
        direction=("forward",) * n,
        unit=("MW",) * n,
        to_unit=np.full(n, network.base_mva),
        limit=np.ones(n),
        value=np.ones(n),
        multiplier=np.ones(n),
        angle_gain=sparse.csr_array(np.diag(b)),
        at_penalty=np.zeros(n, dtype=bool),
    )
    assert base.n_row == 2 * n
    split = split_prices(network, inputs.branch_in_service, replace(result, constraints=rows), unit_weight(5, 3))
    expected = {
        (0, 1): [0.1939, -0.4759, -0.3490, 0.0, 0.1595],
        (0, 3): [0.4376, 0.2583, 0.1895, 0.0, 0.3600],
        (0, 4): [0.3685, 0.2176, 0.1595, 0.0, -0.5195],
        (3, 4): [-0.3685, -0.2176, -0.1595, 0.0, -0.4805],
    }
    ends = list(zip(network.from_bus.tolist(), network.to_bus.tolist(), strict=True))
    for pair, factors in expected.items():
        np.testing.assert_allclose(split.shift_factor[ends.index(pair)], factors, atol=5e-5)


def test_triangle_shadow_price():
    """Equal impedances, line 1-3 binding, offers 25 (down) and 15 (up).

    "Pricing the Grid: Comparing Transmission Rates of US ISOs", Public Utilities Fortnightly, February 2000,
    footnotes: the shadow price is $30/MW. One more MW at 3 takes -1 MW at 1 and +2 MW at 2.
    """
    network = small_network(3, [(0, 1, 0.1, np.inf), (1, 2, 0.1, np.inf), (0, 2, 0.1, 60.0)], resource_bus=[0, 1])
    inputs = simple_inputs(network, [0, 0, 100], [(0, 200, 15), (1, 200, 25)])
    result = lossless_dispatch(network, inputs)
    split = split_prices(network, inputs.branch_in_service, result, unit_weight(3, 2))
    np.testing.assert_allclose(split.shift_factor[0], [2 / 3, 1 / 3, 0.0], atol=1e-12)
    assert split.shadow_price == pytest.approx([30.0])
    np.testing.assert_allclose(split.lmp, [15.0, 25.0, 2 * 25.0 - 15.0], atol=1e-9)


def test_price_above_the_dearest_offer():
    """x13 = .3 with 50 MW, x12 = .1, x23 = .2, $10 at 1, $30 at 2: beyond 100 MW at 3 the price at 3 is $70.

    By hand: one more MW at 3 with line 1-3 at its limit.
    """
    network = small_network(3, [(0, 2, 0.3, 50.0), (0, 1, 0.1, np.inf), (1, 2, 0.2, np.inf)], resource_bus=[0, 1])
    inputs = simple_inputs(network, [0, 0, 110], [(0, 500, 10), (1, 500, 30)])
    split = split_prices(network, inputs.branch_in_service, lossless_dispatch(network, inputs), inputs.load_p)
    shift = np.array([1 / 2, 1 / 3, 0.0])  # of line 1-3 by hand: (x12 + x23) / (x12 + x23 + x13), x23 / sum
    np.testing.assert_allclose(split.shift_factor[0], shift, atol=1e-12)
    mu = 20.0 / (shift[0] - shift[1])
    np.testing.assert_allclose(split.lmp, [10.0, 30.0, 10.0 + mu * shift[0]], atol=1e-9)
    assert split.lmp[2] == pytest.approx(70.0)


def test_uncongested_prices_are_equal():
    network, inputs = load_network("case14")
    result = lossless_dispatch(network, inputs)
    split = split_prices(network, inputs.branch_in_service, result, inputs.load_p)
    np.testing.assert_allclose(split.lmp, 7.920951, atol=1e-6)  # flat price computed from the published data
    assert split.keys == ()
    assert split.congestion_by_key.shape == (0, 14)
    np.testing.assert_array_equal(split.congestion, 0.0)


def test_two_islands_have_their_own_energy_price_and_a_dead_island_none():
    network = small_network(5, [(0, 1, 0.1, np.inf), (2, 3, 0.1, np.inf), (1, 2, 0.1, np.inf)], resource_bus=[0, 2])
    inputs = simple_inputs(network, [0, 50, 0, 40, 0], [(0, 100, 20), (1, 100, 35)])
    inputs = replace(inputs, branch_in_service=np.array([True, True, False]))
    result = lossless_dispatch(network, inputs)
    active = result.multipliers.active.copy()
    active[4] = np.nan
    result = replace(result, multipliers=replace(result.multipliers, active=active))
    # The reference speaks of the first island only: the second takes the plain mean over its buses.
    split = split_prices(network, inputs.branch_in_service, result, unit_weight(5, 1))
    np.testing.assert_allclose(split.lmp, [20, 20, 35, 35, np.nan], atol=1e-9)
    np.testing.assert_allclose(split.energy, [20, 20, 35, 35, np.nan], atol=1e-9)
    np.testing.assert_allclose(split.weights, [0, 1, 0.5, 0.5, 0], atol=1e-12)
    assert np.isnan(split.loss[4])
    assert split.price_residual < 1e-9


def test_no_solution_gives_no_price():
    network, inputs = load_network("case5")
    result = no_solution(
        network,
        formulation="dc",
        status=SolveStatus.INFEASIBLE,
        message="",
        solver="",
        solver_seconds=0.0,
        total_seconds=0.0,
    )
    split = split_prices(network, inputs.branch_in_service, result, inputs.load_p)
    assert np.isnan(split.lmp).all()
    assert split.price_residual == np.inf


def test_cancelling_weights_are_refused(five_bus):
    network, inputs, result = five_bus
    with pytest.raises(NotIdentifiableError, match="cancel"):
        split_prices(network, inputs.branch_in_service, result, np.array([1.0, -1.0, 0, 0, 0]))


# --- AC operating points with known multipliers --------------------------------------------------------


def made_result(network, inputs, seed: int, *, n_binding: int = 3) -> tuple[DispatchResult, np.ndarray]:
    """Return a result at a random AC operating point whose balance multipliers satisfy stationarity.

    Jacobians come from central differences of complex power flows, so neither the branch model nor the split
    has a part in them. The second value is the price at every bus.
    """
    rng = np.random.default_rng(seed)
    n, on = network.n_bus, inputs.branch_in_service
    v = rng.uniform(0.95, 1.05, n)
    angle = rng.uniform(-0.2, 0.2, n)

    def complex_voltage(a):
        return v * np.exp(1j * a)

    p_theta = jacobian_by_difference(lambda a: injections(network, on, complex_voltage(a)).real, angle)
    q_theta = jacobian_by_difference(lambda a: injections(network, on, complex_voltage(a)).imag, angle)
    model = BranchModel.of(network, on)
    c, s = voltage_products(network, v, angle)
    point = operating_point(network, model, v**2, c, s, angle)
    s_from, s_to = branch_flows(network, on, complex_voltage(angle))
    binding = rng.choice(np.flatnonzero(on), n_binding, replace=False)
    mu = rng.uniform(5, 50, 2 * n_binding) * network.base_mva

    def apparent(a):
        ends = branch_flows(network, on, complex_voltage(a))
        return np.concatenate([np.abs(ends[0][binding]), np.abs(ends[1][binding])])

    h_theta = jacobian_by_difference(apparent, angle)
    # Both ends of each branch under one key: direction of flow as seen from the from end.
    rows = np.arange(n_binding)
    gain = np.zeros((2 * n_binding, network.n_branch))
    for offset, ends, dp, dq in (
        (0, s_from, point.dp_from, point.dq_from),
        (n_binding, s_to, point.dp_to, point.dq_to),
    ):
        turn = (ends.real * dp + ends.imag * dq) / np.abs(ends)
        gain[offset + rows, binding] = turn[binding]
    names = tuple(network.branches[k] for k in binding)
    limits = apparent(angle)
    constraints = ConstraintRows(
        kind=("thermal",) * (2 * n_binding),
        contingency=("",) * (2 * n_binding),
        monitored=names * 2,
        direction=("forward",) * (2 * n_binding),
        unit=("MVA",) * (2 * n_binding),
        to_unit=np.full(2 * n_binding, network.base_mva),
        limit=limits,
        value=limits,
        multiplier=mu,
        angle_gain=sparse.csr_array(gain),
        at_penalty=np.zeros(2 * n_binding, dtype=bool),
    )
    nu = rng.normal(0, 2, n) * network.base_mva
    # P_theta' lambda = -(Q_theta' nu + H' mu), with the price at the last bus chosen.
    right = -(q_theta.T @ nu + h_theta.T @ mu)
    system = p_theta.T.copy()
    system[0] = unit_weight(n, n - 1)
    right[0] = 30.0 * network.base_mva
    active = np.linalg.solve(system, right)
    result = DispatchResult(
        formulation="ac",
        status=SolveStatus.LOCALLY_OPTIMAL,
        message="",
        solver="made",
        solver_seconds=0.0,
        total_seconds=0.0,
        objective=1.0,
        p=np.zeros(network.n_resource),
        q=np.zeros(network.n_resource),
        resource_cost=np.zeros(network.n_resource),
        bid_served=np.zeros(0),
        unserved=np.zeros(n),
        surplus=np.zeros(n),
        point=point,
        multipliers=BalanceMultipliers(active=active, reactive=nu, squared_voltage=np.zeros(n)),
        constraints=constraints,
        residuals=SolverResiduals(primal=0.0, dual=0.0, gap=0.0),
    )
    return result, active / network.base_mva


@pytest.fixture(scope="module", params=["case5", "case14", "case30", "case118"])
def ac_like(request):
    network, inputs = load_network(request.param)
    result, price = made_result(network, inputs, 7)
    return network, inputs, result, price


def weights_of_kind(kind: str, inputs, n_bus: int) -> np.ndarray:
    rng = np.random.default_rng(1)
    return {
        "load": inputs.load_p,
        "bus": unit_weight(n_bus, n_bus // 2),
        "negative": 1.0 + 1.4 * rng.standard_normal(n_bus),
    }[kind]


@pytest.mark.parametrize("kind", ["load", "bus", "negative"])
def test_ac_split_restores_the_multipliers(ac_like, kind):
    network, inputs, result, price = ac_like
    weights = weights_of_kind(kind, inputs, network.n_bus)
    split = split_prices(network, inputs.branch_in_service, result, weights, reactive_sources=None)
    scale = np.abs(price).max()
    # Central differences carry about 1e-9 of the largest price.
    assert split.price_residual < 1e-8 * scale
    np.testing.assert_allclose(split.lmp, price, atol=1e-8 * scale)
    total = split.energy + split.congestion + split.loss + split.reactive
    np.testing.assert_allclose(total, split.lmp, atol=1e-12 * scale)
    share = weights / weights.sum()
    assert share @ split.delivery_factor == pytest.approx(1.0, abs=1e-11)
    assert share @ split.reactive == pytest.approx(0.0, abs=1e-9 * scale)
    np.testing.assert_allclose(split.congestion_by_key @ share, 0.0, atol=1e-9 * scale)
    np.testing.assert_allclose(split.congestion_by_key.sum(axis=0), split.congestion, atol=1e-10 * scale)
    np.testing.assert_allclose(-split.shadow_price[:, None] * split.shift_factor, split.congestion_by_key)
    assert split.reactive_sources is not None
    np.testing.assert_allclose(split.reactive_sources.amount.sum(axis=0), split.reactive, atol=1e-9 * scale)


def test_both_ends_are_one_constraint(ac_like):
    network, inputs, result, _ = ac_like
    split = split_prices(network, inputs.branch_in_service, result, inputs.load_p)
    rows = result.constraints
    assert len(split.keys) == rows.n_row // 2
    per_end = rows.multiplier.reshape(2, -1) / network.base_mva
    np.testing.assert_allclose(split.shadow_price, per_end.sum(axis=0))
    assert all(isinstance(key, ConstraintKey) for key in split.keys)


def test_few_reactive_sources_still_add_up(ac_like):
    network, inputs, result, price = ac_like
    split = split_prices(network, inputs.branch_in_service, result, inputs.load_p, reactive_sources=2)
    every = split_prices(network, inputs.branch_in_service, result, inputs.load_p, reactive_sources=None)
    sources, all_sources = split.reactive_sources, every.reactive_sources
    assert sources is not None
    assert all_sources is not None
    assert sources.source.size == 3
    assert sources.source[-1] == OTHER_SOURCES
    np.testing.assert_allclose(sources.amount.sum(axis=0), split.reactive, atol=1e-10 * np.abs(price).max())
    largest = np.sort(np.abs(all_sources.amount).max(axis=1))[-2:]
    np.testing.assert_allclose(np.sort(np.abs(sources.amount[:-1]).max(axis=1)), largest)


def test_delivery_factor_is_the_marginal_loss(ac_like):
    """One more unit injected at a bus and taken out at the reference leaves DF of it, by finite differences."""
    network, inputs, result, _ = ac_like
    n, on = network.n_bus, inputs.branch_in_service
    reference = n // 2
    split = split_prices(network, on, result, unit_weight(n, reference))
    v = np.sqrt(result.point.w)
    angle = result.point.angle
    p_theta = jacobian_by_difference(lambda a: injections(network, on, v * np.exp(1j * a)).real, angle)
    # Angles respond so that only the reference's own injection changes besides the bus's.
    free = np.arange(n) != reference
    for bus in (0, n - 1):
        unit = unit_weight(n, bus)
        turn = np.zeros(n)
        turn[free] = np.linalg.solve(p_theta[np.ix_(free, free)], unit[free])
        assert split.delivery_factor[bus] == pytest.approx(-(p_theta[reference] @ turn), abs=1e-8)


@pytest.mark.parametrize(("fault", "at_least"), [("dropped reactive", 0.1), ("flipped sign", 0.5), ("one bus", 0.005)])
def test_price_residual_sees_a_fault(ac_like, fault, at_least):
    network, inputs, result, _ = ac_like
    m = result.multipliers
    if fault == "dropped reactive":
        wrong = replace(result, multipliers=replace(m, reactive=np.zeros_like(m.reactive)))
    elif fault == "flipped sign":
        rows = result.constraints
        sign = np.ones(rows.n_row)
        sign[[0, rows.n_row // 2]] = -1.0
        gain = sparse.csr_array(sparse.diags_array(sign) @ rows.angle_gain)
        wrong = replace(result, constraints=replace(rows, angle_gain=gain))
    else:
        active = m.active.copy()
        active[2] += 0.01 * network.base_mva
        wrong = replace(result, multipliers=replace(m, active=active))
    split = split_prices(network, inputs.branch_in_service, wrong, inputs.load_p)
    assert split.price_residual > at_least


def test_frozen_factors():
    """lambda = lam DF + alpha with alpha'E = 0 and P_theta' alpha = -H' mu, made and split again."""
    network, inputs = load_network("case30")
    result = lossless_dispatch(network, inputs)
    rng = np.random.default_rng(3)
    n = network.n_bus
    rows = result.constraints.take(np.array([0, 5, 9]))
    rows = replace(rows, multiplier=rng.uniform(5, 30, 3) * network.base_mva)
    difference = np.zeros((network.n_branch, n))
    difference[np.arange(network.n_branch), network.from_bus] += 1
    difference[np.arange(network.n_branch), network.to_bus] -= 1
    p_theta = difference.T @ (result.point.dp_from[:, None] * difference)
    factors = rng.uniform(0.9, 1.05, n)
    share = rng.uniform(0, 1, n)
    share /= share.sum()
    system = p_theta.T.copy()
    system[0] = share
    right = -(rows.angle_gain @ difference).T @ rows.multiplier
    right[0] = 0.0
    lam = 25.0 * network.base_mva
    active = lam * factors + np.linalg.solve(system, right)
    frozen = FrozenFactors(delivery_factor=factors, loss_distribution=share, energy_multiplier=np.full(n, lam))
    result = replace(result, constraints=rows, frozen=frozen, multipliers=replace(result.multipliers, active=active))
    split = split_prices(network, inputs.branch_in_service, result, inputs.load_p)
    assert split.price_residual < 1e-9
    weights = inputs.load_p / inputs.load_p.sum()
    np.testing.assert_allclose(split.delivery_factor, factors / (weights @ factors))
    np.testing.assert_allclose(split.energy, weights @ split.multiplier_price)
    assert np.abs(split.loss).max() > 0.1
    # A wrong multiplier of the system balance does not go unseen: it is not borrowed from the prices.
    wrong = replace(result, frozen=replace(frozen, energy_multiplier=np.full(n, 1.01 * lam)))
    assert split_prices(network, inputs.branch_in_service, wrong, inputs.load_p).price_residual > 0.1


# --- keys ----------------------------------------------------------------------------------------------


def test_multiplier_to_price_is_a_finite_difference_of_cost():
    network = small_network(2, [(0, 1, 0.1, 30.0)], resource_bus=[0, 1])

    def cost(extra: float) -> float:
        inputs = simple_inputs(network, [0, 50 + extra], [(0, 100, 20), (1, 100, 45)])
        return lossless_dispatch(network, inputs).objective

    inputs = simple_inputs(network, [0, 50], [(0, 100, 20), (1, 100, 45)])
    result = lossless_dispatch(network, inputs)
    price = multiplier_to_price(result.multipliers.active, network.base_mva)
    assert price[1] == pytest.approx((cost(0.5) - cost(-0.5)) / 1.0)
    shadow = constraints_of(result).shadow_price
    assert shadow.max() == pytest.approx(25.0)  # one MW more of limit saves 45 - 20


def test_angle_limit_shadow_price_is_per_degree():
    network, inputs = load_network("case14")
    result = lossless_dispatch(network, inputs)
    gain = np.zeros((1, network.n_branch))
    gain[0, 3] = 1.0
    rows = ConstraintRows(
        kind=("angle",),
        contingency=("",),
        monitored=(network.branches[3],),
        direction=("upper",),
        unit=("deg",),
        to_unit=np.array([180 / np.pi]),
        limit=np.array([np.pi / 6]),
        value=np.array([np.pi / 6]),
        multiplier=np.array([1000.0]),
        angle_gain=sparse.csr_array(gain),
        at_penalty=np.zeros(1, dtype=bool),
    )
    split = split_prices(network, inputs.branch_in_service, replace(result, constraints=rows), inputs.load_p)
    assert split.unit == ("deg",)
    assert split.shadow_price == pytest.approx([1000.0 * np.pi / 180])
    keyed = constraints_of(replace(result, constraints=rows))
    assert keyed.limit == pytest.approx([30.0])
    # Injecting at the from bus opens the angle: with b = 1/(x tap), by hand from the flows' shift factors.
    b = result.point.dp_from[3]
    flow_rows = replace(rows, unit=("MW",), to_unit=np.array([network.base_mva]), angle_gain=rows.angle_gain * b)
    flows = split_prices(network, inputs.branch_in_service, replace(result, constraints=flow_rows), inputs.load_p)
    np.testing.assert_allclose(split.shift_factor, flows.shift_factor / b / network.base_mva * 180 / np.pi, atol=1e-12)


def test_rows_of_one_key_in_two_units_are_refused(five_bus):
    _, _, result = five_bus
    rows = ConstraintRows.concatenate([result.constraints.take(np.array([0]))] * 2, result.point.p_from.size)
    with pytest.raises(LmpgapError, match="in MW and in MVA"):
        constraints_of(replace(result, constraints=replace(rows, unit=("MW", "MVA"))))
