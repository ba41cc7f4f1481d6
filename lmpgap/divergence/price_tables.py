"""Read a price set from the tables of a run folder."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
import pandas as pd

from lmpgap.divergence.price_set import KEY_COLUMNS, ContributionBlock, PriceSet, places
from lmpgap.errors import DataError, Fault
from lmpgap.scenario.network import FloatArray, IntArray


def price_set(
    tables: Mapping[str, pd.DataFrame],
    formulation: str,
    *,
    name: str | None = None,
) -> PriceSet:
    """Return one formulation of a run as a price set.

    Parameters
    ----------
    tables
        Run tables ``prices`` and, for a split by constraint, ``constraints`` and ``contributions``.
    formulation
        Which rows to take.
    name
        How to call the set; the formulation unless told otherwise.

    Raises
    ------
    DataError
        If there is no price of this formulation, or an interval and bus stands twice.
    """
    prices = _of(tables["prices"], formulation)
    if prices.empty:
        found = ", ".join(sorted(map(str, tables["prices"]["formulation"].unique()))) or "none"
        raise DataError(
            f"the run holds no prices of {formulation!r}",
            [
                Fault(
                    table="prices",
                    column="formulation",
                    message="no rows of this formulation",
                    value=formulation,
                    allowed=found,
                )
            ],
        )
    # Positions are those of the first appearance, so buses keep the order of the network.
    bus_codes, bus_names = pd.factorize(prices["bus"])
    interval_codes, starts = pd.factorize(prices["interval_start"], sort=True)
    intervals, buses = pd.DatetimeIndex(starts), pd.Index(bus_names, dtype="str")
    shape = (len(intervals), len(buses))
    place = interval_codes * shape[1] + bus_codes
    if np.unique(place).size != place.size:
        twice = prices[pd.Series(place, index=prices.index).duplicated()].iloc[0]
        raise DataError(
            f"the prices of {formulation!r} hold an interval and bus twice",
            [Fault(table="prices", message=f"bus {twice['bus']} at {twice['interval_start']} stands twice")],
        )

    def grid(column: str, default: FloatArray | float = np.nan) -> FloatArray:
        values = np.full(shape, np.nan)
        if column in prices:
            values.flat[place] = prices[column].to_numpy(dtype=float)
        return np.where(np.isnan(values), default, values)

    lmp = grid("lmp")
    constraints = tables.get("constraints")
    contributions = tables.get("contributions")
    keys = None if constraints is None else _of(constraints, formulation)
    parts = None if contributions is None else _of(contributions, formulation)
    return PriceSet(
        name=name or formulation,
        intervals=intervals,
        buses=buses,
        lmp=lmp,
        energy=grid("energy_component"),
        congestion=grid("congestion_component"),
        loss=grid("loss_component"),
        reactive=grid("reactive_component", 0.0),
        low=grid("lmp_low", lmp),
        high=grid("lmp_high", lmp),
        congestion_parts=_block(parts, keys, "congestion", intervals, buses),
        reactive_parts=_block(parts, keys, "reactive", intervals, buses),
    )


def _of(frame: pd.DataFrame, formulation: str) -> pd.DataFrame:
    """Return the rows of one formulation; a table without that column belongs to any."""
    return frame[frame["formulation"] == formulation] if "formulation" in frame else frame


def _block(
    contributions: pd.DataFrame | None,
    constraints: pd.DataFrame | None,
    component: str,
    intervals: pd.DatetimeIndex,
    buses: pd.Index[str],
) -> ContributionBlock:
    """Gather long contributions of one component into one row per interval and key."""
    if contributions is None or contributions.empty:
        return ContributionBlock.none(len(buses))
    rows = contributions[contributions["component"] == component]
    interval = places(intervals, rows["interval_start"])
    bus = places(buses, rows["bus"])
    inside = (interval >= 0) & (bus >= 0)
    rows, interval, bus = rows[inside], interval[inside], bus[inside]
    if rows.empty:
        return ContributionBlock.none(len(buses))
    name_code, names = pd.factorize(rows["constraint"])
    name_key, labels = _keys_of(pd.Index(names, dtype="str"), constraints)
    row_key = interval * len(labels) + name_key[name_code]
    pair, place = np.unique(row_key, return_inverse=True)
    shape = (pair.size, len(buses))
    weight = rows["amount"].to_numpy(float)
    amount = np.asarray(np.bincount(place * shape[1] + bus, weight, shape[0] * shape[1]), float).reshape(shape)
    shadow = np.full(pair.size, np.nan)
    if constraints is not None and not constraints.empty:
        at = places(intervals, constraints["interval_start"])
        key = labels.get_indexer(pd.MultiIndex.from_frame(_clean_keys(constraints)))
        price = constraints["shadow_price"].to_numpy(float)
        kept = (at >= 0) & (key >= 0) & np.isfinite(price)
        code = at[kept] * len(labels) + key[kept]
        where = np.minimum(np.searchsorted(pair, code), pair.size - 1)
        hit = pair[where] == code
        shadow[where[hit]] = 0.0
        np.add.at(shadow, where[hit], price[kept][hit])
    return ContributionBlock(
        interval=pair // len(labels), label=pair % len(labels), labels=labels, amount=amount, shadow_price=shadow
    )


def _clean_keys(frame: pd.DataFrame) -> pd.DataFrame:
    return frame[KEY_COLUMNS].fillna("").astype("str")


def _keys_of(names: pd.Index[str], constraints: pd.DataFrame | None) -> tuple[IntArray, pd.MultiIndex]:
    """Return the key position of each name and the keys.

    A name that the ``constraints`` table does not list becomes a key of its own: ``("", "", name, "")``.
    """
    if constraints is None or constraints.empty:
        table = pd.DataFrame(columns=["constraint", *KEY_COLUMNS], dtype="str")
    else:
        table = constraints[["constraint", *KEY_COLUMNS]].drop_duplicates("constraint")
    rows = table.set_index("constraint").reindex(names)
    unknown = rows["monitored"].isna().to_numpy()
    rows = _clean_keys(rows)
    rows.loc[unknown, "monitored"] = names[unknown]
    code, labels = pd.MultiIndex.from_frame(rows).factorize()
    return np.asarray(code, dtype=np.int64), pd.MultiIndex.from_tuples(list(labels), names=KEY_COLUMNS)
