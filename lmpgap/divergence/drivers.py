"""Why two price sets differ: an exact account by named drivers, nothing left over.

With two sets a and b, D = b - a, and bars for the mean of both, the difference of every bus price is

    D lmp  = D energy + D loss + sum over constraints of D congestion + D reactive
    D loss = mean(DF - 1) D energy + mean(energy) D DF
    D congestion_k = - mean(SF_k) D mu_k - mean(mu_k) D SF_k

since the loss component is energy x (DF - 1) and a constraint's congestion is minus its shadow price mu times the
shift factor SF. Both products are split by the midpoint, so the parts add up without a remainder and do not depend
on which set is called base. A constraint that binds on one side only has a shift factor on that side only: its whole
congestion is the driver.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from lmpgap.divergence.differences import constant
from lmpgap.divergence.price_set import KEY_COLUMNS, ContributionBlock, PriceSet, names_of
from lmpgap.scenario.network import BoolArray, FloatArray, IntArray
from lmpgap.tolerances import DEFAULT_TOLERANCES, Tolerances

ENERGY_PRICE = "energy price"
DELIVERY_FACTOR = "delivery factor"
BINDS_ONLY_IN_BASE = "binds only in base"
BINDS_ONLY_IN_AGAINST = "binds only in against"
SHADOW_PRICE = "shadow price"
SHIFT_FACTOR = "shift factor"
REACTIVE = "reactive"
CONGESTION = "congestion"
UNSPLIT = "unsplit"

DRIVERS = (
    ENERGY_PRICE,
    DELIVERY_FACTOR,
    BINDS_ONLY_IN_BASE,
    BINDS_ONLY_IN_AGAINST,
    SHADOW_PRICE,
    SHIFT_FACTOR,
    REACTIVE,
    CONGESTION,
    UNSPLIT,
)
"""``congestion`` stands for congestion that at least one side does not give by constraint with its shadow price (posted
prices), ``unsplit`` for a price that its own components do not add up to, or that has none."""

DRIVER_COLUMNS = ("interval_start", "base", "against", "bus", "driver", "constraint", "amount")


@dataclass(frozen=True, kw_only=True)
class DriverRows:
    """Drivers as arrays, one entry per row.

    Attributes
    ----------
    interval, bus, driver, constraint : (n_row,)
        Positions in the price sets, in `DRIVERS` and in ``constraints`` (0 is "none").
    amount : (n_row,)
        [$/MWh]
    constraints : (n_constraint,)
        Names; the first is empty.
    """

    interval: IntArray
    bus: IntArray
    driver: IntArray
    constraint: IntArray
    amount: FloatArray
    constraints: tuple[str, ...]


def drivers(base: PriceSet, against: PriceSet, tolerances: Tolerances = DEFAULT_TOLERANCES) -> pd.DataFrame:
    """Return the drivers of ``against - base`` for every interval and bus that both price.

    Parameters
    ----------
    base, against
        On the same intervals and buses, and with their components on the same reference.

    Returns
    -------
    DataFrame
        Columns of `DRIVER_COLUMNS`, in order of intervals; ``amount`` [$/MWh] adds up to the difference for each
        interval and bus to 1e-6. Amounts below ``tolerances.smallest_driver`` are left out.

    Notes
    -----
    Where an energy price is nearer to zero than ``tolerances.smallest_energy_price`` the loss component does not
    determine a delivery factor; its change is then given whole to the delivery factor.
    """
    rows = driver_rows(base, against, tolerances)
    n_row = rows.amount.size
    return pd.DataFrame(
        {
            "interval_start": base.intervals.take(rows.interval),
            "base": constant(base.name, n_row),
            "against": constant(against.name, n_row),
            "bus": pd.Series(base.buses.take(rows.bus)),
            "driver": pd.Series(pd.Index(DRIVERS, dtype="str").take(rows.driver)),
            "constraint": pd.Series(pd.Index(rows.constraints, dtype="str").take(rows.constraint)),
            "amount": rows.amount,
        }
    )


def driver_rows(base: PriceSet, against: PriceSet, tolerances: Tolerances = DEFAULT_TOLERANCES) -> DriverRows:
    """Return the drivers as arrays; see `drivers`."""
    gather = _Gather(np.isfinite(against.lmp - base.lmp), tolerances.smallest_driver)
    split = _is_split(base) & _is_split(against)
    every = np.arange(base.n_interval)

    energy, factor = _energy_and_loss(base, against, tolerances)
    gather.add(ENERGY_PRICE, every, np.where(split, energy, 0.0))
    gather.add(DELIVERY_FACTOR, every, np.where(split, factor, 0.0))
    difference = against.lmp - base.lmp
    components = sum(
        getattr(against, name) - getattr(base, name) for name in ("energy", "congestion", "loss", "reactive")
    )
    gather.add(UNSPLIT, every, np.where(split, difference - components, difference))

    told = split & _is_told_by_constraint(base, tolerances) & _is_told_by_constraint(against, tolerances)
    gather.add(CONGESTION, every, np.where(split & ~told, against.congestion - base.congestion, 0.0))
    keys = _add_congestion(gather, base, against, told, tolerances.shadow_price)
    labels = _add_reactive(gather, base, against, split, offset=1 + len(keys))
    names = ("", *names_of(keys), *names_of(labels))
    return gather.rows(names)


def _is_split(prices: PriceSet) -> BoolArray:
    return np.asarray(np.isfinite(prices.energy + prices.congestion + prices.loss + prices.reactive))


def _is_told_by_constraint(prices: PriceSet, tolerances: Tolerances) -> BoolArray:
    """Return where the constraints of a set account for its congestion, (n_interval, 1).

    Posted congestion without constraints, held against a run that knows its own, would seem to be explained by limits
    that bind only there.
    """
    rest = np.abs(prices.congestion - prices.congestion_parts.summed(prices.n_interval))
    return np.asarray(np.nanmax(rest, axis=1, keepdims=True, initial=0.0) <= tolerances.explained_congestion)


def _energy_and_loss(base: PriceSet, against: PriceSet, tolerances: Tolerances) -> tuple[FloatArray, FloatArray]:
    """Return what the energy price and the delivery factor add, each (n_interval, n_bus)."""
    d_energy, d_loss = against.energy - base.energy, against.loss - base.loss
    smallest = np.minimum(np.abs(base.energy), np.abs(against.energy))
    with np.errstate(divide="ignore", invalid="ignore"):
        mean_loss_rate = 0.5 * (base.loss / base.energy + against.loss / against.energy)
    mean_loss_rate = np.where(smallest >= tolerances.smallest_energy_price, mean_loss_rate, 0.0)
    through_energy = mean_loss_rate * d_energy
    return d_energy + through_energy, d_loss - through_energy


def _add_congestion(gather: _Gather, base: PriceSet, against: PriceSet, split: BoolArray, dust: float) -> pd.MultiIndex:
    """Add the drivers of the congestion component; return the constraint keys.

    A constraint whose shadow price is known to be no more than ``dust`` does not bind.
    """
    one, other = base.congestion_parts, against.congestion_parts
    rest = (against.congestion - other.summed(base.n_interval)) - (base.congestion - one.summed(base.n_interval))
    gather.add(CONGESTION, np.arange(base.n_interval), np.where(split, rest, 0.0))
    keys, pair, place_one, place_other = _union(one, other)
    interval, constraint = pair // max(len(keys), 1), 1 + pair % max(len(keys), 1)
    n_bus = base.n_bus

    def spread(block: ContributionBlock, place: IntArray) -> tuple[FloatArray, FloatArray, BoolArray]:
        amount, shadow = np.zeros((pair.size, n_bus)), np.full(pair.size, np.nan)
        amount[place], shadow[place] = block.amount, block.shadow_price
        present = np.zeros(pair.size, dtype=bool)
        present[place] = ~(block.shadow_price <= dust)
        return amount, shadow, present

    amount_one, mu_one, in_one = spread(one, place_one)
    amount_other, mu_other, in_other = spread(other, place_other)
    change = np.where(split[interval], amount_other - amount_one, 0.0)
    gather.add(BINDS_ONLY_IN_BASE, interval, change, constraint, in_one & ~in_other)
    gather.add(BINDS_ONLY_IN_AGAINST, interval, change, constraint, in_other & ~in_one)
    gather.add(SHADOW_PRICE, interval, change, constraint, ~in_one & ~in_other)
    both = in_one & in_other
    known = both & np.isfinite(mu_one) & np.isfinite(mu_other)
    gather.add(CONGESTION, interval, change, constraint, both & ~known)
    rows = np.flatnonzero(known)
    mu_one, mu_other = mu_one[rows, None], mu_other[rows, None]
    mean_shift_factor = -0.5 * (amount_one[rows] / mu_one + amount_other[rows] / mu_other)
    by_shadow_price = np.where(split[interval[rows]], -mean_shift_factor * (mu_other - mu_one), 0.0)
    gather.add(SHADOW_PRICE, interval[rows], by_shadow_price, constraint[rows])
    gather.add(SHIFT_FACTOR, interval[rows], change[rows] - by_shadow_price, constraint[rows])
    return keys


def _add_reactive(gather: _Gather, base: PriceSet, against: PriceSet, split: BoolArray, offset: int) -> pd.MultiIndex:
    """Add the drivers of the reactive component, by source as far as it is known; return the labels."""
    one, other = base.reactive_parts, against.reactive_parts
    rest = (against.reactive - other.summed(base.n_interval)) - (base.reactive - one.summed(base.n_interval))
    gather.add(REACTIVE, np.arange(base.n_interval), np.where(split, rest, 0.0))
    labels, pair, place_one, place_other = _union(one, other)
    interval, label = pair // max(len(labels), 1), offset + pair % max(len(labels), 1)
    change = np.zeros((pair.size, base.n_bus))
    change[place_other] += other.amount
    change[place_one] -= one.amount
    gather.add(REACTIVE, interval, np.where(split[interval], change, 0.0), label)
    return labels


def _union(one: ContributionBlock, other: ContributionBlock) -> tuple[pd.MultiIndex, IntArray, IntArray, IntArray]:
    """Return all keys, all (interval, key) pairs, and where the rows of each block stand among the pairs."""
    code, keys = one.labels.append(other.labels).factorize()
    keys = pd.MultiIndex.from_tuples(list(keys), names=KEY_COLUMNS) if len(keys) else one.labels[:0]
    split_at, n_key = len(one.labels), max(len(keys), 1)
    pair_one = one.interval * n_key + code[:split_at][one.label]
    pair_other = other.interval * n_key + code[split_at:][other.label]
    pair = np.union1d(pair_one, pair_other)
    return keys, pair, np.searchsorted(pair, pair_one), np.searchsorted(pair, pair_other)


class _Gather:
    """Collects dense blocks of amounts as rows, leaving out what is nothing."""

    def __init__(self, priced: BoolArray, smallest: float) -> None:
        self._priced = priced
        self._smallest = smallest
        self._parts: list[tuple[IntArray, IntArray, IntArray, IntArray, FloatArray]] = []

    def add(
        self,
        driver: str,
        interval: IntArray,
        amount: FloatArray,
        constraint: IntArray | None = None,
        rows: BoolArray | None = None,
    ) -> None:
        """Add ``amount`` (n_row, n_bus), whose rows belong to the given intervals and constraints."""
        if rows is not None:
            chosen = np.flatnonzero(rows)
            interval, amount = interval[chosen], amount[chosen]
            constraint = None if constraint is None else constraint[chosen]
        row, bus = np.nonzero((np.abs(amount) > self._smallest) & self._priced[interval])
        code = np.zeros(row.size, np.int64) if constraint is None else constraint[row]
        kind = np.full(row.size, DRIVERS.index(driver), dtype=np.int64)
        self._parts.append((interval[row], bus, kind, code, amount[row, bus]))

    def rows(self, constraints: tuple[str, ...]) -> DriverRows:
        """Return everything, in order of intervals and, within one, of buses."""
        interval, bus, driver, constraint, amount = (
            np.concatenate([part[i] for part in self._parts]) for i in range(5)
        )
        order = np.argsort(interval * self._priced.shape[1] + bus, kind="stable")
        return DriverRows(
            interval=interval[order],
            bus=bus[order],
            driver=driver[order],
            constraint=constraint[order],
            amount=amount[order],
            constraints=constraints,
        )
