"""The certificate of a solve: how good the solver's answer is, and whether its prices may be used.

Nothing here relies on what a solver says about itself except that it has an answer. Residuals are those of the
matrices that were solved; the price residual and the comparison of marginal costs with prices are checks of their
own, each of which sees faults that the other does not.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from lmpgap.dispatch.ac_check import AcCheck
from lmpgap.dispatch.result import DispatchResult, SolveStatus
from lmpgap.prices.components import PriceSplit
from lmpgap.prices.marginal_cost import marginal_costs
from lmpgap.prices.trust import relaxation_verdict
from lmpgap.scenario.network import IntervalInputs, Network
from lmpgap.tolerances import DEFAULT_TOLERANCES, Tolerances

CERTIFIED = "certified"
"""Every residual is within its tolerance; the price is one of the model that was solved."""
UNCERTIFIED = "uncertified"
"""No price of this solve may be used."""
USABLE_VERDICTS = ("certified", "exact", "close")
"""Verdicts whose prices may be used; every other row is marked wherever it appears."""


@dataclass(frozen=True, kw_only=True)
class Certificate:
    """Figures and verdict of one solve; ``nan`` where a figure does not apply.

    Attributes
    ----------
    status : str
        How the solver ended.
    objective : float
        [$/h]
    losses_mw : float
        Generation minus everything consumed at buses [MW].
    solver : str
    solver_seconds, total_seconds : float
        [s]
    primal_residual : float
        Largest violation of an equation or limit [MW].
    dual_residual : float
        Largest violation of stationarity [$/MWh].
    duality_gap : float
        Or the sum of complementarity products of a nonlinear solve [$/h].
    price_residual : float
        Largest difference between the solver's multiplier and the price rebuilt from its parts [$/MWh].
    marginal_cost_error : float
        Largest difference between marginal cost and price at a unit or bid inside a segment [$/MWh].
    fictitious_loss_mw : float
        Loss beyond the physical one [MW].
    cone_slack : float
        Largest slack of a relaxed cone [pu]; ``nan`` where nothing is relaxed.
    loop_angle_deg : float
        Largest angle that the loops of a relaxation leave open at a branch [deg]; ``nan`` where nothing is relaxed.
    cost_gap : float
        (AC cost - cost) / |AC cost| [-]; ``nan`` without an AC dispatch of the same interval.
    ac_mismatch_mw : float
        Power that the dispatch leaves missing in AC [MW]; ``nan`` where it was not checked.
    verdict : str
        ``"certified"`` or ``"uncertified"``; for a relaxation that is certified as such ``"exact"``, ``"close"``,
        ``"not a price"`` or ``"not verified"``.
    reasons : tuple of str
        What stands behind the verdict, in words.
    """

    status: str
    objective: float
    losses_mw: float
    solver: str
    solver_seconds: float
    total_seconds: float
    primal_residual: float
    dual_residual: float
    duality_gap: float
    price_residual: float
    marginal_cost_error: float
    fictitious_loss_mw: float
    cone_slack: float
    loop_angle_deg: float
    cost_gap: float
    ac_mismatch_mw: float
    verdict: str
    reasons: tuple[str, ...]

    @property
    def usable(self) -> bool:
        """Whether the prices of this solve may be used."""
        return self.verdict in USABLE_VERDICTS


def certify(
    network: Network,
    inputs: IntervalInputs,
    result: DispatchResult,
    split: PriceSplit | None,
    *,
    ac: DispatchResult | None = None,
    check: AcCheck | None = None,
    tolerances: Tolerances = DEFAULT_TOLERANCES,
) -> Certificate:
    """Return the certificate of a solve.

    Parameters
    ----------
    result
        Any formulation's result, with or without a solution.
    split
        Its prices; ``None`` without a solution.
    ac
        The AC dispatch of the same interval, to measure the cost gap with; it may be ``result`` itself.
    check
        AC power flow at the dispatch of a relaxation.
    tolerances
        Every threshold.
    """
    base = network.base_mva
    faults = []
    if not result.status.has_solution or split is None:
        faults.append(f"no solution: {result.message or result.status.value}")
        price_residual = marginal_error = losses = float("nan")
    else:
        price_residual = split.price_residual
        marginal_error = marginal_costs(network, inputs, result, split.lmp, tolerances).largest_error
        losses = losses_mw(network, inputs, result)
        faults += _residual_faults(network, inputs, result, split, marginal_error, tolerances)
    cost_gap = _cost_gap(result, ac)
    loop_angle_deg = result.loop_angle_deg if result.relaxed else float("nan")

    if faults:
        verdict, reasons = UNCERTIFIED, tuple(faults)
    elif result.relaxed:
        verdict, reasons = relaxation_verdict(
            check=check, cost_gap=cost_gap, loop_angle_deg=loop_angle_deg, tolerances=tolerances
        )
    else:
        verdict, reasons = CERTIFIED, ()
    if not faults and result.status is SolveStatus.INACCURATE:
        reasons = (*reasons, "the solver stopped early; its residuals are within tolerance all the same")
    return Certificate(
        status=result.status.value,
        objective=result.objective,
        losses_mw=losses,
        solver=result.solver,
        solver_seconds=result.solver_seconds,
        total_seconds=result.total_seconds,
        primal_residual=result.residuals.primal * base,
        dual_residual=result.residuals.dual / base,
        duality_gap=result.residuals.gap,
        price_residual=price_residual,
        marginal_cost_error=marginal_error,
        fictitious_loss_mw=result.fictitious_loss * base,
        cone_slack=result.cone_slack if result.relaxed else float("nan"),
        loop_angle_deg=loop_angle_deg,
        cost_gap=float("nan") if cost_gap is None else cost_gap,
        ac_mismatch_mw=float("nan") if check is None else check.mismatch_mw,
        verdict=verdict,
        reasons=reasons,
    )


def losses_mw(network: Network, inputs: IntervalInputs, result: DispatchResult) -> float:
    """Return generation minus load, served bids, surplus and shunts [MW]: what the branches lose."""
    live = np.isfinite(result.multipliers.active)
    at_buses = inputs.load_p - result.unserved + result.surplus + network.shunt_g * result.point.w
    return float(network.base_mva * (np.sum(result.p) - np.sum(result.bid_served) - np.sum(at_buses[live])))


def _residual_faults(
    network: Network,
    inputs: IntervalInputs,
    result: DispatchResult,
    split: PriceSplit,
    marginal_error: float,
    tolerances: Tolerances,
) -> list[str]:
    """Return one sentence per figure that is out of tolerance; ``nan`` is out of any tolerance."""
    base = network.base_mva
    # A hundredth of a cent on each of a hundred MW: below that a gap says how small the market is.
    gap = 0.0 if abs(result.residuals.gap) <= tolerances.duality_gap_floor else result.residuals.gap
    figures = [
        ("violation of a balance or limit", result.residuals.primal * base, tolerances.primal_residual_mw, "MW"),
        ("violation of stationarity", result.residuals.dual / base, tolerances.dual_residual, "$/MWh"),
        ("relative duality gap", gap / _turnover(network, inputs, result, split), tolerances.duality_gap_relative, ""),
        ("price residual", split.price_residual, tolerances.price_residual, "$/MWh"),
        ("marginal cost against price inside a segment", marginal_error, tolerances.dual_residual, "$/MWh"),
    ]
    if not result.relaxed and result.frozen is None:
        # A relaxation carries fictitious loss by design, its verdict is made from the AC check; losses at given
        # factors are what the factors make of them. A linearised loss below the physical one burns nothing.
        burnt = max(result.fictitious_loss * base, 0.0)
        figures.append(("loss beyond the physical one", burnt, tolerances.fictitious_loss_mw, "MW"))
    return [
        f"{name}: {value:.3g} {unit}".rstrip() + f", accepted up to {accepted:g}"
        for name, value, accepted, unit in figures
        if not abs(value) <= accepted
    ]


def _turnover(network: Network, inputs: IntervalInputs, result: DispatchResult, split: PriceSplit) -> float:
    """Return the money that a duality gap is measured against [$/h].

    The cost alone will not do: it is zero in an hour of free output or without load, it cancels where some of it is
    negative, and where limits are worth many times the cost a gap is a rounding of their worth. So it is also what
    load pays at its prices, and never less than one dollar per MWh of the capacity in service.
    """
    payments = float(np.nansum(np.abs(split.lmp) * np.abs(inputs.load_p))) * network.base_mva
    capacity = float(np.sum(np.abs(inputs.p_max))) * network.base_mva
    return max(abs(result.objective), float(np.sum(np.abs(result.resource_cost))), payments, capacity, 1.0)


def _cost_gap(result: DispatchResult, ac: DispatchResult | None) -> float | None:
    """Return how much more the AC dispatch costs, relative to its cost."""
    if ac is None or not ac.status.has_solution or not result.status.has_solution:
        return None
    # Costs can be zero or negative; relative to one dollar an hour is as good as absolute there.
    return (ac.objective - result.objective) / max(abs(ac.objective), 1.0)
