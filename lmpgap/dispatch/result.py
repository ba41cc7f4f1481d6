"""The neutral, frozen result that every formulation returns.

Whatever comes after the dispatch works on this alone and never asks which formulation it was. Powers are
per unit, angles radians, costs currency per hour; multipliers are currency per hour and per unit, with the
sign stated where they are stored. `lmpgap.prices.components` is the one place that turns them into prices.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from enum import Enum

import numpy as np
from scipy import sparse

from lmpgap.scenario.network import BoolArray, FloatArray, IntArray, Network


class SolveStatus(Enum):
    """How a solve ended, in the solver's own words.

    The certificate decides whether it may be priced, not the status: an answer that a solver calls inaccurate is
    certified when every measured residual is within its tolerance, and the reasons then say how the solver ended.
    """

    OPTIMAL = "optimal"
    LOCALLY_OPTIMAL = "locally optimal"
    INACCURATE = "inaccurate"
    INFEASIBLE = "infeasible"
    UNBOUNDED = "unbounded"
    LIMIT_REACHED = "limit reached"
    FAILED = "failed"

    @property
    def has_solution(self) -> bool:
        """True when primal values and multipliers exist (their quality is the certificate's matter)."""
        return self in (SolveStatus.OPTIMAL, SolveStatus.LOCALLY_OPTIMAL, SolveStatus.INACCURATE)


@dataclass(frozen=True, kw_only=True)
class OperatingPoint:
    """Voltages as products, flows, and how the flows turn with the branch angle.

    With voltages V, per branch W = V_f conj(V_t) = c + j s. The linear formulations have w = 1. Arrays have
    one entry per branch of the network; branches out of service carry zeros.

    Attributes
    ----------
    w : (n_bus,)
        Squared voltage magnitude [pu].
    angle : (n_bus,)
        Voltage angle [rad]; for a relaxation the angles recovered from the products.
    c, s : (n_branch,)
        Real and imaginary part of W [pu].
    p_from, q_from, p_to, q_to : (n_branch,)
        Power entering the branch at each end [pu].
    dp_from, dq_from, dp_to, dq_to : (n_branch,)
        Derivatives of those flows with respect to the branch angle (from minus to) [pu/rad].
    """

    w: FloatArray
    angle: FloatArray
    c: FloatArray
    s: FloatArray
    p_from: FloatArray
    q_from: FloatArray
    p_to: FloatArray
    q_to: FloatArray
    dp_from: FloatArray
    dq_from: FloatArray
    dp_to: FloatArray
    dq_to: FloatArray

    @property
    def loss(self) -> FloatArray:
        """Active loss per branch [pu], shape (n_branch,)."""
        return self.p_from + self.p_to


CONSTRAINT_KINDS = ("thermal", "angle", "contingency", "interface", "voltage", "reactive")
"""thermal: branch rating; angle: branch angle difference; contingency: post-outage flow; interface: weighted
sum of flows; voltage: bus voltage band; reactive: reactive range of a resource."""


@dataclass(frozen=True, kw_only=True)
class ConstraintRows:
    """The limits that were enforced and have a multiplier or are active, one row each.

    Two rows may carry the same key (both ends of one branch); their shadow prices add up.

    Attributes
    ----------
    kind, contingency, monitored, direction : (n_row,)
        The key. ``kind`` is one of `CONSTRAINT_KINDS`; ``contingency`` is empty without one; ``monitored`` is a
        branch, interface, bus or resource name; ``direction`` is ``"forward"`` (from -> to), ``"reverse"``,
        ``"upper"`` or ``"lower"``.
    unit : (n_row,)
        ``"MW"``, ``"MVA"``, ``"deg"``, ``"pu"`` or ``"Mvar"``: the unit of limit and value once multiplied by
        ``to_unit``.
    to_unit : (n_row,)
        Factor from the internal unit (pu or rad) to ``unit``.
    limit, value : (n_row,)
        In internal units [pu or rad].
    multiplier : (n_row,)
        Fall of cost per internal unit of relaxed limit, never negative [$/h per pu, or per rad].
    angle_gain : sparse (n_row, n_branch)
        Derivative of the constrained quantity (in the direction in which it is limited from above) with
        respect to each branch's angle difference [pu/rad]. Rows of voltage and reactive limits are empty: they
        act on prices through the reactive multipliers.
    at_penalty : (n_row,)
        True where the limit gave way and its shadow price is the penalty.
    """

    kind: tuple[str, ...]
    contingency: tuple[str, ...]
    monitored: tuple[str, ...]
    direction: tuple[str, ...]
    unit: tuple[str, ...]
    to_unit: FloatArray
    limit: FloatArray
    value: FloatArray
    multiplier: FloatArray
    angle_gain: sparse.csr_array
    at_penalty: BoolArray

    @property
    def n_row(self) -> int:
        """Number of rows."""
        return len(self.kind)

    def take(self, rows: IntArray | BoolArray) -> ConstraintRows:
        """Return the chosen rows, in the given order."""
        index = np.flatnonzero(rows) if rows.dtype == np.bool_ else rows
        return ConstraintRows(
            kind=tuple(self.kind[i] for i in index),
            contingency=tuple(self.contingency[i] for i in index),
            monitored=tuple(self.monitored[i] for i in index),
            direction=tuple(self.direction[i] for i in index),
            unit=tuple(self.unit[i] for i in index),
            to_unit=self.to_unit[index],
            limit=self.limit[index],
            value=self.value[index],
            multiplier=self.multiplier[index],
            angle_gain=self.angle_gain[index],
            at_penalty=self.at_penalty[index],
        )

    @staticmethod
    def none(n_branch: int) -> ConstraintRows:
        """Return an empty set."""
        return ConstraintRows(
            kind=(),
            contingency=(),
            monitored=(),
            direction=(),
            unit=(),
            to_unit=np.zeros(0),
            limit=np.zeros(0),
            value=np.zeros(0),
            multiplier=np.zeros(0),
            angle_gain=sparse.csr_array((0, n_branch)),
            at_penalty=np.zeros(0, dtype=bool),
        )

    @staticmethod
    def concatenate(parts: list[ConstraintRows], n_branch: int) -> ConstraintRows:
        """Return all rows of the parts, one after the other."""
        if not parts:
            return ConstraintRows.none(n_branch)
        return ConstraintRows(
            kind=tuple(x for part in parts for x in part.kind),
            contingency=tuple(x for part in parts for x in part.contingency),
            monitored=tuple(x for part in parts for x in part.monitored),
            direction=tuple(x for part in parts for x in part.direction),
            unit=tuple(x for part in parts for x in part.unit),
            to_unit=np.concatenate([part.to_unit for part in parts]),
            limit=np.concatenate([part.limit for part in parts]),
            value=np.concatenate([part.value for part in parts]),
            multiplier=np.concatenate([part.multiplier for part in parts]),
            angle_gain=sparse.csr_array(sparse.vstack([part.angle_gain for part in parts], format="csr")),
            at_penalty=np.concatenate([part.at_penalty for part in parts]),
        )


@dataclass(frozen=True, kw_only=True)
class BalanceMultipliers:
    """Multipliers of the nodal balances.

    Attributes
    ----------
    active : (n_bus,)
        Rise of cost per unit of additional active load at the bus [$/h per pu]; ``nan`` at a dead bus.
    reactive : (n_bus,)
        Rise of cost per unit of additional reactive load [$/h per pu]; zero in the linear formulations.
    squared_voltage : (n_bus,)
        Net multiplier of the voltage band on the squared voltage [$/h per pu^2], positive where the upper limit
        holds; zero in the linear formulations.
    """

    active: FloatArray
    reactive: FloatArray
    squared_voltage: FloatArray


@dataclass(frozen=True, kw_only=True)
class FrozenFactors:
    """Delivery factors that a dispatch took as given instead of deriving them.

    Attributes
    ----------
    delivery_factor : (n_bus,)
        [-].
    loss_distribution : (n_bus,)
        Share of the total loss withdrawn at each bus; sums to one [-].
    energy_multiplier : (n_bus,)
        Multiplier of the system balance of the bus's island: rise of cost per unit of load where the factor is 1
        [$/h per pu].
    """

    delivery_factor: FloatArray
    loss_distribution: FloatArray
    energy_multiplier: FloatArray


@dataclass(frozen=True, kw_only=True)
class SolverResiduals:
    """How far the solver's own answer is from optimality, in the model's units.

    Attributes
    ----------
    primal : float
        Largest violation of an equation, limit or cone [pu].
    dual : float
        Largest violation of stationarity [$/h per pu].
    gap : float
        Duality gap, or complementarity sum for a nonlinear solve [$/h].
    """

    primal: float
    dual: float
    gap: float


@dataclass(frozen=True, kw_only=True)
class StationaritySystem:
    """Active gradients at the solution: what multipliers the primal point admits.

    ``gradient + jacobian.T @ z = 0`` holds for every admissible z, with ``z >= 0`` on rows that are not
    ``free``. Equations are written as load + network - generation = 0 and limits as row <= 0, so the entry of
    z at a balance row is the rise of cost per unit of load.

    Attributes
    ----------
    gradient : (n_var,)
        Gradient of the cost at the solution [$/h per unit of the variable].
    jacobian : sparse (n_row, n_var)
        Equations and active limits (variable bounds included). An active second-order cone is one row: the
        gradient of its boundary.
    free : (n_row,)
        True for equations.
    multipliers : (n_row,)
        The solver's z.
    balance_rows : (n_bus,)
        Row of each bus's active balance; -1 at a dead bus.
    """

    gradient: FloatArray
    jacobian: sparse.csr_array
    free: BoolArray
    multipliers: FloatArray
    balance_rows: IntArray


@dataclass(frozen=True, kw_only=True)
class DispatchResult:
    """One interval solved under one formulation.

    Attributes
    ----------
    formulation : str
        ``"dc"``, ``"dc-loss"``, ``"soc"`` or ``"ac"``.
    status : SolveStatus
    message : str
        What the solver or the diagnosis said, in words.
    solver : str
        Name and version.
    solver_seconds, total_seconds : float
        Time inside the solver, and with building and reading back [s].
    objective : float
        Cost of generation (no-load included) minus value of served bids plus penalties [$/h].
    p, q : (n_resource,)
        Output [pu]; q is zero in the linear formulations.
    resource_cost : (n_resource,)
        Cost of each resource [$/h].
    bid_served : (n_bid,)
        Served part of each bid [pu].
    unserved, surplus : (n_bus,)
        Fixed load not served, and power taken away, at the power balance penalty [pu].
    point : OperatingPoint
    multipliers : BalanceMultipliers
    constraints : ConstraintRows
    residuals : SolverResiduals
    fictitious_loss : float
        Loss beyond the physical one that the model carries [pu]; zero where the model has none.
    relaxed : bool
        True when the model is a relaxation of the network: its voltages and flows need not belong to any set of
        angles, and its price needs an AC check before it is used.
    cone_slack : float
        Largest w_f w_t - |W|^2 of a branch, behind its transformer [pu]; zero where nothing is relaxed.
    loop_angle_deg : float
        Largest angle by which the relaxed products miss the angles that fit them best [deg]: what loops leave open;
        zero where angles are variables.
    loss_slack_open : bool
        True when a relaxed loss had to be replaced by frozen factors.
    frozen : FrozenFactors or None
    stationarity : StationaritySystem or None
        Present only when uniqueness was asked for.
    notes : tuple of str
        What else a reader should know: a fallback, an added constraint count, a dead bus.
    """

    formulation: str
    status: SolveStatus
    message: str
    solver: str
    solver_seconds: float
    total_seconds: float
    objective: float
    p: FloatArray
    q: FloatArray
    resource_cost: FloatArray
    bid_served: FloatArray
    unserved: FloatArray
    surplus: FloatArray
    point: OperatingPoint
    multipliers: BalanceMultipliers
    constraints: ConstraintRows
    residuals: SolverResiduals
    fictitious_loss: float = 0.0
    relaxed: bool = False
    cone_slack: float = 0.0
    loop_angle_deg: float = 0.0
    loss_slack_open: bool = False
    frozen: FrozenFactors | None = None
    stationarity: StationaritySystem | None = None
    notes: tuple[str, ...] = field(default=())


def no_solution(
    network: Network,
    *,
    formulation: str,
    status: SolveStatus,
    message: str,
    solver: str,
    solver_seconds: float,
    total_seconds: float,
    n_bid: int = 0,
) -> DispatchResult:
    """Return a result without a solution: every figure is ``nan``, so that none can pass for a price."""
    bus = np.full(network.n_bus, np.nan)
    branch = np.full(network.n_branch, np.nan)
    resource = np.full(network.n_resource, np.nan)
    flows = dict.fromkeys(
        ("c", "s", "p_from", "q_from", "p_to", "q_to", "dp_from", "dq_from", "dp_to", "dq_to"), branch
    )
    return DispatchResult(
        formulation=formulation,
        status=status,
        message=message,
        solver=solver,
        solver_seconds=solver_seconds,
        total_seconds=total_seconds,
        objective=float("nan"),
        p=resource,
        q=resource,
        resource_cost=resource,
        bid_served=np.full(n_bid, np.nan),
        unserved=bus,
        surplus=bus,
        point=OperatingPoint(w=bus, angle=bus, **flows),
        multipliers=BalanceMultipliers(active=bus, reactive=bus, squared_voltage=bus),
        constraints=ConstraintRows.none(network.n_branch),
        residuals=SolverResiduals(primal=np.inf, dual=np.inf, gap=np.inf),
    )


def constraint_name(kind: str, contingency: str, monitored: str, direction: str) -> str:
    """Return the one name under which a constraint appears in every table and picture.

    Examples
    --------
    >>> constraint_name("thermal", "", "L6", "reverse")
    'L6 reverse'
    >>> constraint_name("contingency", "loss of L2", "L6", "forward")
    'L6 forward / loss of L2'
    >>> constraint_name("angle", "", "L6", "upper")
    'angle L6 upper'
    """
    prefix = "" if kind in ("thermal", "contingency") else f"{kind} "
    suffix = f" / {contingency}" if contingency else ""
    return f"{prefix}{monitored} {direction}{suffix}"
