"""AC power flow: the voltages that given injections lead to, by Newton's method in polar form.

Unknown are the angles, the magnitudes at buses that do not hold theirs, and per island one number: the power that the
given injections leave missing (losses above all), shared out over the buses by given weights.

    P_i(V, theta) + shunt_g_i V_i^2 = p_injection_i + share_i * missing          every energised bus
    Q_i(V, theta) - shunt_b_i V_i^2 = q_injection_i                              buses that do not hold voltage

Each Newton step is shortened until the mismatch falls, so that a step from far away cannot run off. Reactive limits
turn a holding bus into one with fixed reactive injection, and back when its voltage says that the limit no longer
holds it. References: "Power Flow Solution by Newton's Method", IEEE Trans. Power Apparatus and Systems PAS-86, 1967;
for voltage products and the branch model see `lmpgap.dispatch.branch_model`.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import sparse
from scipy.sparse.linalg import splu

from lmpgap.dispatch.branch_model import BranchModel, FlowCoefficients, operating_point, voltage_products
from lmpgap.dispatch.result import OperatingPoint
from lmpgap.scenario.network import BoolArray, FloatArray, IntArray, Network

_SMALLEST_STEP = 2.0**-12
"""A Newton step shortened beyond this counts as stalled [-]."""
_LIMIT_ROUNDS = 30
"""Rounds of putting buses on their reactive limit or releasing them."""
_RELEASES = 2
"""Times a bus may be released from its reactive limit; after that it stays, which ends a cycle of switching."""


@dataclass(frozen=True, kw_only=True)
class PowerFlow:
    """Solution of an AC power flow; every figure but the mismatch is `nan` when it did not converge.

    Attributes
    ----------
    converged : bool
    reason : str
        Why it did not converge, in words; empty when it did.
    iterations : int
        Newton steps, over all rounds of reactive limits.
    magnitude : (n_bus,)
        Voltage magnitude [pu]; zero at dead buses.
    angle : (n_bus,)
        Voltage angle [rad], zero at the first voltage-holding bus of each island; zero at dead buses.
    point : OperatingPoint
        Flows of every branch.
    slack : (n_bus,)
        Power that the given injections left missing, at the buses that supplied it [pu].
    slack_mw : float
        The sum of it [MW]: positive when the injections fall short of load and losses.
    q_at_bus : (n_bus,)
        Reactive power injected by resources less load, shunts being part of the network [pu].
    at_q_limit : (n_bus,)
        1 where the bus lost its voltage to the upper reactive limit, -1 to the lower, 0 elsewhere.
    dead : (n_bus,)
        True in islands where no bus holds its voltage; nothing is said about them.
    mismatch_mw : float
        Largest remaining mismatch of active or reactive power [MW or Mvar].
    """

    converged: bool
    reason: str
    iterations: int
    magnitude: FloatArray
    angle: FloatArray
    point: OperatingPoint
    slack: FloatArray
    slack_mw: float
    q_at_bus: FloatArray
    at_q_limit: IntArray
    dead: BoolArray
    mismatch_mw: float


def solve_power_flow(
    network: Network,
    branch_in_service: BoolArray,
    *,
    p_injection: FloatArray,
    q_injection: FloatArray,
    v_setpoint: FloatArray,
    holds_voltage: BoolArray,
    slack_share: FloatArray,
    q_limits: tuple[FloatArray, FloatArray] | None = None,
    magnitude_start: FloatArray | None = None,
    angle_start: FloatArray | None = None,
    tolerance: float = 1e-9,
    max_iterations: int = 50,
) -> PowerFlow:
    """Return the voltages and flows that given injections lead to.

    Parameters
    ----------
    network, branch_in_service
        The grid.
    p_injection : (n_bus,)
        Generation less load [pu].
    q_injection : (n_bus,)
        The same for reactive power [pu]; not used at buses that hold their voltage.
    v_setpoint : (n_bus,)
        Voltage to hold [pu]; not used elsewhere.
    holds_voltage : (n_bus,)
        True where the bus holds its voltage. An island without such a bus is dead.
    slack_share : (n_bus,)
        Weights by which the buses of an island supply what is missing; normalised per island. Where an island has
        none, its first holding bus supplies it.
    q_limits : pair of (n_bus,), optional
        Smallest and largest reactive injection, resources less load, that a holding bus can give [pu].
    magnitude_start, angle_start : (n_bus,), optional
        Where to start [pu], [rad]; setpoints or 1 pu, and zero angles, otherwise.
    tolerance : float
        Largest accepted mismatch [pu].
    max_iterations : int
        Newton steps allowed, over all rounds.

    Returns
    -------
    PowerFlow
        ``converged`` false and a reason in words where no solution was found; never an exception.
    """
    system = _System.of(network, branch_in_service, holds_voltage, slack_share)
    live, holds = ~system.dead, holds_voltage & ~system.dead
    magnitude = np.where(holds_voltage, v_setpoint, 1.0) if magnitude_start is None else magnitude_start.copy()
    magnitude = np.where(holds, v_setpoint, magnitude)
    magnitude[system.dead] = 0.0
    angle = np.zeros(network.n_bus) if angle_start is None else np.where(live, angle_start, 0.0)
    angle = np.where(live, angle - angle[system.reference_of], 0.0)
    state = _State(magnitude=magnitude, angle=angle, missing=np.zeros(system.n_island))
    q = q_injection.copy()
    at_limit, releases = np.zeros(network.n_bus, np.int64), np.zeros(network.n_bus, np.int64)
    iterations, reason = 0, ""
    for _ in range(_LIMIT_ROUNDS):
        free = holds & (at_limit == 0)
        state, steps, reason = _newton(system, state, p_injection, q, free, tolerance, max_iterations - iterations)
        iterations += steps
        if reason or q_limits is None:
            break
        changed = _switch(system, state, q, q_limits, v_setpoint, holds, at_limit, releases, tolerance)
        if not changed:
            break
    else:
        reason = f"reactive limits still switch after {_LIMIT_ROUNDS} rounds"
    free = holds & (at_limit == 0)
    mismatch = system.mismatch(state, p_injection, q, free)
    largest = float(np.max(np.abs(mismatch), initial=0.0)) * network.base_mva
    if reason:
        worst = int(np.argmax(np.abs(mismatch))) % network.n_bus
        where = f"; largest mismatch {largest:.4g} MW at bus {network.buses[worst]}" if np.isfinite(largest) else ""
        return _not_converged(network, system, iterations, reason + where, largest)
    _, q_network = system.injections(state)
    slack = np.where(live, system.share * state.missing[system.island_of], 0.0)
    return PowerFlow(
        converged=True,
        reason="",
        iterations=iterations,
        magnitude=state.magnitude,
        angle=state.angle,
        point=system.point(state),
        slack=slack,
        slack_mw=float(slack.sum()) * network.base_mva,
        q_at_bus=q_network,
        at_q_limit=at_limit,
        dead=system.dead,
        mismatch_mw=largest,
    )


def nodal_mismatch(
    network: Network,
    branch_in_service: BoolArray,
    *,
    magnitude: FloatArray,
    angle: FloatArray,
    p_injection: FloatArray,
    q_injection: FloatArray,
) -> tuple[FloatArray, FloatArray]:
    """Return what given voltages leave unbalanced at each bus, active and reactive, each (n_bus,) [pu].

    Positive where the network takes more than is injected. This is the first look at voltages that come from
    elsewhere, e.g. from a relaxation; a power flow then says where they would settle.
    """
    everywhere = np.ones(network.n_bus, dtype=bool)
    system = _System.of(network, branch_in_service, everywhere, np.zeros(network.n_bus))
    p_network, q_network = system.injections(_State(magnitude, angle, np.zeros(system.n_island)))
    return p_network - p_injection, q_network - q_injection


@dataclass(frozen=True)
class _State:
    magnitude: FloatArray
    angle: FloatArray
    missing: FloatArray
    """Missing power per energised island [pu]."""


@dataclass(frozen=True)
class _System:
    """The equations of one topology."""

    network: Network
    model: BranchModel
    dead: BoolArray
    n_island: int
    island_of: IntArray
    """Number of the energised island of each bus; 0 at dead ones, where it is not used."""
    reference_of: IntArray
    """Angle reference of each bus."""
    share: FloatArray

    @staticmethod
    def of(
        network: Network, branch_in_service: BoolArray, holds_voltage: BoolArray, slack_share: FloatArray
    ) -> _System:
        island = network.islands(branch_in_service)
        count = int(island.max(initial=-1)) + 1
        holding = np.flatnonzero(holds_voltage)
        first = np.full(count, -1, dtype=np.int64)
        first[island[holding[::-1]]] = holding[::-1]
        dead = first[island] < 0
        number = np.cumsum(first >= 0) - 1
        reference_of = np.where(dead, np.arange(network.n_bus), first[island])
        share = np.where(dead, 0.0, slack_share).astype(float)
        total = np.bincount(island, weights=share, minlength=count)
        unshared = first[(first >= 0) & (total == 0.0)]
        share[unshared] = 1.0
        total[island[unshared]] = 1.0
        share = np.divide(share, total[island], out=np.zeros(network.n_bus), where=~dead)
        on = branch_in_service & ~dead[network.from_bus]
        return _System(
            network=network,
            model=BranchModel.of(network, on),
            dead=dead,
            n_island=int(np.count_nonzero(first >= 0)),
            island_of=np.where(dead, 0, number[island]),
            reference_of=reference_of,
            share=share,
        )

    def point(self, state: _State) -> OperatingPoint:
        c, s = voltage_products(self.network, state.magnitude, state.angle)
        return operating_point(self.network, self.model, state.magnitude**2, c, s, state.angle)

    def injections(self, state: _State) -> tuple[FloatArray, FloatArray]:
        """Return active and reactive power entering the network at each bus, shunts included [pu]."""
        network, point = self.network, self.point(state)
        n = network.n_bus

        def at_buses(leaving_from: FloatArray, leaving_to: FloatArray) -> FloatArray:
            total = np.bincount(network.from_bus, leaving_from, n) + np.bincount(network.to_bus, leaving_to, n)
            return total.astype(float)

        return (
            at_buses(point.p_from, point.p_to) + network.shunt_g * point.w,
            at_buses(point.q_from, point.q_to) - network.shunt_b * point.w,
        )

    def mismatch(self, state: _State, p_injection: FloatArray, q_injection: FloatArray, free: BoolArray) -> FloatArray:
        """Return active, then reactive mismatch, shape (2 n_bus,) [pu]; zero where there is no equation."""
        p_network, q_network = self.injections(state)
        active = p_network - p_injection
        if self.n_island:
            active = active - self.share * state.missing[self.island_of]
        reactive = q_network - q_injection
        return np.concatenate([np.where(self.dead, 0.0, active), np.where(self.dead | free, 0.0, reactive)])

    def jacobian(self, state: _State, equations: IntArray, unknowns: IntArray) -> sparse.csc_array:
        """Return derivatives of the network's injections, (n_equation, n_unknown).

        Parameters
        ----------
        equations
            Chosen among the rows of `mismatch`.
        unknowns
            Chosen among angles, magnitudes and missing power, one after the other.
        """
        network, n = self.network, self.network.n_bus
        magnitude = np.where(self.dead, 1.0, state.magnitude)
        c, s = voltage_products(network, state.magnitude, state.angle)
        start, end = network.from_bus, network.to_bus
        rows, columns, data = [], [], []

        def add(row: IntArray, column: IntArray, value: FloatArray) -> None:
            rows.append(row)
            columns.append(column)
            data.append(value)

        for offset, k_from, k_to in (
            (0, self.model.p_from, self.model.p_to),
            (n, self.model.q_from, self.model.q_to),
        ):
            for own, k in ((start, k_from), (end, k_to)):
                product, turn = _product_and_turn(k, c, s)
                add(own + offset, start, turn)
                add(own + offset, end, -turn)
                add(own + offset, n + start, product / magnitude[start])
                add(own + offset, n + end, product / magnitude[end])
                add(own + offset, n + own, 2.0 * k.w * magnitude[own])
        bus = np.arange(n)
        add(bus, n + bus, 2.0 * network.shunt_g * magnitude)
        add(n + bus, n + bus, -2.0 * network.shunt_b * magnitude)
        add(bus, 2 * n + self.island_of, -self.share)
        row, column, value = (np.concatenate(parts) for parts in (rows, columns, data))
        row = _positions(equations, 2 * n)[row]
        column = _positions(unknowns, 2 * n + max(self.n_island, 1))[column]
        kept = (row >= 0) & (column >= 0)
        return sparse.csc_array((value[kept], (row[kept], column[kept])), shape=(equations.size, unknowns.size))


def _positions(chosen: IntArray, n: int) -> IntArray:
    """Return the place of each of n among the chosen ones, -1 for the others."""
    position = np.full(n, -1, dtype=np.int64)
    position[chosen] = np.arange(chosen.size)
    return position


def _product_and_turn(k: FlowCoefficients, c: FloatArray, s: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return the part of a flow that is proportional to both magnitudes, and its derivative along the angle."""
    return k.c * c + k.s * s, k.s * c - k.c * s


def _newton(
    system: _System,
    state: _State,
    p_injection: FloatArray,
    q_injection: FloatArray,
    free: BoolArray,
    tolerance: float,
    max_iterations: int,
) -> tuple[_State, int, str]:
    """Return the state, the number of steps, and why it stopped short (empty when it converged)."""
    n = system.network.n_bus
    live = np.flatnonzero(~system.dead)
    fixed_q = np.flatnonzero(~system.dead & ~free)
    turning = live[system.reference_of[live] != live]
    rows = np.concatenate([live, n + fixed_q])
    columns = np.concatenate([turning, n + fixed_q, 2 * n + np.arange(system.n_island)])
    mismatch = system.mismatch(state, p_injection, q_injection, free)
    for iteration in range(max_iterations + 1):
        if np.max(np.abs(mismatch), initial=0.0) <= tolerance:
            return state, iteration, ""
        if iteration == max_iterations:
            break
        try:
            full_step = splu(system.jacobian(state, rows, columns)).solve(-mismatch[rows])
        except RuntimeError:
            return state, iteration, "the equations are singular here"
        if not np.all(np.isfinite(full_step)):
            return state, iteration, "the equations are singular here"
        step, norm = 1.0, float(np.linalg.norm(mismatch))
        while True:
            candidate = _moved(system, state, step * full_step, turning, fixed_q)
            moved = system.mismatch(candidate, p_injection, q_injection, free)
            if np.all(candidate.magnitude[live] > 0.0) and np.linalg.norm(moved) < norm * (1.0 - 1e-4 * step):
                break
            # Close to the solution rounding alone can keep the norm from falling: take the full step if it is small.
            if step == 1.0 and np.max(np.abs(moved)) <= tolerance:
                break
            step *= 0.5
            if step < _SMALLEST_STEP:
                return (
                    state,
                    iteration,
                    "no step reduces the mismatch any further: these injections have no solution near",
                )
        state, mismatch = candidate, moved
    return state, max_iterations, "not converged within the allowed steps"


def _moved(system: _System, state: _State, step: FloatArray, turning: IntArray, fixed_q: IntArray) -> _State:
    angle, magnitude = state.angle.copy(), state.magnitude.copy()
    angle[turning] += step[: turning.size]
    magnitude[fixed_q] += step[turning.size : turning.size + fixed_q.size]
    return _State(magnitude, angle, state.missing + step[turning.size + fixed_q.size :])


def _switch(
    system: _System,
    state: _State,
    q: FloatArray,
    q_limits: tuple[FloatArray, FloatArray],
    v_setpoint: FloatArray,
    holds: BoolArray,
    at_limit: IntArray,
    releases: IntArray,
    tolerance: float,
) -> bool:
    """Put holding buses on their limits or release them, in place; return whether anything changed."""
    low, high = q_limits
    _, q_network = system.injections(state)
    margin = 10.0 * tolerance
    free = holds & (at_limit == 0)
    above, below = free & (q_network > high + margin), free & (q_network < low - margin)
    regained = ((at_limit > 0) & (state.magnitude > v_setpoint + margin)) | (
        (at_limit < 0) & (state.magnitude < v_setpoint - margin)
    )
    released = regained & (releases < _RELEASES)
    at_limit[above], q[above] = 1, high[above]
    at_limit[below], q[below] = -1, low[below]
    at_limit[released] = 0
    releases[released] += 1
    state.magnitude[released] = v_setpoint[released]
    return bool(np.any(above | below | released))


def _not_converged(network: Network, system: _System, iterations: int, reason: str, mismatch_mw: float) -> PowerFlow:
    bus, branch = np.full(network.n_bus, np.nan), np.full(network.n_branch, np.nan)
    flows = dict.fromkeys(
        ("c", "s", "p_from", "q_from", "p_to", "q_to", "dp_from", "dq_from", "dp_to", "dq_to"), branch
    )
    return PowerFlow(
        converged=False,
        reason=reason,
        iterations=iterations,
        magnitude=bus,
        angle=bus,
        point=OperatingPoint(w=bus, angle=bus, **flows),
        slack=bus,
        slack_mw=float("nan"),
        q_at_bus=bus,
        at_q_limit=np.zeros(network.n_bus, np.int64),
        dead=system.dead,
        mismatch_mw=mismatch_mw,
    )
