"""A seeded generator of small scenarios in which every feature of the tables may meet every other.

Each scenario has a dispatch by construction: limits are drawn around the flows of one dispatch that serves all load,
so that the cheapest dispatch runs into them. With penalties they are also drawn below those flows.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from itertools import pairwise
from typing import Any

import numpy as np
import pandas as pd

from lmpgap.scenario.read import scenario_from_tables
from lmpgap.scenario.scenario import Scenario
from lmpgap.scenario.settings import DcConvention, Penalties, Reference, ScenarioSettings

Row = dict[str, Any]
HOURS = 2


@dataclass
class Draft:
    """Tables in the making."""

    rng: np.random.Generator
    minutes: int
    soft: bool
    tables: dict[str, list[Row]] = field(default_factory=dict)

    def add(self, table: str, **row: Any) -> None:
        self.tables.setdefault(table, []).append(row)

    def chance(self, probability: float) -> bool:
        return bool(self.rng.random() < probability)

    def between(self, low: float, high: float) -> float:
        return float(self.rng.uniform(low, high))

    def start(self, hour: int) -> str:
        return (pd.Timestamp("2026-03-09T06:00:00Z") + pd.Timedelta(minutes=hour * self.minutes)).isoformat()


def draw_scenario(seed: int) -> Scenario:
    """Return the scenario of a seed."""
    return scenario_from_tables(*draw_tables(seed))


def draw_tables(seed: int) -> tuple[ScenarioSettings, dict[str, pd.DataFrame]]:
    """Return settings and tables of a seed, for tests that change them before they are read."""
    rng = np.random.default_rng(seed)
    draft = Draft(rng=rng, minutes=int(rng.choice([30, 60])), soft=bool(rng.random() < 0.5))
    islands = _draw_islands(draft)
    names = [bus for island in islands for bus in island]
    dead = draft.chance(0.3)
    for bus in [*names, *(["Dead"] if dead else [])]:
        draft.add(
            "buses",
            bus=bus,
            base_kv=138.0,
            v_min_pu=0.92,
            v_max_pu=1.08,
            shunt_mw=draft.between(0, 2) if draft.chance(0.2) else 0.0,
            shunt_mvar=draft.between(-10, 25) if draft.chance(0.3) else 0.0,
        )
    for island in islands:
        _draw_branches(draft, island)
    weights = _draw_market(draft, islands)
    if dead and draft.soft and draft.chance(0.5):
        for hour in range(HOURS):
            draft.add("loads", interval_start=draft.start(hour), bus="Dead", mw=3.0, mvar=1.0)
    _draw_limits(draft, names, weights)
    if draft.chance(0.5):
        draft.tables["reference_weights"] = [{"bus": bus, "weight": draft.between(0.1, 1.0)} for bus in names]
    kind = str(rng.choice(["load", "bus", "weights"] if "reference_weights" in draft.tables else ["load", "bus"]))
    settings = ScenarioSettings(
        name=f"Seed {seed}",
        # Tolerances of solvers are per unit: on a base of many times the load they are MW, and not a test of prices.
        base_mva=float(rng.choice([10.0, 100.0, 200.0])),
        interval_minutes=draft.minutes,
        reference=Reference(kind=kind, bus=names[0] if kind == "bus" else ""),  # type: ignore[arg-type]
        dc=DcConvention(susceptance="impedance" if draft.chance(0.5) else "reactance", taps=draft.chance(0.7)),
        penalties=Penalties(power_balance=2000.0, transmission=700.0) if draft.soft else Penalties(),
    )
    # Impedances were drawn on 100 MVA.
    for branch in draft.tables["branches"]:
        for column, power in (("r_pu", 1.0), ("x_pu", 1.0), ("charging_pu", -1.0)):
            branch[column] *= (settings.base_mva / 100.0) ** power
    return settings, {name: pd.DataFrame(rows) for name, rows in draft.tables.items()}


def _draw_islands(draft: Draft) -> list[list[str]]:
    n_bus = int(draft.rng.integers(6, 16))
    names = [f"N{i:02d}" for i in range(n_bus)]
    if n_bus >= 9 and draft.chance(0.35):
        cut = int(draft.rng.integers(3, 5))
        return [names[:-cut], names[-cut:]]
    return [names]


def _draw_branches(draft: Draft, island: list[str]) -> None:
    rng, n_bus = draft.rng, len(island)
    ends = [(island[int(rng.integers(0, i))], island[i]) for i in range(1, n_bus)]
    for _ in range(int(rng.integers(n_bus // 2, n_bus))):
        first, second = rng.choice(n_bus, 2, replace=False)
        ends.append((island[first], island[second]))
    if draft.chance(0.5):
        ends.append(ends[int(rng.integers(0, len(ends)))][:: int(rng.choice([1, -1]))])
    for start, end in ends:
        x = draft.between(0.03, 0.2)
        row: Row = {
            "from_bus": start,
            "to_bus": end,
            "r_pu": x * draft.between(0.05, 0.4),
            "x_pu": x,
            "charging_pu": draft.between(0.0, 0.06),
            "tap_ratio": 1.0,
            "phase_shift_deg": 0.0,
        }
        if draft.chance(0.2):
            row |= {"charging_pu": 0.0, "tap_ratio": draft.between(0.95, 1.05), "r_pu": 0.02 * x}
            if draft.chance(0.4):
                row["phase_shift_deg"] = draft.between(-4, 4)
        elif draft.chance(0.06):
            row |= {"x_pu": 3e-4, "r_pu": 3e-5, "charging_pu": 0.0}
        elif draft.chance(0.05):
            row["r_pu"] = 0.0
        draft.add("branches", branch=f"L{len(draft.tables.get('branches', [])) + 1:02d}", **row)


def _draw_market(draft: Draft, islands: list[list[str]]) -> list[dict[str, float]]:
    """Draw load, resources, offers and bids; return injections of one dispatch per interval, by bus [MW]."""
    rng = draft.rng
    dispatches: list[dict[str, float]] = [{} for _ in range(HOURS)]
    growth = [1.0, draft.between(0.6, 1.2)]
    number = 0
    for island in islands:
        load = {bus: draft.between(5, 60) for bus in island if draft.chance(0.6)} or {island[-1]: 30.0}
        total = sum(load.values())
        for bus, value in load.items():
            angle = draft.between(0.0, 0.35)
            for hour in range(HOURS):
                mw = value * growth[hour]
                draft.add("loads", interval_start=draft.start(hour), bus=bus, mw=mw, mvar=mw * angle)
                dispatches[hour][bus] = dispatches[hour].get(bus, 0.0) - mw
        n_resource = int(rng.integers(2, max(3, len(island) // 2) + 1))
        shares = rng.dirichlet(np.full(n_resource, 2.0))
        for share in shares:
            number += 1
            name, bus = f"G{number}", island[int(rng.integers(0, len(island)))]
            capacity = 1.9 * share * total * max(growth)
            least = 0.2 * share * total * min(growth) if draft.chance(0.3) else 0.0
            draft.add(
                "resources",
                resource=name,
                bus=bus,
                eco_min_mw=least,
                eco_max_mw=capacity,
                q_min_mvar=-0.6 * capacity - 10,
                q_max_mvar=0.9 * capacity + 15,
                no_load_cost=draft.between(0, 300) if draft.chance(0.3) else 0.0,
            )
            _draw_offer(draft, name, capacity)
            for hour in range(HOURS):
                dispatches[hour][bus] = dispatches[hour].get(bus, 0.0) + share * total * growth[hour]
        if draft.chance(0.4):
            bus = island[int(rng.integers(0, len(island)))]
            for segment in (1, 2):
                draft.add(
                    "bids",
                    bus=bus,
                    segment=segment,
                    mw=draft.between(2, 10),
                    price=draft.between(30, 60) / segment,
                )
    return dispatches


def _draw_offer(draft: Draft, name: str, capacity: float) -> None:
    n_segment = int(draft.rng.integers(1, 4))
    cuts = np.concatenate([[0.0], np.sort(draft.rng.uniform(0.1, 0.9, n_segment - 1)), [1.0]]) * capacity
    cuts = np.round(cuts, 3)
    cuts[-1] = capacity
    price = draft.between(-15, -2) if draft.chance(0.12) else draft.between(8, 45)
    sloped = draft.chance(0.4)
    for segment, (low, high) in enumerate(pairwise(cuts), start=1):
        end = price + draft.between(1, 15) if sloped else price
        draft.add("offers", resource=name, segment=segment, from_mw=low, to_mw=high, price=price, end_price=end)
        price = end + draft.between(0.5, 10)


def _draw_limits(draft: Draft, names: list[str], dispatches: list[dict[str, float]]) -> None:
    branches = draft.tables["branches"]
    number = {bus: i for i, bus in enumerate(names)}
    ends = np.array([(number[row["from_bus"]], number[row["to_bus"]]) for row in branches])
    susceptance = np.array([1.0 / (row["x_pu"] * row["tap_ratio"]) for row in branches])
    shift = np.deg2rad([row["phase_shift_deg"] for row in branches])

    def flows(out: tuple[int, ...] = ()) -> np.ndarray:
        """Lossless flows of the dispatches, (n_interval, n_branch) [MW]."""
        b = susceptance.copy()
        b[list(out)] = 0.0
        across = np.zeros((len(branches), len(names)))
        across[np.arange(len(branches)), ends[:, 0]], across[np.arange(len(branches)), ends[:, 1]] = 1.0, -1.0
        inverse = np.linalg.pinv(across.T @ (b[:, None] * across))
        injection = np.array([[100.0**-1 * dispatch.get(bus, 0.0) for bus in names] for dispatch in dispatches])
        theta = inverse @ (injection.T + across.T @ (b * shift)[:, None])
        return np.asarray(100.0 * (b[:, None] * (across @ theta - shift[:, None])).T)

    base = flows()
    tightest = 0.75 if draft.soft else 1.25
    for position, row in enumerate(branches):
        largest = np.abs(base[:, position]).max()
        if draft.chance(0.6):
            row["normal_rating_mva"] = largest * draft.between(tightest, 2.2) + 4.0
        if draft.chance(0.15) and row["x_pu"] > 0.01:
            angle = np.rad2deg(largest * row["x_pu"] / 100.0) * draft.between(1.3, 2.5) + 1.0
            shifted = row["phase_shift_deg"]
            row["angle_min_deg"], row["angle_max_deg"] = shifted - angle, shifted + angle
    _draw_outages(draft, names, ends)
    _draw_contingencies(draft, names, ends, flows, tightest)
    if draft.chance(0.5):
        chosen = draft.rng.choice(len(branches), 2, replace=False)
        weight = draft.rng.choice([-1.0, 1.0, 0.5], 2)
        for branch, value in zip(chosen, weight, strict=True):
            draft.add("interfaces", interface="Cut", branch=branches[branch]["branch"], weight=value)
        largest = np.abs(base[:, chosen] @ weight).max()
        draft.add(
            "interface_limits",
            interface="Cut",
            limit_mw=largest * draft.between(tightest, 1.6) + 3.0,
            reverse_limit_mw=largest * draft.between(tightest, 1.6) + 3.0 if draft.chance(0.5) else None,
        )


def _connected(n_bus: int, ends: np.ndarray, out: tuple[int, ...]) -> bool:
    """Whether the branches in ``out`` leave as many islands as there are without them."""

    def count(kept: np.ndarray) -> int:
        label = np.arange(n_bus)
        for a, b in kept:
            label[label == label[a]] = label[b]
        return int(np.unique(label).size)

    return count(np.delete(ends, list(out), axis=0)) == count(ends)


def _draw_outages(draft: Draft, names: list[str], ends: np.ndarray) -> None:
    branches = draft.tables["branches"]
    if not draft.soft or not draft.chance(0.4):
        return
    candidates = [i for i in range(len(branches)) if _connected(len(names), ends, (i,))]
    if candidates:
        out = branches[int(draft.rng.choice(candidates))]["branch"]
        at = draft.start(1)
        draft.add("outages", kind="branch", id=out, first_interval=at, last_interval=at)


def _draw_contingencies(draft: Draft, names: list[str], ends: np.ndarray, flows: Any, tightest: float) -> None:
    branches = draft.tables["branches"]
    if not draft.chance(0.5):
        return
    outages = [(i,) for i in range(len(branches)) if draft.chance(0.3)]
    outages += [tuple(sorted(draft.rng.choice(len(branches), 2, replace=False).tolist()))]
    outages = [out for out in dict.fromkeys(outages) if _connected(len(names), ends, out)]
    taken_out = {row["id"] for row in draft.tables.get("outages", [])}
    outages = [out for out in outages if not taken_out & {branches[i]["branch"] for i in out}]
    if not outages:
        return
    after = np.max([np.abs(flows(out)).max(axis=0) for out in outages], axis=0)
    for row, largest in zip(branches, after, strict=True):
        if draft.chance(0.5):
            row["emergency_rating_mva"] = max(
                row.get("normal_rating_mva", 0.0), largest * draft.between(tightest, 1.8) + 4.0
            )
    for out in outages:
        name = "loss of " + " and ".join(branches[i]["branch"] for i in out)
        for i in out:
            draft.add("contingencies", contingency=name, branch=branches[i]["branch"])
