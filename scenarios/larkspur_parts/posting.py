"""What the operator publishes: prices by node and hour, binding constraints, delivery factors.

The operator publishes ``lmp = energy - congestion + loss``, that is, congestion with the opposite sign; the scenario
declares it with ``[posted] congestion_sign = -1``.
"""

from __future__ import annotations

from datetime import datetime, timedelta
from zoneinfo import ZoneInfo

import numpy as np
import pandas as pd

from .calendar_week import STAMPS, STARTS, TIME_ZONE
from .clearing import ClearedHour
from .faults import (
    NEW_NAME,
    RENAMED_HOURS,
    RENAMED_NODE,
    REVERSED_HOURS,
    REVERSED_INTERFACE,
    REVISED_HOURS,
    STALE_HOURS,
    STALE_NODES,
    STALE_SOURCE,
    WRONG_SIGN_HOURS,
    Planted,
)
from .market import HUBS
from .weather import FloatArray

FULL_DECIMALS = 6
"""Decimals of prices that are not rounded to cents, and of delivery factors."""

FIRST_PUBLISHED_DAYS, FIRST_PUBLISHED_HOUR = 1, 7
REVISED_DAYS, REVISED_HOUR = 6, 16


class Publisher:
    """Turns cleared hours into the operator's tables, with the faults that are planted."""

    def __init__(self, buses: tuple[str, ...], cleared: dict[int, ClearedHour], planted: Planted) -> None:
        self.buses = buses
        self.cleared = cleared
        self.planted = planted
        self.nodes = (*buses, *HUBS)
        index = {bus: i for i, bus in enumerate(buses)}
        # Prices of buses, then of hubs: a hub is the weighted mean of its buses in every component.
        self.mix = np.vstack([np.eye(len(buses)), np.zeros((len(HUBS), len(buses)))])
        for row, members in enumerate(HUBS.values(), start=len(buses)):
            for bus, weight in members.items():
                self.mix[row, index[bus]] = weight
        self.stale = np.array([index[bus] for bus in STALE_NODES])

    def factors(self, hour: int) -> FloatArray:
        """Return the delivery factors the operator used, shape (n_bus,)."""
        used = self.cleared[hour].delivery_factor.copy()
        if "stale-factors" in self.planted and hour in STALE_HOURS:
            used[self.stale] = self.cleared[STALE_SOURCE].delivery_factor[self.stale]
        return used

    def loss(self, hour: int) -> FloatArray:
        """Return the loss components published for the buses [$/MWh], shape (n_bus,)."""
        cleared = self.cleared[hour]
        changed = cleared.energy * (self.factors(hour) - cleared.delivery_factor)
        return cleared.loss + changed

    def congestion(self, hour: int, cleared: ClearedHour) -> FloatArray:
        """Return the congestion parts of the published prices [$/MWh], shape (n_bus,)."""
        congestion = cleared.congestion.copy()
        if "reversed-interface" in self.planted and hour in REVERSED_HOURS:
            for key, part in zip(cleared.keys, cleared.congestion_by_key, strict=True):
                if key.kind == "interface" and key.monitored == REVERSED_INTERFACE:
                    congestion -= 2.0 * part
        return congestion

    def posted(self, first_try: dict[int, ClearedHour]) -> pd.DataFrame:
        """Return the `posted` table.

        Parameters
        ----------
        first_try
            What version 1 of the revised hours was cleared from.
        """
        frames = []
        for hour in range(len(STARTS)):
            if "revised-day" in self.planted and hour in REVISED_HOURS:
                frames.append(self._rows(hour, first_try[hour], first_try[hour].loss, version=1))
                frames.append(self._rows(hour, self.cleared[hour], self.loss(hour), version=2))
            else:
                frames.append(self._rows(hour, self.cleared[hour], self.loss(hour), version=1))
        return pd.concat(frames, ignore_index=True)

    def _rows(self, hour: int, cleared: ClearedHour, loss_at_bus: FloatArray, version: int) -> pd.DataFrame:
        congestion = self.mix @ self.congestion(hour, cleared)
        loss = self.mix @ loss_at_bus
        lmp = cleared.energy + congestion + loss
        sign = 1.0 if "wrong-sign" in self.planted and hour in WRONG_SIGN_HOURS else -1.0
        decimals = 2 if "rounding" in self.planted else FULL_DECIMALS
        nodes = list(self.nodes)
        if "renamed-node" in self.planted and hour in RENAMED_HOURS:
            nodes[nodes.index(RENAMED_NODE)] = NEW_NAME
        return pd.DataFrame(
            {
                "interval_start": STAMPS[hour],
                "node": nodes,
                # Adding zero turns a negative zero into a plain one.
                "lmp": np.round(lmp, decimals) + 0.0,
                "energy_component": round(cleared.energy, decimals),
                "congestion_component": np.round(sign * congestion, decimals) + 0.0,
                "loss_component": np.round(loss, decimals) + 0.0,
                "version": version,
                "published_at": published_at(STARTS[hour], version),
            }
        )

    def posted_constraints(self) -> pd.DataFrame:
        """Return the `posted_constraints` table; a reversed interface is listed in its true direction."""
        rows = [
            {
                "interval_start": STAMPS[hour],
                "constraint": key.monitored,
                "shadow_price": round(float(price), 2),
                "contingency": key.contingency,
                "direction": key.direction,
            }
            for hour, cleared in self.cleared.items()
            for key, price in zip(cleared.keys, cleared.shadow_price, strict=True)
            if price >= 0.005
        ]
        columns = ["interval_start", "constraint", "shadow_price", "contingency", "direction"]
        return pd.DataFrame(rows, columns=columns)

    def delivery_factors(self) -> pd.DataFrame:
        """Return the `delivery_factors` table: what the operator says it used, stale ones included."""
        frames = [
            pd.DataFrame(
                {
                    "interval_start": STAMPS[hour],
                    "bus": list(self.buses),
                    "delivery_factor": np.round(self.factors(hour), FULL_DECIMALS),
                }
            )
            for hour in self.cleared
        ]
        return pd.concat(frames, ignore_index=True)


def published_at(start: datetime, version: int) -> str:
    """Return when a version of an hour was published, ISO 8601 in local time."""
    days, hour = (FIRST_PUBLISHED_DAYS, FIRST_PUBLISHED_HOUR) if version == 1 else (REVISED_DAYS, REVISED_HOUR)
    day = start.date() + timedelta(days=days)
    return datetime(day.year, day.month, day.day, hour, tzinfo=ZoneInfo(TIME_ZONE)).isoformat()
