"""What the claim's prices and a reference differ by, part by part, and how sure that is.

Two readings of the loss-component error of posted prices, both on one common reference:

- ``delivery-factor``: energy'_posted (DF_posted - DF_reference). The reference is what the loss component would have
  been with the reference's own delivery factors and the posted energy price; offers do not enter.
- ``loss``: loss'_posted - loss'_reference, the re-solved loss component, which also carries the difference of the
  energy prices: it equals the former plus (energy'_posted - energy'_reference) (DF_reference - 1).

Sources of uncertainty, each a half width in $/MWh (the lower and the upper one where they differ):

rounding
    Each published figure is off by up to half a cent; propagated through the change of reference.
uniqueness
    Where a price is not unique, any price in its interval is as good. Delivery factors belong to the operating point
    and are unique, so the ``delivery-factor`` reading of posted prices has none.
relaxation
    For ``soc``: the difference to the AC price where the run holds it; else, for a relaxation called close, a share of
    the energy price.
solver
    Price residual of the solve.
operating point
    The same figure with the delivery factors of another formulation with losses.

The operating point is one choice for the whole claim: its effect is kept with its sign, as a shift, so that it is not
counted as if it could differ from row to row.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from lmpgap.scenario.network import FloatArray
from lmpgap.settlement.common_reference import CommonPrices, CommonReference, as_published, on_common_reference
from lmpgap.settlement.options import COMPONENTS, FACTOR_COMPONENT, POSTED, SettlementOptions
from lmpgap.settlement.price_set import PriceSet, TextArray

RELAXATION = "soc"
TRUTH_OF_RELAXATION = "ac"

_NO_PART = 1e-9
"""A factor smaller than this is the rounding of a factor of zero [-]; an endless range would make much of it."""


@dataclass(frozen=True, kw_only=True)
class ComponentError:
    """One component on both sides, and what makes the difference uncertain; all (n_interval, n_node) [$/MWh].

    Attributes
    ----------
    posted, reference
        Value on the claim's side and on the reference's; the difference is posted minus reference.
    rounding, relaxation, solver
        Half widths of the difference.
    uniqueness_down, uniqueness_up
        How far the difference may lie below and above because prices are not unique.
    shift : by formulation
        Difference with that formulation's delivery factors, minus the difference as it stands; zero where that
        formulation has no usable solve.
    """

    posted: FloatArray
    reference: FloatArray
    rounding: FloatArray
    uniqueness_down: FloatArray
    uniqueness_up: FloatArray
    relaxation: FloatArray
    solver: FloatArray
    shift: Mapping[str, FloatArray]


@dataclass(frozen=True, kw_only=True)
class PriceErrors:
    """All components of two price sets compared on a common reference.

    Attributes
    ----------
    components
        By name, each of `COMPONENTS`.
    factor_claim, factor_reference, energy_claim : (n_interval, n_node)
        Delivery factors on both sides [-] and the claim's energy price [$/MWh] on the common reference: the evidence
        behind the ``delivery-factor`` reading.
    reason : (n_interval, n_node)
        Why a price comparison cannot be made; empty where it can.
    factor_reason : (n_interval, n_node)
        The same for readings that need components.
    without_alternative
        Number of intervals in which a formulation offered as another operating point has no usable solve.
    """

    components: Mapping[str, ComponentError]
    factor_claim: FloatArray
    factor_reference: FloatArray
    energy_claim: FloatArray
    reason: TextArray
    factor_reason: TextArray
    without_alternative: Mapping[str, int]


def price_errors(
    claim: PriceSet,
    against: PriceSet,
    others: Mapping[str, PriceSet],
    reference: CommonReference,
    options: SettlementOptions,
) -> PriceErrors:
    """Compare the claim's prices with a reference, component by component.

    Parameters
    ----------
    claim, against
        Over the same intervals and nodes.
    others
        Price sets of the run's other formulations: other operating points, and the AC truth of a relaxation.
    reference
        From `lmpgap.settlement.common_reference.common_reference`.
    options
        See `SettlementOptions`.
    """
    if claim.name == POSTED and options.posted_reference == "scenario":
        ours = as_published(claim, options.smallest_energy)
    else:
        ours = on_common_reference(claim, reference, options.smallest_energy)
    theirs = on_common_reference(against, reference, options.smallest_energy)
    moved_others = {
        name: on_common_reference(prices, reference, options.smallest_energy) for name, prices in others.items()
    }
    usable = {name: prices.usable(options.usable_verdicts) for name, prices in others.items()}
    solver = np.broadcast_to((claim.residual + against.residual)[:, None], ours.lmp.shape)
    relaxation = {
        name: sum(
            _relaxation_error(name, prices, common, ours.energy, others, moved_others, options)
            for prices, common in ((claim, ours), (against, theirs))
        )
        for name in COMPONENTS
    }
    alternatives = [
        name
        for name in options.operating_points
        if name in others
        and name not in (claim.name, against.name)
        # Against a relaxation its distance to the AC price is a source of its own already.
        and not (against.name == RELAXATION and name == TRUTH_OF_RELAXATION)
    ]
    shift = {
        name: np.where(usable[name][:, None], np.nan_to_num(moved_others[name].factor - theirs.factor), 0.0)
        for name in alternatives
    }

    def component(
        name: str,
        posted: FloatArray,
        against_it: FloatArray,
        rounding: FloatArray,
        down: FloatArray,
        up: FloatArray,
        shifts: Mapping[str, FloatArray],
    ) -> ComponentError:
        return ComponentError(
            posted=posted,
            reference=against_it,
            rounding=rounding,
            uniqueness_down=down,
            uniqueness_up=up,
            relaxation=np.asarray(relaxation[name]),
            solver=solver,
            shift=shifts,
        )

    none = {name: np.zeros(ours.lmp.shape) for name in alternatives}
    own_loss, other_loss = _loss_range(ours), _loss_range(theirs)
    own_rest, other_rest = _rest_range(ours), _rest_range(theirs)
    factor_gap = ours.factor - theirs.factor
    factor_down, factor_up = _scaled(factor_gap, ours.energy_down, ours.energy_up)
    half_cent = np.full(ours.lmp.shape, claim.rounding + against.rounding)
    components = {
        "energy": component(
            "energy",
            ours.energy,
            theirs.energy,
            ours.energy_rounding + theirs.energy_rounding,
            ours.energy_down + theirs.energy_up,
            ours.energy_up + theirs.energy_down,
            none,
        ),
        "congestion": component(
            "congestion",
            ours.congestion,
            theirs.congestion,
            ours.congestion_rounding + theirs.congestion_rounding,
            own_rest[0] + other_rest[1],
            own_rest[1] + other_rest[0],
            none,
        ),
        "loss": component(
            "loss",
            ours.loss,
            theirs.loss,
            ours.loss_rounding + theirs.loss_rounding,
            own_loss[0] + other_loss[1],
            own_loss[1] + other_loss[0],
            {name: -theirs.energy * gap for name, gap in shift.items()},
        ),
        "reactive": component(
            "reactive",
            ours.reactive,
            theirs.reactive,
            # What is left of a rounded price after its three rounded components.
            4.0 * half_cent,
            own_rest[0] + other_rest[1],
            own_rest[1] + other_rest[0],
            none,
        ),
        "lmp": component(
            "lmp",
            ours.lmp,
            theirs.lmp,
            half_cent,
            ours.lmp_down + theirs.lmp_up,
            ours.lmp_up + theirs.lmp_down,
            none,
        ),
        FACTOR_COMPONENT: component(
            FACTOR_COMPONENT,
            ours.loss,
            ours.energy * (theirs.factor - 1.0),
            np.abs(factor_gap) * ours.energy_rounding
            + np.abs(ours.energy) * (ours.factor_rounding + theirs.factor_rounding),
            factor_down,
            factor_up,
            {name: -ours.energy * gap for name, gap in shift.items()},
        ),
    }
    reason, factor_reason = _reasons(claim, against, ours, theirs, options)
    return PriceErrors(
        components=components,
        factor_claim=ours.factor,
        factor_reference=theirs.factor,
        energy_claim=ours.energy,
        reason=reason,
        factor_reason=factor_reason,
        without_alternative={name: int(np.count_nonzero(~usable[name])) for name in alternatives},
    )


def _loss_range(common: CommonPrices) -> tuple[FloatArray, FloatArray]:
    """Return how far the loss component may lie below and above: (DF - 1) times the energy price's range."""
    return _scaled(common.factor - 1.0, common.energy_down, common.energy_up)


def _rest_range(common: CommonPrices) -> tuple[FloatArray, FloatArray]:
    """Return the same for congestion and reactive parts: the price's range less DF times the energy price's."""
    down, up = _scaled(-common.factor, common.energy_down, common.energy_up)
    return common.lmp_down + down, common.lmp_up + up


def _scaled(factor: FloatArray, down: FloatArray, up: FloatArray) -> tuple[FloatArray, FloatArray]:
    # A price may be bounded by nothing; no part of an endless range is none of it.
    factor = np.where(np.abs(factor) < _NO_PART, 0.0, factor)
    positive, negative = np.maximum(factor, 0.0), np.maximum(-factor, 0.0)
    return _product(positive, down) + _product(negative, up), _product(positive, up) + _product(negative, down)


def _product(weight: FloatArray, width: FloatArray) -> FloatArray:
    """Return weight times width; nothing where the weight is, however wide."""
    return np.where(weight == 0.0, 0.0, weight * np.where(weight == 0.0, 0.0, width))


def _relaxation_error(
    component: str,
    prices: PriceSet,
    common: CommonPrices,
    claim_energy: FloatArray,
    others: Mapping[str, PriceSet],
    moved_others: Mapping[str, CommonPrices],
    options: SettlementOptions,
) -> FloatArray:
    if prices.name != RELAXATION:
        return np.zeros(common.lmp.shape)
    # The share of the energy price bounds what a relaxation called close was seen to be off by.
    fallback = np.where(
        (prices.verdict == "close")[:, None], options.relaxation_price_error * np.abs(common.energy), 0.0
    )
    if TRUTH_OF_RELAXATION not in others:
        return fallback
    truth = moved_others[TRUTH_OF_RELAXATION]
    if component == FACTOR_COMPONENT:
        distance = np.abs(claim_energy * (common.factor - truth.factor))
    else:
        distance = np.abs(getattr(common, component) - getattr(truth, component))
    usable = others[TRUTH_OF_RELAXATION].usable(options.usable_verdicts)[:, None]
    return np.where(usable & np.isfinite(distance), distance, fallback)


def _reasons(
    claim: PriceSet, against: PriceSet, ours: CommonPrices, theirs: CommonPrices, options: SettlementOptions
) -> tuple[TextArray, TextArray]:
    """Return why a row is left out, for prices and for components; the first reason that applies stands."""
    reason = np.full(ours.lmp.shape, "", dtype=object)
    for side, prices in (("claim", claim), ("reference", against)):
        missing = "no posted price" if prices.name == POSTED else f"no {prices.name} price"
        usable = prices.usable(options.usable_verdicts)
        solved = prices.verdict.astype(str) != ""
        unusable = np.array(
            [
                "" if good else (f"{side} {prices.name} is {verdict}" if was_solved else missing)
                for good, was_solved, verdict in zip(usable, solved, prices.verdict, strict=True)
            ],
            dtype=object,
        )[:, None]
        text = np.where(unusable != "", unusable, np.where(np.isnan(prices.lmp), missing, ""))
        reason = np.where(reason == "", text, reason)
    factor_reason = reason.copy()
    for prices, common in ((claim, ours), (against, theirs)):
        lacks = np.isnan(prices.energy + prices.loss + prices.congestion)
        unknown = np.isnan(common.factor)
        text = np.where(
            lacks,
            f"{prices.name} components are missing",
            np.where(unknown, f"{prices.name} delivery factor cannot be told", ""),
        )
        factor_reason = np.where(factor_reason == "", text, factor_reason)
    return reason, factor_reason
