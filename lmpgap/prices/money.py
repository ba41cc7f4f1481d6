"""Where the money goes: load payments minus generator receipts, by price components and by constraints.

At nodal prices the load pays more than generation receives. With p = generation - load at each bus,

    surplus = -lambda' p

has two readings. By components of the price, on any reference, it is the loss surplus ``-loss and energy``, the
congestion and the reactive part, each the same sum over buses. By constraints it is what the limits are worth:
the operating point is scaled along a direction in which stationarity holds, and the surplus appears as multipliers
times limits. The second reading uses other figures than the first, so that their agreement is a check.

Where the formulation has voltages, all of them are scaled together. Every flow is of degree one in the voltage
products, hence

    surplus = sum mu limit + nu' (reactive injection) + sum sigma w

with nu the reactive prices and sigma the net multipliers of the squared voltages w; taps, shifters, shunts, losses
and angle limits have no term of their own. Where there are only angles, these are scaled and

    surplus = sum mu limit + shifters + losses at the mean of both ends' prices + losses in the limits - shunts

With losses, congestion by components is not the sum of shadow price times limit: constraints are relieved by
injections that lose something on their way. Both figures are shown, and the difference.

Marginal losses are about twice average losses, so that a loss surplus is collected even without congestion.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, fields

import numpy as np

from lmpgap.dispatch.result import DispatchResult
from lmpgap.prices.components import PriceSplit, multiplier_to_price
from lmpgap.scenario.network import FloatArray, IntervalInputs, Network

BY_COMPONENTS = "components"
BY_CONSTRAINTS = "constraints"


@dataclass(frozen=True, kw_only=True)
class MoneyByComponents:
    """The surplus by price component, on the reference of the split [$ for the interval]."""

    loss_surplus: float
    congestion: float
    reactive: float

    @property
    def total(self) -> float:
        """Sum of the parts [$]."""
        return self.loss_surplus + self.congestion + self.reactive


@dataclass(frozen=True, kw_only=True)
class MoneyByConstraints:
    """The surplus by what the limits are worth [$ for the interval].

    Attributes
    ----------
    congestion_rent : float
        Shadow price times limit: ratings, contingencies, interfaces and, where angles are scaled, angle limits.
    beyond_limits : float
        Shadow price times what exceeds a limit that gave way at its penalty.
    losses : float
        Losses at the mean price of both ends, where losses stand beside linear flows; and total losses at frozen
        delivery factors.
    losses_in_limits : float
        Shadow price times the part of the losses that counts against a limit.
    phase_shifters : float
    shunts : float
        Shunt power, which nobody pays for, where it does not scale with the operating point.
    reactive : float
        Reactive price times reactive injection; no market settles it.
    voltage : float
        Net multiplier of the voltage band times the squared voltage.
    """

    congestion_rent: float
    beyond_limits: float
    losses: float
    losses_in_limits: float
    phase_shifters: float
    shunts: float
    reactive: float
    voltage: float

    @property
    def total(self) -> float:
        """Sum of the parts [$]."""
        return float(sum(getattr(self, item.name) for item in fields(self)))


@dataclass(frozen=True, kw_only=True)
class MoneyBalance:
    """Money of one interval under one formulation [$].

    Attributes
    ----------
    load_payments : float
        What load pays at its nodes, served bids and power taken off at the balance penalty included.
    generator_receipts : float
        What generation is paid at its nodes.
    by_components : MoneyByComponents
    by_constraints : MoneyByConstraints
    unserved_load : float
        Value of load that was not served, at its node's price; it is in no payment.
    """

    load_payments: float
    generator_receipts: float
    by_components: MoneyByComponents
    by_constraints: MoneyByConstraints
    unserved_load: float

    @property
    def surplus(self) -> float:
        """Load payments minus generator receipts [$]."""
        return self.load_payments - self.generator_receipts

    @property
    def remainder_by_components(self) -> float:
        """What the components leave unexplained [$]."""
        return self.surplus - self.by_components.total

    @property
    def remainder_by_constraints(self) -> float:
        """What the constraints leave unexplained [$]: the solver's residuals in money."""
        return self.surplus - self.by_constraints.total

    @property
    def congestion_difference(self) -> float:
        """Congestion by components minus shadow price times limit [$]; zero without losses, shifters and shunts."""
        return self.by_components.congestion - self.by_constraints.congestion_rent

    @property
    def relative_remainder(self) -> float:
        """Larger of both remainders relative to the load payments [-]."""
        largest = max(abs(self.remainder_by_components), abs(self.remainder_by_constraints))
        return largest / max(abs(self.load_payments), abs(self.generator_receipts), 1e-9)

    def rows(self) -> Iterator[tuple[str, str, float]]:
        """Yield (item, basis, amount [$]) for the money table; both splits add up to the surplus."""
        yield "load payments", "total", self.load_payments
        yield "generator receipts", "total", self.generator_receipts
        yield "surplus", "total", self.surplus
        yield "unserved load at its price", "total", self.unserved_load
        yield "congestion by components less congestion rent", "total", self.congestion_difference
        for basis, parts, remainder in (
            (BY_COMPONENTS, self.by_components, self.remainder_by_components),
            (BY_CONSTRAINTS, self.by_constraints, self.remainder_by_constraints),
        ):
            for item in fields(parts):
                yield item.name.replace("_", " "), basis, float(getattr(parts, item.name))
            yield "remainder", basis, remainder


def money_balance(
    network: Network, inputs: IntervalInputs, result: DispatchResult, split: PriceSplit, *, hours: float = 1.0
) -> MoneyBalance:
    """Return the money balance of one interval.

    Parameters
    ----------
    split
        Prices of the result; the amounts by components are on its reference.
    hours
        Length of the interval [h].
    """
    base, live = network.base_mva, np.isfinite(split.lmp)

    def money(price: FloatArray, power: FloatArray) -> float:
        # $/MWh times pu of base_mva
        return float(hours * base * np.sum((price * power)[live]))

    generation = np.asarray(np.bincount(network.resource_bus, weights=result.p, minlength=network.n_bus), dtype=float)
    bids = np.asarray(np.bincount(inputs.bids.bus, weights=result.bid_served, minlength=network.n_bus), dtype=float)
    load = inputs.load_p - result.unserved + result.surplus + bids
    injection = generation - load
    return MoneyBalance(
        load_payments=money(split.lmp, load),
        generator_receipts=money(split.lmp, generation),
        by_components=MoneyByComponents(
            loss_surplus=-money(split.energy + split.loss, injection),
            congestion=-money(split.congestion, injection),
            reactive=-money(split.reactive, injection),
        ),
        by_constraints=_by_constraints(network, result, split, injection, hours),
        unserved_load=money(split.lmp, result.unserved),
    )


def _by_constraints(
    network: Network, result: DispatchResult, split: PriceSplit, injection: FloatArray, hours: float
) -> MoneyByConstraints:
    point, rows, base = result.point, result.constraints, network.base_mva
    live = np.isfinite(split.lmp)
    price = np.where(live, split.lmp, 0.0)
    kind = np.array(rows.kind, dtype=object)
    turns = np.diff(rows.angle_gain.indptr) > 0
    # A lower limit is stored as the number it is; as a limit from above it stands on minus the quantity.
    sign = np.where(np.array(rows.direction, dtype=object) == "lower", -1.0, 1.0)
    # $/h: multiplier per internal unit times internal unit
    worth = rows.multiplier * sign * rows.limit
    over = rows.multiplier * np.maximum(sign * (rows.value - rows.limit), 0.0)
    over = np.where(rows.at_penalty, over, 0.0)
    w = np.where(live, point.w, 0.0)
    shunt = np.where(live, network.shunt_g, 0.0) * w
    has_voltages = bool(np.any(point.dq_from) or np.any(point.dq_to))
    if has_voltages:
        flows = turns & (kind != "angle")
        network_q = np.bincount(network.from_bus, weights=point.q_from, minlength=network.n_bus)
        network_q += np.bincount(network.to_bus, weights=point.q_to, minlength=network.n_bus)
        reactive_price = np.where(live, split.reactive_price, 0.0)
        sigma = np.where(live, multiplier_to_price(result.multipliers.squared_voltage, base), 0.0)
        return MoneyByConstraints(
            congestion_rent=hours * float(np.sum(worth[flows])),
            beyond_limits=hours * float(np.sum(over[flows])),
            losses=0.0,
            losses_in_limits=0.0,
            phase_shifters=0.0,
            shunts=0.0,
            reactive=hours * base * float(np.sum(reactive_price * (network_q - network.shunt_b * w))),
            voltage=hours * base * float(np.sum(sigma * w)),
        )

    # Flows b d at the angle d across the series element; the rest of the bus angle is the phase shift in force.
    stiffness = point.dp_from - point.dp_to
    across = np.divide(point.p_from - point.p_to, stiffness, out=np.zeros(network.n_branch), where=stiffness != 0.0)
    angle = np.where(live, point.angle, 0.0)
    shift = np.where(stiffness != 0.0, angle[network.from_bus] - angle[network.to_bus] - across, 0.0)
    price_of_flows, losses = price, 0.0
    p_from, p_to = point.p_from, point.p_to
    if result.frozen is not None:
        # lambda = lam DF + alpha: the flows are priced at alpha and carry no loss of their own; everything else
        # was bought through the factors.
        arriving = multiplier_to_price(np.asarray(result.frozen.energy_multiplier), base)
        arriving = np.where(live, arriving * result.frozen.delivery_factor, 0.0)
        price_of_flows = price - arriving
        losses = -float(np.sum(arriving * (injection - shunt)))
        p_from, p_to = 0.5 * (p_from - p_to), 0.5 * (p_to - p_from)
    price_from, price_to = price_of_flows[network.from_bus], price_of_flows[network.to_bus]
    turned = price_from * point.dp_from + price_to * point.dp_to
    # What the flows are beyond their slope times angle is minus the loss, half at each end.
    curved = price_from * (p_from - point.dp_from * across) + price_to * (p_to - point.dp_to * across)
    losses -= float(np.sum(curved))
    gain = rows.angle_gain
    of_value = np.where(kind == "angle", rows.value, gain @ across)
    shifted = np.where(kind == "angle", 0.0, gain @ shift)
    return MoneyByConstraints(
        congestion_rent=hours * float(np.sum(worth)),
        beyond_limits=hours * float(np.sum(over)),
        losses=hours * base * losses,
        losses_in_limits=hours * float(np.sum(rows.multiplier * (of_value - rows.value))),
        phase_shifters=hours * (base * float(np.sum(turned * shift)) + float(np.sum(rows.multiplier * shifted))),
        shunts=-hours * base * float(np.sum(price * shunt)),
        reactive=0.0,
        voltage=0.0,
    )
