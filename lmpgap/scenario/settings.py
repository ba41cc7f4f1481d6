"""The settings of a scenario: what `scenario.toml` says, as frozen values with defaults."""

from __future__ import annotations

from dataclasses import dataclass, field
from datetime import date
from typing import Literal

ReferenceKind = Literal["load", "bus", "weights"]
SusceptanceKind = Literal["reactance", "impedance"]
PostedShape = Literal["long", "wide"]
PostedClock = Literal["start", "hour_ending"]
DayCount = Literal["calendar", "business"]
DeadlineStart = Literal["interval", "published"]


@dataclass(frozen=True, kw_only=True)
class Reference:
    """Reference of the price components: load-weighted, one bus, or fixed weights."""

    kind: ReferenceKind = "load"
    bus: str = ""


@dataclass(frozen=True, kw_only=True)
class DcConvention:
    """How a branch becomes a susceptance in the linear formulations.

    Attributes
    ----------
    susceptance
        ``"reactance"``: b = 1/x; ``"impedance"``: b = x/(r^2 + x^2).
    taps
        Divide by the tap ratio and apply phase shifts; ``False`` leaves both out.
    """

    susceptance: SusceptanceKind = "reactance"
    taps: bool = True


@dataclass(frozen=True, kw_only=True)
class Penalties:
    """Prices at which a limit gives way [$/MWh]; ``None`` keeps the limit hard."""

    power_balance: float | None = None
    transmission: float | None = None


@dataclass(frozen=True, kw_only=True)
class PostedFormat:
    """How the operator's own file differs from the contract.

    Attributes
    ----------
    columns
        Own column name by contract column name.
    congestion_sign, shadow_price_sign
        -1 where the operator publishes with the opposite sign.
    shape
        ``"long"``: one row per interval and node; ``"wide"``: one column per node, or one column per hour.
    clock
        ``"start"``: times are the start of the interval; ``"hour_ending"``: its end.
    local
        Times are local clock time of the scenario's zone, without an offset.
    """

    columns: dict[str, str] = field(default_factory=dict)
    congestion_sign: int = 1
    shadow_price_sign: int = 1
    shape: PostedShape = "long"
    clock: PostedClock = "start"
    local: bool = False


@dataclass(frozen=True, kw_only=True)
class Settlement:
    """The user's own rules for disputes; no operator's rule is built in.

    Attributes
    ----------
    materiality
        Amount below which a claim is not worth making [currency].
    deadline_days
        Days in which a dispute may be raised; ``None``: no deadline is known.
    counted
        ``"calendar"`` days, or ``"business"`` days: Monday to Friday without ``holidays``.
    counted_from
        Key ``from``: the day of the ``"interval"``, or the day on which the price was ``"published"``.
    holidays
        Days that are no business days.
    label
        What the rule is called, for the exhibit.
    """

    materiality: float = 0.0
    deadline_days: int | None = None
    counted: DayCount = "calendar"
    counted_from: DeadlineStart = "interval"
    holidays: tuple[date, ...] = ()
    label: str = ""


@dataclass(frozen=True, kw_only=True)
class ScenarioSettings:
    """All of `scenario.toml`.

    Attributes
    ----------
    base_mva
        Power base of every per-unit column [MVA].
    interval_minutes
        Length of one interval [min].
    """

    name: str
    currency: str = "USD"
    time_zone: str = "UTC"
    base_mva: float = 100.0
    interval_minutes: int = 60
    reference: Reference = field(default_factory=Reference)
    dc: DcConvention = field(default_factory=DcConvention)
    penalties: Penalties = field(default_factory=Penalties)
    posted: PostedFormat = field(default_factory=PostedFormat)
    settlement: Settlement = field(default_factory=Settlement)

    @property
    def hours(self) -> float:
        """Length of one interval [h]."""
        return self.interval_minutes / 60.0
