"""Why an interval has no feasible dispatch: the smallest relaxation that makes it feasible, in words.

Every balance and limit of the program gets an elastic variable and the sum of these is minimised in place of the
cost ("Identifying Minimally Infeasible Subsystems of Inequalities", ORSA Journal on Computing 2(1), 1990, on
elastic programs). Amounts of power count one to one; angles and squared voltages count `PER_RADIAN` and `PER_VOLTAGE`
per unit, about what a typical branch makes of them. A sum of absolute values is smallest at few nonzero terms, so that
the answer names few limits.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from scipy import sparse

from lmpgap.dispatch.conic import ConicProgram
from lmpgap.dispatch.convex import ConvexDispatch, ConvexModel
from lmpgap.dispatch.formulation import build_formulation
from lmpgap.dispatch.limits import FlowLimits
from lmpgap.dispatch.live import bus_list
from lmpgap.dispatch.options import DispatchOptions
from lmpgap.dispatch.program_solver import solve_program
from lmpgap.dispatch.result import constraint_name
from lmpgap.dispatch.soc_rows import angle_limits
from lmpgap.dispatch.supply import rated_branches
from lmpgap.errors import LmpgapError
from lmpgap.scenario.network import FloatArray, IntArray, IntervalInputs, Network

PER_RADIAN = 10.0
"""Weight of an angle limit [pu per rad]."""

PER_VOLTAGE = 10.0
"""Weight of a voltage limit [pu per pu^2]."""

WORTH_NAMING_MW = 1e-3
"""Relaxations below this are solver dust [MW or weighted equivalent]."""

NAMED = 8
"""Relaxations named in the sentence, largest first."""

_ALLOWED = 1e-3
"""Weight of what a penalty allows anyway: it is no change of the data, and hard limits are what stands in the way."""

_PENALTY_BLOCKS = ("unserved", "surplus", "excess", "flow limit excess")


@dataclass(frozen=True, kw_only=True)
class Relaxation:
    """One limit that has to give way.

    Attributes
    ----------
    kind : str
        ``"unserved"``, ``"surplus"``, ``"reactive shortage"``, ``"reactive surplus"``, or a constraint kind as in
        `lmpgap.dispatch.result.CONSTRAINT_KINDS`.
    name : str
        Bus, or the constraint's name.
    amount : float
        By how much, in ``unit``.
    unit : str
        ``"MW"``, ``"Mvar"``, ``"MVA"``, ``"deg"`` or ``"pu"``.
    """

    kind: str
    name: str
    amount: float
    unit: str

    def __str__(self) -> str:
        amount = f"{self.amount:.4g} {self.unit}"
        words = {
            "unserved": f"{amount} of load at {self.name} is not served",
            "surplus": f"{amount} of must-run output at {self.name} is taken away",
            "reactive shortage": f"{amount} are supplied at {self.name}",
            "reactive surplus": f"{amount} are absorbed at {self.name}",
        }
        return words.get(self.kind, f"the limit {self.name} is widened by {amount}")


@dataclass(frozen=True, kw_only=True)
class Diagnosis:
    """What it takes to make an interval feasible.

    Attributes
    ----------
    sentence : str
    relaxations : tuple of Relaxation
        Largest first; empty when the interval is feasible, or when nothing could be found out.
    """

    sentence: str
    relaxations: tuple[Relaxation, ...] = ()


@dataclass(frozen=True, kw_only=True)
class _Elastic:
    """A block of elastic variables: where they act, what they cost, and how to name them.

    ``rows`` has shape (n_copy, n): one variable may act on several rows, such as both ends of a branch. ``most`` bounds
    the variables: no bus sheds more than its load.
    """

    kind: str
    rows: IntArray
    where: str
    sign: float
    weight: float
    unit: str
    to_unit: float
    names: tuple[str, ...]
    most: FloatArray | float = np.inf


def diagnose(
    name: str,
    network: Network,
    inputs: IntervalInputs,
    flow_limits: FlowLimits,
    options: DispatchOptions,
) -> Diagnosis:
    """Say why an interval is infeasible.

    Parameters
    ----------
    name
        The formulation. For ``"ac"`` the cone relaxation is asked: what it cannot satisfy, no AC dispatch can.

    Returns
    -------
    Diagnosis
        With a sentence in any case.
    """
    formulation = build_formulation("soc" if name == "ac" else name, network, inputs.branch_in_service, options)
    if not isinstance(formulation, ConvexDispatch):
        raise LmpgapError(f"no diagnosis for the formulation {name!r}")
    model, program = formulation.program(inputs, flow_limits)
    live = model.live
    stranded = live.dead()[inputs.load_p[live.dead()] != 0.0]
    if stranded.size:
        return _stranded(network, inputs, stranded)
    blocks = list(_elastic_blocks(network, model, inputs, flow_limits))
    elastic = _elastic_program(program, model, blocks)
    solution, _ = solve_program(elastic, options.tolerances)
    if not solution.status.has_solution:
        return Diagnosis(
            sentence=f"no relaxation of limits or load makes the interval feasible ({solution.message}); look for "
            "contradictory data such as a lower limit above its upper limit"
        )
    amounts = solution.x[program.n_var :]
    found: list[tuple[float, Relaxation]] = []
    position = 0
    for block in blocks:
        amount = amounts[position : position + block.rows.shape[1]]
        position += block.rows.shape[1]
        for i in np.flatnonzero(amount * block.weight * network.base_mva > WORTH_NAMING_MW).tolist():
            relaxation = Relaxation(
                kind=block.kind, name=block.names[i], amount=float(amount[i] * block.to_unit), unit=block.unit
            )
            found.append((float(amount[i] * block.weight), relaxation))
    found.sort(key=lambda pair: -pair[0])
    relaxations = tuple(relaxation for _, relaxation in found)
    return Diagnosis(sentence=_sentence(name, network, inputs, live.bus, relaxations), relaxations=relaxations)


def _stranded(network: Network, inputs: IntervalInputs, stranded: IntArray) -> Diagnosis:
    relaxations = tuple(
        Relaxation(kind="unserved", name=network.buses[i], amount=float(inputs.load_p[i]) * network.base_mva, unit="MW")
        for i in stranded.tolist()
    )
    return Diagnosis(
        sentence=f"no resource in service is connected to the load at {bus_list(network, stranded)}",
        relaxations=relaxations,
    )


def _sentence(
    name: str,
    network: Network,
    inputs: IntervalInputs,
    live_bus: IntArray,
    relaxations: tuple[Relaxation, ...],
) -> str:
    if not relaxations:
        if name == "ac":
            return (
                "the cone relaxation is feasible, so no limit is proven too tight: the nonlinear solver found no "
                "solution from its starting points"
            )
        return "the limits can all be satisfied"
    capacity = float(inputs.p_max.sum()) * network.base_mva
    load = float(inputs.load_p[live_bus].sum()) * network.base_mva
    named = "; ".join(str(relaxation) for relaxation in relaxations[:NAMED])
    more = f"; and {len(relaxations) - NAMED} smaller ones" if len(relaxations) > NAMED else ""
    short = f"capacity in service is {capacity:.6g} MW and fixed load {load:.6g} MW. " if capacity < load else ""
    return f"{short}The smallest change that makes it feasible: {named}{more}"


def _elastic_blocks(
    network: Network, model: ConvexModel, inputs: IntervalInputs, flow_limits: FlowLimits
) -> Iterator[_Elastic]:
    """Yield the elastic blocks of whichever rows the program has."""
    live, template, base = model.live, model.template, network.base_mva
    buses = tuple(network.buses[i] for i in live.bus.tolist())
    for rows, kinds, unit in (
        ("balance", ("unserved", "surplus"), "MW"),
        ("reactive balance", ("reactive shortage", "reactive surplus"), "Mvar"),
    ):
        # At a penalty load goes unserved, and must-run output is taken away, without any change of the data.
        if rows in template.equalities and not (rows == "balance" and "unserved" in template.variables):
            for kind, sign in zip(kinds, (1.0, -1.0), strict=True):
                yield _Elastic(
                    kind=kind,
                    rows=_rows(template.equalities[rows])[None],
                    where="equality",
                    sign=sign,
                    weight=1.0,
                    unit=unit,
                    to_unit=base,
                    names=buses,
                    most=np.maximum(inputs.load_p[live.bus], 0.0) if kind == "unserved" else np.inf,
                )
    rated = [network.branches[k] for k in live.branch[rated_branches(live)].tolist()]
    for direction in ("forward", "reverse"):
        if f"thermal {direction}" in template.inequalities:
            yield _limit(
                "thermal",
                _rows(template.inequalities[f"thermal {direction}"]),
                tuple(constraint_name("thermal", "", branch, direction) for branch in rated),
                "MW",
                base,
            )
    if "thermal from" in template.cones:
        heads = np.stack([_rows(template.cones[f"thermal {end}"])[::3] for end in ("from", "to")])
        yield _limit("thermal", heads, tuple(rated), "MVA", base, where="cone")
    yield _limit(
        "flow limit",
        _rows(template.inequalities["flow limit"]),
        tuple(
            constraint_name(*key)
            for key in zip(
                flow_limits.kind,
                flow_limits.contingency,
                flow_limits.monitored,
                flow_limits.direction,
                strict=True,
            )
        ),
        "MW",
        base,
    )
    for side, limit in (("upper", network.angle_max), ("lower", network.angle_min)):
        rows_of = _rows(template.inequalities[f"angle {side}"])
        limited = (
            angle_limits(network, live, side)[0]
            if "w" in template.variables
            else np.flatnonzero(np.isfinite(limit[live.branch]))
        )
        names = tuple(constraint_name("angle", "", network.branches[k], side) for k in live.branch[limited].tolist())
        yield _limit("angle", rows_of, names, "deg", 180.0 / np.pi, weight=PER_RADIAN)
    if "w" in template.variables:
        places = _rows(template.variables["w"])
        for side in ("upper", "lower"):
            names = tuple(constraint_name("voltage", "", bus, side) for bus in buses)
            # A small step in w is two in the magnitude near 1 pu.
            yield _limit("voltage", places, names, "pu", 0.5, where=side, weight=PER_VOLTAGE)


def _limit(
    kind: str,
    rows: IntArray,
    names: tuple[str, ...],
    unit: str,
    to_unit: float,
    *,
    where: str = "inequality",
    weight: float = 1.0,
) -> _Elastic:
    return _Elastic(
        kind=kind,
        rows=np.atleast_2d(rows),
        where=where,
        sign=-1.0,
        weight=weight,
        unit=unit,
        to_unit=to_unit,
        names=names,
    )


def _rows(place: slice) -> IntArray:
    return np.arange(place.start, place.stop)


def _elastic_program(program: ConicProgram, model: ConvexModel, blocks: list[_Elastic]) -> ConicProgram:
    """Return the program with its elastic variables, minimising their weighted sum."""
    n, n_elastic = program.n_var, sum(block.rows.shape[1] for block in blocks)
    added: dict[str, list[tuple[IntArray, IntArray, FloatArray]]] = {"equality": [], "inequality": [], "cone": []}
    bound_rows: list[sparse.csr_array] = []
    bound_rhs: list[FloatArray] = []
    lower, upper = program.lower.copy(), program.upper.copy()
    weights, most, position = [], [], 0
    for block in blocks:
        size = block.rows.shape[1]
        columns = np.arange(position, position + size)
        position += size
        weights.append(np.full(size, block.weight))
        most.append(np.broadcast_to(np.asarray(block.most, float), (size,)))
        if block.where in added:
            added[block.where] += [(rows, columns, np.full(size, block.sign)) for rows in block.rows]
            continue
        # A variable bound becomes a row that an elastic variable can widen.
        sign = 1.0 if block.where == "upper" else -1.0
        bound = program.upper if block.where == "upper" else program.lower
        rows, variables = np.arange(size), block.rows[0]
        bound_rows.append(
            sparse.csr_array(
                (
                    np.concatenate([np.full(size, sign), np.full(size, -1.0)]),
                    (np.concatenate([rows, rows]), np.concatenate([variables, n + columns])),
                ),
                shape=(size, n + n_elastic),
            )
        )
        bound_rhs.append(sign * bound[variables])
        (upper if block.where == "upper" else lower)[variables] = np.inf if block.where == "upper" else 0.0

    def widened(name: str, matrix: sparse.csr_array) -> sparse.csr_array:
        parts = added[name]
        if not parts:
            return sparse.csr_array(sparse.hstack([matrix, sparse.csr_array((matrix.shape[0], n_elastic))]))
        rows, columns, values = (np.concatenate([part[i] for part in parts]) for i in range(3))
        extra = sparse.csr_array((values, (rows, columns)), shape=(matrix.shape[0], n_elastic))
        return sparse.csr_array(sparse.hstack([matrix, extra], format="csr"))

    linear = np.zeros(n + n_elastic)
    linear[n:] = np.concatenate(weights)
    for name in _PENALTY_BLOCKS:
        if name in model.template.variables:
            linear[model.template.variables[name]] = _ALLOWED
    # In the units of a cost, so that the tolerances of a cost fit.
    linear *= 1000.0
    inequality = sparse.vstack([widened("inequality", program.inequality), *bound_rows], format="csr")
    return ConicProgram(
        linear=linear,
        quadratic=np.zeros(n + n_elastic),
        constant=0.0,
        equality=widened("equality", program.equality),
        equality_rhs=program.equality_rhs,
        inequality=sparse.csr_array(inequality),
        inequality_rhs=np.concatenate([program.inequality_rhs, *bound_rhs]),
        lower=np.concatenate([lower, np.zeros(n_elastic)]),
        upper=np.concatenate([upper, *most]),
        cone=widened("cone", program.cone),
        cone_rhs=program.cone_rhs,
        cone_sizes=program.cone_sizes,
    )
