"""Constraint rows of the AC dispatch: ratings, angles, voltage bands, reactive ranges, weighted flows."""

from __future__ import annotations

import numpy as np

from lmpgap.dispatch.ac_interval import AcVectors
from lmpgap.dispatch.ac_model import AcProgram
from lmpgap.dispatch.ac_result import AcSolution
from lmpgap.dispatch.limits import FlowLimits
from lmpgap.dispatch.options import DispatchOptions
from lmpgap.dispatch.result import ConstraintRows, OperatingPoint
from lmpgap.dispatch.rows import apparent_power_rows, at_penalty, constraint_rows, flow_limit_rows
from lmpgap.scenario.network import FloatArray, IntervalInputs


def ac_constraints(
    program: AcProgram,
    vectors: AcVectors,
    inputs: IntervalInputs,
    flow_limits: FlowLimits,
    solution: AcSolution,
    point: OperatingPoint,
    options: DispatchOptions,
) -> ConstraintRows:
    """Return all rows with a shadow price or active."""
    at = program.layout.variables
    soft = options.penalties.transmission is not None
    return ConstraintRows.concatenate(
        [
            *_thermal(program, solution, point, options),
            *_angle(program, solution, point, options),
            *_bounds(program, vectors, inputs, solution, options),
            flow_limit_rows(
                flow_limits,
                p_from=point.p_from,
                dp_from=point.dp_from,
                multiplier=np.maximum(solution.row_multiplier[program.layout.rows["flow"]], 0.0),
                excess=solution.x[at["flow_excess"]] if soft else None,
                penalty=options.penalties.transmission,
                tolerances=options.tolerances,
                base_mva=program.network.base_mva,
            ),
        ],
        program.network.n_branch,
    )


def _thermal(
    program: AcProgram, solution: AcSolution, point: OperatingPoint, options: DispatchOptions
) -> list[ConstraintRows]:
    """Ratings at both ends; the direction is that of the active flow at the from end, so that both ends share a key.

    The rows limit S^2 by (rating + excess)^2, so the multiplier per unit of rating is 2 (rating + excess) times theirs.
    """
    network, layout = program.network, program.layout
    base, tolerances = network.base_mva, options.tolerances
    rated = layout.live.branch[layout.rated]
    limit = network.normal_rating[rated]
    excess = solution.x[layout.variables["excess"]] if options.penalties.transmission is not None else None
    eased = limit if excess is None else limit + excess
    multiplier = {
        end: 2.0 * eased * np.maximum(solution.row_multiplier[layout.rows[f"thermal_{end}"]], 0.0)
        for end in ("from", "to")
    }
    soft = at_penalty(multiplier["from"] + multiplier["to"], excess, options.penalties.transmission, tolerances, base)
    return apparent_power_rows(network, rated, point, multiplier, soft, tolerances)


def _angle(
    program: AcProgram, solution: AcSolution, point: OperatingPoint, options: DispatchOptions
) -> list[ConstraintRows]:
    network, layout = program.network, program.layout
    every = layout.live.branch[layout.angle_limited]
    multiplier = solution.row_multiplier[layout.rows["angle"]]
    difference = point.angle[network.from_bus[every]] - point.angle[network.to_bus[every]]
    parts = []
    for side, sign, limit in (("upper", 1.0, network.angle_max[every]), ("lower", -1.0, network.angle_min[every])):
        on = np.flatnonzero(np.isfinite(limit))
        parts.append(
            constraint_rows(
                kind="angle",
                names=network.branches,
                owner=every[on],
                direction=side,
                unit="deg",
                to_unit=180.0 / np.pi,
                limit=limit[on],
                value=difference[on],
                slack=sign * (limit - difference)[on],
                multiplier=_clean(sign * multiplier[on], options, network.base_mva),
                angle_gain=np.full(on.size, sign),
                n_branch=network.n_branch,
                tolerances=options.tolerances,
                base_mva=network.base_mva,
            )
        )
    return parts


def _bounds(
    program: AcProgram,
    vectors: AcVectors,
    inputs: IntervalInputs,
    solution: AcSolution,
    options: DispatchOptions,
) -> list[ConstraintRows]:
    """Voltage bands of the live buses and reactive ranges of their resources in service."""
    network, live, at = program.network, program.layout.live, program.layout.variables
    on = inputs.resource_in_service & (live.bus_position[network.resource_bus] >= 0)
    parts = []
    for kind, block, unit, to_unit, names, owner, shown in (
        ("voltage", "magnitude", "pu", 1.0, network.buses, live.bus, np.ones(live.n_bus, dtype=bool)),
        ("reactive", "q", "Mvar", network.base_mva, network.resources, np.arange(network.n_resource), on),
    ):
        where = at[block]
        value, multiplier = solution.x[where], solution.bound_multiplier[where]
        for side, sign, limit in (("upper", 1.0, vectors.upper[where]), ("lower", -1.0, vectors.lower[where])):
            rows = np.flatnonzero(shown & np.isfinite(limit))
            parts.append(
                constraint_rows(
                    kind=kind,
                    names=names,
                    owner=owner[rows],
                    direction=side,
                    unit=unit,
                    to_unit=to_unit,
                    limit=limit[rows],
                    value=value[rows],
                    slack=sign * (limit - value)[rows],
                    multiplier=_clean(sign * multiplier[rows], options, network.base_mva),
                    angle_gain=None,
                    n_branch=network.n_branch,
                    tolerances=options.tolerances,
                    base_mva=network.base_mva,
                )
            )
    return parts


def _clean(multiplier: FloatArray, options: DispatchOptions, base_mva: float) -> FloatArray:
    """Return multipliers without interior-point dust.

    A barrier leaves a small multiplier on every limit. Per unit of voltage or per radian, dust of a power's size would
    count as a shadow price, so the threshold is that of a power of one per unit everywhere.
    """
    return np.where(multiplier > options.tolerances.shadow_price * base_mva, multiplier, 0.0)
