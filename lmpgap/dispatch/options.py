"""What a formulation is built with besides the network: conventions, penalties, tolerances."""

from __future__ import annotations

from dataclasses import dataclass, field

from lmpgap.scenario.network import FloatArray
from lmpgap.scenario.settings import DcConvention, Penalties
from lmpgap.tolerances import DEFAULT_TOLERANCES, Tolerances


@dataclass(frozen=True, kw_only=True)
class DispatchOptions:
    """What a formulation needs to know besides the network and the interval.

    Attributes
    ----------
    dc
        Susceptance convention of the linear formulations.
    penalties
        Prices at which limits give way [$/MWh].
    voltage_profile : (n_bus,) or None
        Voltage magnitudes in the loss coefficients of ``dc-loss`` [pu]; ``None`` is 1 pu everywhere.
    keep_stationarity
        Keep the active gradients for the uniqueness test.
    """

    dc: DcConvention = field(default_factory=DcConvention)
    penalties: Penalties = field(default_factory=Penalties)
    voltage_profile: FloatArray | None = None
    keep_stationarity: bool = False
    tolerances: Tolerances = DEFAULT_TOLERANCES
