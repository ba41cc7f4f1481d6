"""How a settlement claim is computed: every choice in one place, recorded verbatim in the exhibit."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict, dataclass, fields
from typing import Any, Literal

from lmpgap.errors import DataError, Fault
from lmpgap.prices.certificate import USABLE_VERDICTS
from lmpgap.tolerances import DEFAULT_TOLERANCES

Basis = Literal["delivery-factor", "loss"]
Combination = Literal["worst-case", "root-sum-square"]
PostedReference = Literal["auto", "scenario", "unknown"]

POSTED = "posted"
"""Name of the operator's price set, where formulations have theirs."""

PRICE_COMPONENTS = ("energy", "congestion", "loss", "reactive", "lmp")
"""Components of the re-solved prices; the first four add up to ``lmp``."""

FACTOR_COMPONENT = "delivery-factor"
"""The part of the loss-component error that comes from delivery factors alone: both sides are valued at the
claim's own energy price, so that offers do not enter. Not a summand of ``lmp``."""

COMPONENTS = (*PRICE_COMPONENTS, FACTOR_COMPONENT)


@dataclass(frozen=True, kw_only=True)
class SettlementOptions:
    """Choices behind a claim.

    Attributes
    ----------
    basis
        What is claimed: ``"delivery-factor"``, posted energy price times the difference of delivery factors, needs no
        offers; ``"loss"``, the difference to the re-solved loss component, also carries the difference of energy
        prices.
    combine
        How the sources of uncertainty of one row become its interval: ``"worst-case"`` adds the half widths,
        ``"root-sum-square"`` takes the root of the sum of their squares (independent sources, no guarantee).
    posted_reference
        On which reference the posted components stand. ``"scenario"``: on that of the scenario, so they are taken as
        published; ``"unknown"``: both sides are moved to the scenario's reference first, by which an error of the
        delivery factors that the whole reference shares goes into the energy part; ``"auto"``: the former where the
        posted delivery factors of the median node say so (`lmpgap.settlement.posted_reference`), else the latter.
    materiality
        An amount of this size or below is not material, whatever its interval [$].
    rounding
        Half width of the rounding of each posted figure [$/MWh].
    operating_points
        Formulations with losses whose operating points may stand in for one another; the spread of their delivery
        factors widens the interval. Those that the run does not hold are left out.
    usable_verdicts
        Verdicts of a solve whose prices may back a claim; rows on any other solve are left out and counted.
    minimum_coverage
        Share of the scenario's reference weights that must fall on nodes priced on both sides [-]. Below it the common
        reference is the plain mean of those nodes.
    relaxation_price_error
        Price error granted to a relaxation called ``close``, relative to the energy price [-], where the AC price
        itself is not in the run. The largest error seen among accepted cases was 3.9 %.
    smallest_energy
        Delivery factors are not read from prices whose energy part is smaller than this [$/MWh]: factor errors are the
        rounding divided by it.
    """

    basis: Basis = "delivery-factor"
    combine: Combination = "worst-case"
    posted_reference: PostedReference = "auto"
    materiality: float = 0.0
    rounding: float = DEFAULT_TOLERANCES.posted_rounding
    operating_points: tuple[str, ...] = ("ac", "dc-loss")
    usable_verdicts: tuple[str, ...] = USABLE_VERDICTS
    minimum_coverage: float = 0.5
    relaxation_price_error: float = 0.04
    smallest_energy: float = 1.0

    def as_dict(self) -> dict[str, Any]:
        """Return the choices by name, with lists for tuples, ready for JSON."""
        return {key: list(value) if isinstance(value, tuple) else value for key, value in asdict(self).items()}

    @staticmethod
    def from_dict(values: Mapping[str, Any]) -> SettlementOptions:
        """Return the choices that `as_dict` recorded.

        Raises
        ------
        DataError
            For a name or a value that is not one of the choices.
        """
        known = {field.name: field for field in fields(SettlementOptions)}
        faults = [
            Fault(table="options", column=name, message="unknown", allowed=", ".join(known))
            for name in values
            if name not in known
        ]
        faults += [Fault(table="options", column=name, message="missing") for name in known if name not in values]
        for name, value in values.items():
            default = getattr(SettlementOptions, name, None) if name in known else None
            if isinstance(default, tuple):
                good = isinstance(value, list) and all(isinstance(item, str) for item in value)
            elif isinstance(default, float):
                good = isinstance(value, (int, float)) and not isinstance(value, bool) and 0 <= value < 1e15
            else:
                choices = {
                    "basis": ("delivery-factor", "loss"),
                    "combine": ("worst-case", "root-sum-square"),
                    "posted_reference": ("auto", "scenario", "unknown"),
                }
                good = value in choices.get(name, (value,))
            if name in known and not good:
                faults.append(Fault(table="options", column=name, message="not usable", value=str(value)))
        if faults:
            raise DataError("the settlement options cannot be used", faults)
        made: dict[str, Any] = {
            key: tuple(value) if isinstance(value, list) else value for key, value in values.items()
        }
        return SettlementOptions(**made)
