"""What every formulation offers, what it is built from, and the registry of names."""

from __future__ import annotations

from collections.abc import Callable
from typing import Protocol, runtime_checkable

from lmpgap.dispatch.limits import FlowLimits
from lmpgap.dispatch.names import FORMULATIONS
from lmpgap.dispatch.options import DispatchOptions
from lmpgap.dispatch.result import DispatchResult
from lmpgap.errors import LmpgapError
from lmpgap.scenario.network import BoolArray, IntervalInputs, Network


class Formulation(Protocol):
    """A dispatch problem built once per topology and solved interval by interval."""

    name: str

    def solve(
        self, inputs: IntervalInputs, flow_limits: FlowLimits, start: DispatchResult | None = None
    ) -> DispatchResult:
        """Solve one interval.

        Parameters
        ----------
        inputs
            The interval; its ``branch_in_service`` must be the topology the formulation was built for.
        flow_limits
            Limits on weighted sums of from-end active flows (contingencies, interfaces).
        start
            A solution of the same interval to start a nonlinear solve from; convex formulations ignore it,
            so that a result never depends on what was solved before.

        Returns
        -------
        DispatchResult
            With ``status`` telling whether there is a solution; an infeasible interval is a result, not an
            exception.
        """
        ...


@runtime_checkable
class DraftedFormulation(Formulation, Protocol):
    """A formulation whose solve has a quick first half: ``solve`` is ``finish`` of ``draft``.

    While limits are still being looked for the draft is good enough, and the second half is done once at the end.
    """

    def draft(self, inputs: IntervalInputs, flow_limits: FlowLimits) -> DispatchResult:
        """Return a first solution, whose flows are nearly those of the last."""
        ...

    def finish(self, draft: DispatchResult, inputs: IntervalInputs, flow_limits: FlowLimits) -> DispatchResult:
        """Return the solution; the draft itself where nothing is left to do. Its seconds include those of the draft."""
        ...


def build_formulation(
    name: str, network: Network, branch_in_service: BoolArray, options: DispatchOptions
) -> Formulation:
    """Build a formulation for one topology; solver packages are imported here and not before.

    Raises
    ------
    LmpgapError
        For a name that is not one of `FORMULATIONS`.
    """
    if name not in _BUILDERS:
        raise LmpgapError(f"there is no formulation {name!r}; choose from {', '.join(FORMULATIONS)}")
    return _BUILDERS[name](network, branch_in_service, options)


def _build_dc(network: Network, branch_in_service: BoolArray, options: DispatchOptions) -> Formulation:
    from lmpgap.dispatch.dc import DcDispatch

    return DcDispatch(network, branch_in_service, options)


def _build_dc_loss(network: Network, branch_in_service: BoolArray, options: DispatchOptions) -> Formulation:
    from lmpgap.dispatch.dc_loss import DcLossDispatch

    return DcLossDispatch(network, branch_in_service, options)


def _build_soc(network: Network, branch_in_service: BoolArray, options: DispatchOptions) -> Formulation:
    from lmpgap.dispatch.soc import SocDispatch

    return SocDispatch(network, branch_in_service, options)


def _build_ac(network: Network, branch_in_service: BoolArray, options: DispatchOptions) -> Formulation:
    from lmpgap.dispatch.ac import AcDispatch

    return AcDispatch(network, branch_in_service, options)


_BUILDERS: dict[str, Callable[[Network, BoolArray, DispatchOptions], Formulation]] = {
    "dc": _build_dc,
    "dc-loss": _build_dc_loss,
    "soc": _build_soc,
    "ac": _build_ac,
}
