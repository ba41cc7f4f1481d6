"""The AC power flow against the complex network equations solved densely by another method."""

import cmath
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.optimize import root

from lmpgap.dispatch.power_flow import PowerFlow, nodal_mismatch, solve_power_flow
from lmpgap.scenario.network import Network
from tests.dispatch.small_networks import two_bus
from tests.support.networks import load_network


def admittance(network: Network, on: np.ndarray) -> np.ndarray:
    """Return the dense bus admittance matrix, entry by entry from the pi-model [pu]."""
    y = np.zeros((network.n_bus, network.n_bus), dtype=complex)
    for k in range(network.n_branch):
        if not on[k]:
            continue
        f, t = network.from_bus[k], network.to_bus[k]
        series = 1.0 / complex(network.r[k], network.x[k])
        half = 0.5j * network.charging[k]
        ratio = network.tap[k] * cmath.exp(1j * network.shift[k])
        y[f, f] += (series + half) / abs(ratio) ** 2
        y[t, t] += series + half
        y[f, t] -= series / ratio.conjugate()
        y[t, f] -= series / ratio
    for i in range(network.n_bus):
        y[i, i] += complex(network.shunt_g[i], network.shunt_b[i])
    return y


def injected(network: Network, on: np.ndarray, flow: PowerFlow) -> np.ndarray:
    """Return the complex power entering the network at each bus from V conj(Y V) [pu]."""
    voltage = flow.magnitude * np.exp(1j * flow.angle)
    return np.asarray(voltage * np.conj(admittance(network, on) @ voltage))


def scheduled(name: str, seed: int = 0, spread: float = 0.0) -> tuple[Network, np.ndarray, dict[str, np.ndarray]]:
    """Return a network with its load, a dispatch in proportion to capacity, and holding buses at about 1 pu."""
    network, inputs = load_network(name)
    rng = np.random.default_rng(seed)
    capacity = np.bincount(network.resource_bus, inputs.p_max, network.n_bus)
    load = inputs.load_p * (1 + spread * rng.uniform(-1, 1, network.n_bus))
    holds = np.zeros(network.n_bus, dtype=bool)
    holds[network.resource_bus] = True
    given = {
        "p_injection": capacity / capacity.sum() * load.sum() - load,
        "q_injection": -inputs.load_q,
        "v_setpoint": np.where(holds, 1.0 + spread * rng.uniform(-0.1, 0.1, network.n_bus), 1.0),
        "holds_voltage": holds,
        "slack_share": capacity,
    }
    return network, inputs.branch_in_service, given


@pytest.mark.parametrize("name", ["case5", "case14", "case30"])
def test_against_the_dense_complex_equations(name: str) -> None:
    network, on, given = scheduled(name, seed=3, spread=0.3)
    y = admittance(network, on)
    n, holds = network.n_bus, given["holds_voltage"]
    share = given["slack_share"] / given["slack_share"].sum()
    reference = int(np.flatnonzero(holds)[0])

    def equations(z: np.ndarray) -> np.ndarray:
        """Rectangular voltages and the missing power: another set of unknowns than the code under test."""
        voltage, missing = z[:n] + 1j * z[n : 2 * n], z[2 * n]
        power = voltage * np.conj(y @ voltage)
        second = np.where(holds, np.abs(voltage) - given["v_setpoint"], power.imag - given["q_injection"])
        return np.concatenate([power.real - given["p_injection"] - share * missing, second, [voltage[reference].imag]])

    start = np.concatenate([np.ones(n), np.zeros(n + 1)])
    expected = root(equations, start, tol=1e-13)
    assert np.abs(equations(expected.x)).max() < 1e-9
    flow = solve_power_flow(network, on, **given)
    assert flow.converged
    assert flow.mismatch_mw < 1e-6
    voltage = flow.magnitude * np.exp(1j * flow.angle)
    np.testing.assert_allclose(voltage, expected.x[:n] + 1j * expected.x[n : 2 * n], atol=1e-8)
    assert flow.slack_mw == pytest.approx(network.base_mva * expected.x[2 * n], abs=1e-5)


@settings(max_examples=25, deadline=None)
@given(seed=st.integers(0, 10_000), spread=st.floats(0.0, 0.5))
def test_solution_satisfies_the_complex_equations(seed: int, spread: float) -> None:
    network, on, given = scheduled("case14", seed, spread)
    flow = solve_power_flow(network, on, **given)
    assert flow.converged
    power = injected(network, on, flow)
    np.testing.assert_allclose(power.real, given["p_injection"] + flow.slack, atol=1e-7)
    free = ~given["holds_voltage"]
    np.testing.assert_allclose(power.imag[free], given["q_injection"][free], atol=1e-7)
    np.testing.assert_allclose(flow.magnitude[~free], given["v_setpoint"][~free])
    # Shunts belong to the network: what the bus itself must give is what enters it.
    np.testing.assert_allclose(flow.q_at_bus, power.imag, atol=1e-7)
    # What is missing is what is lost on branches and in shunts beyond the surplus of the schedule.
    lost = flow.point.loss.sum() + (network.shunt_g * flow.point.w).sum()
    assert flow.slack.sum() == pytest.approx(lost - given["p_injection"].sum(), abs=1e-7)


def test_two_buses_in_closed_form() -> None:
    """Constant power at the end of a reactance: V^4 - V^2 + (P x)^2 = 0 without reactive load; upper solution."""
    network, _ = two_bus(x=0.2, load_mw=100.0)
    power, x = 1.5, 0.2
    flow = solve_power_flow(
        network,
        np.ones(1, dtype=bool),
        p_injection=np.array([0.0, -power]),
        q_injection=np.zeros(2),
        v_setpoint=np.ones(2),
        holds_voltage=np.array([True, False]),
        slack_share=np.array([1.0, 0.0]),
    )
    square = (1 + np.sqrt(1 - 4 * (power * x) ** 2)) / 2
    assert flow.magnitude[1] == pytest.approx(np.sqrt(square), abs=1e-9)
    assert flow.angle[1] == pytest.approx(-np.arcsin(power * x / np.sqrt(square)), abs=1e-9)
    assert flow.slack_mw == pytest.approx(150.0, abs=1e-6)


def test_beyond_the_largest_load_it_does_not_converge_and_says_so() -> None:
    """The same line carries at most P = 1/(2 x) = 2.5 pu."""
    network, _ = two_bus(x=0.2)
    for power, expected in ((2.49, True), (2.51, False)):
        flow = solve_power_flow(
            network,
            np.ones(1, dtype=bool),
            p_injection=np.array([0.0, -power]),
            q_injection=np.zeros(2),
            v_setpoint=np.ones(2),
            holds_voltage=np.array([True, False]),
            slack_share=np.array([1.0, 0.0]),
        )
        assert flow.converged is expected
        assert (flow.reason == "") is expected
    assert "no solution near" in flow.reason
    assert "at bus " in flow.reason
    assert np.all(np.isnan(flow.magnitude))
    assert np.isnan(flow.slack_mw)
    assert flow.mismatch_mw > 0


@pytest.mark.parametrize("name", ["case14", "case30", "case118"])
def test_reactive_limits(name: str) -> None:
    """Each holding bus ends inside its range at its setpoint, or on a limit with the voltage that says so."""
    network, on, given = scheduled(name, seed=1, spread=0.1)
    _, inputs = load_network(name)
    low = np.bincount(network.resource_bus, network.q_min, network.n_bus) - inputs.load_q
    high = np.bincount(network.resource_bus, network.q_max, network.n_bus) - inputs.load_q
    free = solve_power_flow(network, on, **given)
    holds = given["holds_voltage"]
    assert np.any(holds & ((free.q_at_bus > high) | (free.q_at_bus < low))), "nothing to enforce in this case"
    flow = solve_power_flow(network, on, **given, q_limits=(low, high))
    assert flow.converged
    power = injected(network, on, flow)
    np.testing.assert_allclose(power.real, given["p_injection"] + flow.slack, atol=1e-7)
    at, v, setpoint = flow.at_q_limit, flow.magnitude, given["v_setpoint"]
    assert np.all(at[~holds] == 0)
    inside = holds & (at == 0)
    np.testing.assert_allclose(v[inside], setpoint[inside])
    assert np.all(flow.q_at_bus[inside] <= high[inside] + 1e-6)
    assert np.all(flow.q_at_bus[inside] >= low[inside] - 1e-6)
    np.testing.assert_allclose(power.imag[at > 0], high[at > 0], atol=1e-7)
    np.testing.assert_allclose(power.imag[at < 0], low[at < 0], atol=1e-7)
    assert np.all(v[at > 0] <= setpoint[at > 0] + 1e-6)
    assert np.all(v[at < 0] >= setpoint[at < 0] - 1e-6)
    assert np.any(at != 0)


def test_limit_holds_the_bus_exactly_when_it_is_too_tight() -> None:
    network, _ = two_bus(x=0.1)
    given = {
        "p_injection": np.array([0.0, -1.0]),
        "q_injection": np.zeros(2),
        "v_setpoint": np.ones(2),
        "holds_voltage": np.array([True, True]),
        "slack_share": np.array([1.0, 0.0]),
    }
    on = np.ones(1, dtype=bool)
    need = solve_power_flow(network, on, **given).q_at_bus[1]
    for high, limited in ((need + 0.01, False), (need - 0.01, True)):
        flow = solve_power_flow(network, on, **given, q_limits=(np.full(2, -9.0), np.array([9.0, high])))
        assert flow.converged
        assert bool(flow.at_q_limit[1]) is limited
        assert bool(flow.magnitude[1] < 1.0 - 1e-6) is limited


def test_bus_is_released_when_its_limit_no_longer_holds_it() -> None:
    """West - middle - east. At first the middle pushes, the east absorbs, and both are beyond their limits.

    With the middle on its limit its voltage sinks to that of the west; the east, left absorbing at its limit, would
    fall below its setpoint, so it must be released and absorb less.
    """
    network, _ = two_bus(x=0.1)
    network = network.with_changes(
        **{name: np.ones(3) for name in ("v_min", "v_max")},
        **{name: np.zeros(3) for name in ("shunt_g", "shunt_b")},
        buses=("west", "middle", "east"),
        branches=("one", "two"),
        from_bus=np.array([0, 1]),
        to_bus=np.array([1, 2]),
        **{name: getattr(network, name).repeat(2) for name in ("r", "x", "charging", "tap", "shift")},
    )
    given = {
        "p_injection": np.zeros(3),
        "q_injection": np.zeros(3),
        "v_setpoint": np.array([1.0, 1.1, 0.99]),
        "holds_voltage": np.ones(3, dtype=bool),
        "slack_share": np.array([1.0, 0.0, 0.0]),
    }
    on, wide, narrow = np.ones(2, dtype=bool), np.full(3, 9.0), np.array([9.0, 0.01, 9.0])
    low = np.array([-9.0, -9.0, -0.3])
    first = solve_power_flow(network, on, **given)
    assert first.q_at_bus[1] > narrow[1]
    assert first.q_at_bus[2] < low[2]
    kept = solve_power_flow(network, on, **given, q_limits=(low, wide))
    assert list(kept.at_q_limit) == [0, 0, -1]
    flow = solve_power_flow(network, on, **given, q_limits=(low, narrow))
    assert flow.converged
    assert list(flow.at_q_limit) == [0, 1, 0]
    assert flow.magnitude[2] == pytest.approx(0.99)
    assert flow.q_at_bus[2] > low[2]


def test_islands_have_their_own_missing_power_and_dead_ones_are_told() -> None:
    network, on, given = scheduled("case14")
    on = on.copy()
    # Bus 8 hangs on one branch and has a resource: an island that lives on its own.
    tie = [k for k in range(network.n_branch) if 7 in (network.from_bus[k], network.to_bus[k])]
    on[tie] = False
    flow = solve_power_flow(network, on, **given)
    assert flow.converged
    assert not flow.dead.any()
    assert flow.slack[7] == pytest.approx(-given["p_injection"][7], abs=1e-8)
    assert flow.angle[7] == 0.0
    holds = given["holds_voltage"].copy()
    holds[7] = False
    flow = solve_power_flow(network, on, **(given | {"holds_voltage": holds}))
    assert flow.converged
    assert flow.dead[7]
    assert flow.dead.sum() == 1
    assert flow.magnitude[7] == 0.0
    assert np.all(flow.point.p_from[tie] == 0.0)


def test_start_at_the_solution_takes_no_step() -> None:
    network, on, given = scheduled("case30")
    flow = solve_power_flow(network, on, **given)
    again = solve_power_flow(network, on, **given, magnitude_start=flow.magnitude, angle_start=flow.angle + 0.3)
    # The missing power is not part of the start, so that one number is found in one step; angles keep their turn.
    assert again.iterations <= 1
    np.testing.assert_allclose(again.angle, flow.angle, atol=1e-9)


def test_slack_goes_where_its_share_says() -> None:
    network, on, given = scheduled("case14")
    share = np.zeros(network.n_bus)
    share[[0, 1]] = [3.0, 1.0]
    flow = solve_power_flow(network, on, **(given | {"slack_share": share}))
    assert flow.slack[0] == pytest.approx(3 * flow.slack[1])
    assert np.all(flow.slack[2:] == 0.0)
    single = solve_power_flow(network, on, **(given | {"slack_share": np.zeros(network.n_bus)}))
    assert single.slack[0] * network.base_mva == pytest.approx(single.slack_mw)


def test_nodal_mismatch_is_zero_at_a_solution_and_local_elsewhere() -> None:
    network, on, given = scheduled("case14")
    flow = solve_power_flow(network, on, **given)
    state = {"magnitude": flow.magnitude, "angle": flow.angle}
    active, reactive = nodal_mismatch(
        network, on, **state, p_injection=given["p_injection"] + flow.slack, q_injection=flow.q_at_bus
    )
    np.testing.assert_allclose(active, 0.0, atol=1e-8)
    np.testing.assert_allclose(reactive, 0.0, atol=1e-8)
    moved = flow.angle.copy()
    moved[7] += 0.1
    active, _ = nodal_mismatch(
        network,
        on,
        magnitude=flow.magnitude,
        angle=moved,
        p_injection=given["p_injection"] + flow.slack,
        q_injection=flow.q_at_bus,
    )
    assert set(np.flatnonzero(np.abs(active) > 1e-6)) <= {6, 7}


def test_base_power_changes_nothing_but_the_units() -> None:
    network, on, given = scheduled("case14")
    flow = solve_power_flow(network, on, **given)
    doubled = replace(network, base_mva=2 * network.base_mva)
    other = solve_power_flow(doubled, on, **given)
    np.testing.assert_array_equal(flow.magnitude, other.magnitude)
    assert other.slack_mw == pytest.approx(2 * flow.slack_mw)
