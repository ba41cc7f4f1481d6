"""A made-up but consistent week: prices that are the sum of their parts, drivers that add up, money that matches.

Nothing is solved. A network with shift factors, a few limits with shadow prices per formulation, delivery factors and
an energy price are drawn from a seeded generator; every table of the run folder then follows from them by the
definitions of the components, so that a figure in the report can be checked against any table.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import pandas as pd
from scipy import sparse
from scipy.sparse.linalg import splu

from lmpgap.scenario.settings import Penalties, ScenarioSettings

FORMULATIONS = ("dc", "dc-loss", "soc", "ac")
PAIRS = (("dc", "dc-loss"), ("dc-loss", "soc"), ("soc", "ac"), ("dc", "ac"))
NAMES = (
    "Fernhill",
    "Ridge",
    "Amber Quay",
    "Otter Mill",
    "Saltmarsh",
    "Pinegate",
    "Low Tarn",
    "High Tarn",
    "Copperfield",
    "Wren Cross",
    "Mallow",
    "Stonebeck",
)
HOSTILE_NAMES = (
    "<script>document.title='owned'</script>",
    "<img src=x onerror=\"document.title='owned'\">",
    "</script><b>bold</b>",
    "\"quoted\" & 'single' <i>it</i>",
    "a" * 300,
    "\u05e9\u05dc\u05d5\u05dd \u202e123 abc",
    "%{x} $\\frac{1}{2}$ {{ 7 * 7 }}",
    "=cmd|' /C calc'!A0",
)


@dataclass(frozen=True, kw_only=True)
class SyntheticScenario:
    """Satisfies what the report asks of a scenario."""

    settings: ScenarioSettings
    tables: Mapping[str, pd.DataFrame]
    interval_starts: pd.DatetimeIndex
    hashes: Mapping[str, str]
    weights: np.ndarray
    warnings: tuple[Any, ...] = field(default=())

    def reference_weights(self, position: int) -> np.ndarray:
        """Return the load-weighted reference, the same in every interval."""
        return self.weights


@dataclass(frozen=True, kw_only=True)
class SyntheticRun:
    """Scenario and run tables of a made-up week."""

    scenario: SyntheticScenario
    tables: dict[str, pd.DataFrame]
    manifest: dict[str, Any]
    sentences: tuple[str, ...]


def autumn_week() -> pd.DatetimeIndex:
    """Return the 169 hourly starts of a local week that contains the autumn change of clocks."""
    local = pd.date_range("2026-10-26", "2026-11-02", freq="h", tz="America/Boise", inclusive="left")
    return local.tz_convert("UTC")


def synthetic_run(
    n_bus: int = 12,
    starts: pd.DatetimeIndex | None = None,
    *,
    seed: int = 7,
    names: tuple[str, ...] = NAMES,
    coordinates: bool = True,
    posted: bool = True,
    pairs: tuple[tuple[str, str], ...] = PAIRS,
    n_constraint: int = 4,
) -> SyntheticRun:
    """Return a week of made-up but consistent results.

    Parameters
    ----------
    n_bus
        Number of buses.
    starts
        Interval starts, UTC; the autumn week by default.
    seed
        Of the generator.
    names
        Display names, and parts of the names of constraints, accounts, hubs and zones.
    coordinates
        Give the buses map coordinates.
    posted
        Include posted prices, findings and settlement.
    pairs
        Pairs that are explained by drivers.
    n_constraint
        Limits that bind in some hours.
    """
    starts = autumn_week() if starts is None else starts
    random = np.random.default_rng(seed)
    grid = _Grid.drawn(n_bus, random, names, coordinates)
    week = _Week.drawn(grid, starts, random, n_constraint, names)
    tables = {
        "prices": week.prices(),
        "constraints": week.constraints(),
        "contributions": week.contributions() if n_bus <= 100 else pd.DataFrame(),
        "operating_point": week.operating_point(),
        "solves": week.solves(random),
        "money": week.money(),
        "differences": pd.concat([week.differences(*pair) for pair in pairs], ignore_index=True),
        "drivers": pd.concat([week.drivers(*pair) for pair in pairs], ignore_index=True),
        "audit": week.audit(),
        "sweep": _sweep(),
        "findings": week.findings() if posted else pd.DataFrame(),
        "settlement": week.settlement() if posted else pd.DataFrame(),
    }
    scenario = SyntheticScenario(
        settings=ScenarioSettings(
            name="Kestrel Basin, week 44",
            time_zone="America/Boise",
            penalties=Penalties(transmission=1500.0),
        ),
        tables={
            "buses": grid.buses,
            "branches": grid.branches,
            "hubs": grid.hubs,
            "posted": week.posted() if posted else pd.DataFrame(),
        },
        interval_starts=starts,
        weights=grid.load_share,
        hashes={"buses.csv": "a" * 64, "scenario.toml": "0123456789abcdef" * 4},
    )
    manifest = {"lmpgap": "0.1.0", "formulations": list(FORMULATIONS), "tolerances": {"price_residual": 1e-3}}
    return SyntheticRun(scenario=scenario, tables=tables, manifest=manifest, sentences=week.sentences())


@dataclass(frozen=True, kw_only=True)
class _Grid:
    buses: pd.DataFrame
    branches: pd.DataFrame
    hubs: pd.DataFrame
    load_share: np.ndarray

    @staticmethod
    def drawn(n: int, random: np.random.Generator, names: tuple[str, ...], coordinates: bool) -> _Grid:
        width = int(np.ceil(np.sqrt(n * 1.6)))
        cell = np.arange(n)
        x = cell % width + random.uniform(-0.3, 0.3, n)
        y = cell // width + random.uniform(-0.3, 0.3, n)
        right = cell[(cell % width != width - 1) & (cell + 1 < n)]
        below = cell[cell + width < n]
        spine = cell[1:] - 1  # keeps the last row connected
        ends = np.concatenate([np.c_[right, right + 1], np.c_[below, below + width], np.c_[spine[-1:], spine[-1:] + 1]])
        ends = np.unique(ends, axis=0)
        keep = random.random(len(ends)) < 0.9
        keep[: n // 10 + 2] = True
        ends = _connected(ends, keep, n)
        identifiers = [f"B{i + 1:0{len(str(n))}d}" for i in range(n)]
        zones = [names[(3 * (int(xi) // 3)) % len(names)][:40] + " zone" for xi in x]
        buses = pd.DataFrame(
            {
                "bus": identifiers,
                "name": [
                    f"{names[i % len(names)]}{'' if i < len(names) else f' {i // len(names) + 1}'}" for i in range(n)
                ],
                "zone": zones,
                "base_kv": 230.0,
                "v_min_pu": 0.95,
                "v_max_pu": 1.05,
                "map_x": x if coordinates else np.nan,
                "map_y": -y if coordinates else np.nan,
            }
        )
        branches = pd.DataFrame(
            {
                "branch": [f"L{k + 1}" for k in range(len(ends))],
                "from_bus": [identifiers[i] for i in ends[:, 0]],
                "to_bus": [identifiers[i] for i in ends[:, 1]],
                "r_pu": 0.01,
                "x_pu": random.uniform(0.05, 0.15, len(ends)),
            }
        )
        hubs = pd.DataFrame(
            {
                "hub": [f"{names[0][:60]} hub"] * 3 + [f"{names[1][:60]} hub"] * 2,
                "bus": identifiers[:3] + identifiers[-2:],
                "weight": [0.5, 0.3, 0.2, 0.6, 0.4],
            }
        )
        share = random.gamma(1.2, 1.0, n)
        share[random.random(n) < 0.25] = 0.0
        share[0] = max(share[0], 1.0)
        return _Grid(buses=buses, branches=branches, hubs=hubs, load_share=share / share.sum())


def _connected(ends: np.ndarray, keep: np.ndarray, n: int) -> np.ndarray:
    """Return the kept branches, and as many of the others as it takes to connect all buses."""
    chosen = [tuple(end) for end in ends[keep]]
    for end in ends[~keep]:
        graph = sparse.coo_array((np.ones(len(chosen)), tuple(np.array(chosen).T)), shape=(n, n))
        count, label = sparse.csgraph.connected_components(graph, directed=False)
        if count == 1:
            break
        if label[end[0]] != label[end[1]]:
            chosen.append(tuple(end))
    return np.array(chosen)


def _shift_factors(grid: _Grid, rows: np.ndarray) -> np.ndarray:
    """Return lossless shift factors of the chosen branches on the load-weighted reference, (n_row, n_bus)."""
    index = pd.Index(grid.buses["bus"])
    f, t = index.get_indexer(grid.branches["from_bus"]), index.get_indexer(grid.branches["to_bus"])
    n, m = len(index), len(grid.branches)
    incidence = sparse.csr_array(
        (np.r_[np.ones(m), -np.ones(m)], (np.tile(np.arange(m), 2), np.r_[f, t])), shape=(m, n)
    )
    b = 1.0 / grid.branches["x_pu"].to_numpy()
    laplacian = sparse.csc_array(incidence.T @ sparse.diags_array(b) @ incidence)
    factor = splu(laplacian[1:, 1:])
    right = (sparse.diags_array(b) @ incidence)[rows].toarray()[:, 1:].T
    reduced = factor.solve(np.ascontiguousarray(right)).T
    factors = np.hstack([np.zeros((len(rows), 1)), reduced])
    return factors - (factors @ grid.load_share)[:, None]


@dataclass(frozen=True, kw_only=True)
class _Week:
    grid: _Grid
    starts: pd.DatetimeIndex
    load_mw: np.ndarray  # (n_hour,)
    energy: dict[str, np.ndarray]  # (n_hour,)
    factor: dict[str, np.ndarray]  # delivery factor (n_bus, n_hour)
    constraint: tuple[dict[str, str], ...]
    shift: np.ndarray  # (n_constraint, n_bus)
    shadow: dict[str, np.ndarray]  # (n_constraint, n_hour)
    reactive: dict[str, np.ndarray]  # (n_bus, n_hour)
    names: tuple[str, ...]

    @staticmethod
    def drawn(
        grid: _Grid, starts: pd.DatetimeIndex, random: np.random.Generator, n_constraint: int, names: tuple[str, ...]
    ) -> _Week:
        local = starts.tz_convert("America/Boise")
        hour = local.hour.to_numpy()
        n, n_hour = len(grid.buses), len(starts)
        day = 1.0 + 0.25 * np.sin((hour - 9) / 24 * 2 * np.pi) + 0.2 * np.exp(-((hour - 18.5) ** 2) / 6)
        load = 900.0 * n / 12 * day * (1 + 0.03 * random.standard_normal(n_hour))
        base = 22.0 + 26.0 * (load / load.mean() - 0.75) ** 2 * 3 + 2.0 * random.standard_normal(n_hour)
        energy = {
            "dc": base,
            "dc-loss": base * 1.012,
            "soc": base * 1.015 + 0.05,
            "ac": base * 1.018 + 0.08 + 0.1 * random.standard_normal(n_hour),
        }
        slope = 0.03 * random.standard_normal(n)
        slope -= slope @ grid.load_share
        swing = slope[:, None] * (0.5 + (load / load.max())[None, :])
        ones = np.ones((n, n_hour))
        factor = {"dc": ones, "dc-loss": 1 + 0.92 * swing, "soc": 1 + 0.98 * swing, "ac": 1 + swing}
        rows = random.choice(len(grid.branches), size=min(n_constraint, len(grid.branches)), replace=False)
        shift = _shift_factors(grid, rows)
        shift /= np.maximum(np.abs(shift).max(axis=1, keepdims=True), 1e-9)
        constraint = tuple(
            {
                "constraint": f"{grid.branches['branch'].iloc[row]} {direction}"
                + (f" / loss of {names[k % len(names)]}" if k % 3 == 2 else ""),
                "kind": "contingency" if k % 3 == 2 else "thermal",
                "contingency": f"loss of {names[k % len(names)]}" if k % 3 == 2 else "",
                "monitored": str(grid.branches["branch"].iloc[row]),
                "direction": direction,
            }
            for k, (row, direction) in enumerate(zip(rows, ("forward", "reverse") * len(rows), strict=False))
        )
        shadow = {name: np.zeros((len(rows), n_hour)) for name in FORMULATIONS}
        for k in range(len(rows)):
            centre = (13, 19, 3, 8)[k % 4]
            strength = np.maximum(0.0, 1.3 - np.abs((hour - centre + 12) % 24 - 12) / 3.0) * random.uniform(4, 18)
            strength = strength * (random.random(n_hour) < 0.8)
            only_ac = k % 4 == 1  # this one binds only where reactive power counts
            shadow["dc"][k] = 0.0 if only_ac else 0.8 * strength
            shadow["dc-loss"][k] = 0.0 if only_ac else 0.85 * strength
            shadow["soc"][k] = 0.9 * strength
            shadow["ac"][k] = strength
        pocket = np.exp(-((np.arange(n) - n * 0.7) ** 2) / (0.02 * n * n + 1))
        evening = np.maximum(0.0, 1.0 - np.abs(hour - 18) / 2.0)
        zero = np.zeros((n, n_hour))
        reactive = {
            "dc": zero,
            "dc-loss": zero,
            "soc": 1.5 * pocket[:, None] * evening[None, :],
            "ac": 2.4 * pocket[:, None] * evening[None, :],
        }
        return _Week(
            grid=grid,
            starts=starts,
            load_mw=load,
            energy=energy,
            factor=factor,
            constraint=constraint,
            shift=shift,
            shadow=shadow,
            reactive=reactive,
            names=names,
        )

    # --- arrays -----------------------------------------------------------------------------------------------

    def components(self, formulation: str) -> dict[str, np.ndarray]:
        """Return the parts of the price and their sum, each (n_bus, n_hour)."""
        energy = np.broadcast_to(self.energy[formulation], self.factor[formulation].shape)
        parts = {
            "energy": energy,
            "congestion": -self.shift.T @ self.shadow[formulation],
            "loss": energy * (self.factor[formulation] - 1.0),
            "reactive": self.reactive[formulation],
        }
        return {"lmp": sum(parts.values()), **parts}

    def _long(self, **matrices: np.ndarray) -> pd.DataFrame:
        """Return (n_bus, n_hour) matrices as columns of one long frame, hour by hour."""
        n, n_hour = len(self.grid.buses), len(self.starts)
        return pd.DataFrame(
            {
                "interval_start": self.starts.repeat(n),
                "bus": pd.Categorical.from_codes(
                    np.tile(np.arange(n), n_hour), categories=list(self.grid.buses["bus"])
                ),
                **{name: matrix.T.ravel() for name, matrix in matrices.items()},
            }
        )

    # --- tables -----------------------------------------------------------------------------------------------

    def prices(self) -> pd.DataFrame:
        frames = []
        for formulation in FORMULATIONS:
            parts = self.components(formulation)
            lmp = parts["lmp"]
            width = np.where(np.arange(len(self.starts)) % 29 == 11, 2.0, 0.0)[None, :] * np.ones_like(lmp)
            frame = self._long(
                lmp=lmp,
                **{f"{name}_component": parts[name] for name in ("energy", "congestion", "loss", "reactive")},
                lmp_low=lmp - width * (formulation == "dc"),
                lmp_high=lmp + width * (formulation == "dc"),
            )
            frames.append(frame.assign(formulation=formulation))
        return pd.concat(frames, ignore_index=True)

    def constraints(self) -> pd.DataFrame:
        rows = []
        for formulation in FORMULATIONS:
            for k, key in enumerate(self.constraint):
                for hour in np.flatnonzero(self.shadow[formulation][k] > 0):
                    rows.append(
                        {
                            "interval_start": self.starts[hour],
                            "formulation": formulation,
                            **key,
                            "limit": 300.0,
                            "value": 300.0,
                            "unit": "MVA" if formulation in ("soc", "ac") else "MW",
                            "shadow_price": self.shadow[formulation][k, hour],
                            "at_penalty": False,
                        }
                    )
        return pd.DataFrame(rows)

    def contributions(self) -> pd.DataFrame:
        frames = []
        for formulation in FORMULATIONS:
            for k, key in enumerate(self.constraint):
                amount = -np.outer(self.shift[k], self.shadow[formulation][k])
                frame = self._long(amount=amount)
                frames.append(
                    frame.assign(formulation=formulation, constraint=key["constraint"], component="congestion")
                )
        return pd.concat(frames, ignore_index=True)

    def operating_point(self) -> pd.DataFrame:
        load = np.outer(self.grid.load_share, self.load_mw)
        frames = [
            self._long(load_mw=load, v_pu=np.ones_like(load), angle_deg=np.zeros_like(load)).assign(formulation=name)
            for name in FORMULATIONS
        ]
        return pd.concat(frames, ignore_index=True)

    def solves(self, random: np.random.Generator) -> pd.DataFrame:
        rows = []
        for formulation in FORMULATIONS:
            for hour, start in enumerate(self.starts):
                verdict = "certified"
                if formulation == "soc":
                    verdict = "not a price" if hour % 13 == 5 else "close" if hour % 3 == 1 else "exact"
                if formulation == "ac" and hour == 40:
                    verdict = "uncertified"
                rows.append(
                    {
                        "interval_start": start,
                        "formulation": formulation,
                        "status": "locally optimal" if formulation == "ac" else "optimal",
                        "objective": self.load_mw[hour] * self.energy[formulation][hour],
                        "losses_mw": 0.0
                        if formulation == "dc"
                        else 0.02 * self.load_mw[hour] ** 2 / self.load_mw.mean(),
                        "solver": {"dc": "HiGHS 1.15", "ac": "Ipopt 3.14"}.get(formulation, "Clarabel 0.11"),
                        "solver_seconds": 0.01,
                        "total_seconds": 0.02,
                        "primal_residual": 1e-7 * random.random(),
                        "dual_residual": 1e-5 * random.random(),
                        "duality_gap": 1e-4,
                        "price_residual": 1e-5 * random.random(),
                        "cone_slack": 1e-9 if formulation == "soc" else np.nan,
                        "loop_angle_deg": 0.02 if formulation == "soc" else np.nan,
                        "cost_gap": (0.006 if verdict == "not a price" else 0.0004) if formulation == "soc" else np.nan,
                        "ac_mismatch_mw": 0.3 if formulation == "soc" else np.nan,
                        "verdict": verdict,
                        "reasons": "cost gap 0.60 % above 0.25 %" if verdict == "not a price" else "",
                    }
                )
        return pd.DataFrame(rows)

    def money(self) -> pd.DataFrame:
        rows = []
        for formulation in FORMULATIONS:
            pay = self.load_mw * self.energy[formulation]
            loss = 0.02 * pay * (formulation != "dc")
            rent = 0.05 * pay
            for item, amount in (
                ("load payments", pay),
                ("generator receipts", pay - loss - rent),
                ("congestion rent", rent),
                ("loss surplus", loss),
                ("remainder", 0.0 * pay),
            ):
                rows.append(
                    pd.DataFrame(
                        {
                            "interval_start": self.starts,
                            "formulation": formulation,
                            "item": item,
                            "basis": "components",
                            "amount": amount,
                        }
                    )
                )
        return pd.concat(rows, ignore_index=True)

    def differences(self, base: str, against: str) -> pd.DataFrame:
        difference = self.components(against)["lmp"] - self.components(base)["lmp"]
        wide = (np.arange(len(self.starts)) % 29 == 11)[None, :] & (base == "dc")
        frame = self._long(difference=difference, inside_interval=wide & (np.abs(difference) < 2.0))
        return frame.assign(base=base, against=against)

    def drivers(self, base: str, against: str) -> pd.DataFrame:
        """Return the exact midpoint split; shift factors are the same on both sides, so they drive nothing."""
        a, b = self.components(base), self.components(against)
        d_energy = b["energy"] - a["energy"]
        mean_factor = (self.factor[base] + self.factor[against]) / 2.0
        parts: list[tuple[str, str, np.ndarray]] = [
            ("energy price", "", d_energy * mean_factor),
            ("delivery factor", "", (a["energy"] + b["energy"]) / 2.0 * (self.factor[against] - self.factor[base])),
            ("reactive", "", b["reactive"] - a["reactive"]),
        ]
        for k, key in enumerate(self.constraint):
            low, high = self.shadow[base][k], self.shadow[against][k]
            for driver, chosen in (
                ("shadow price", (low > 0) & (high > 0)),
                ("binds only in base", (low > 0) & (high == 0)),
                ("binds only in against", (low == 0) & (high > 0)),
            ):
                if chosen.any():
                    parts.append((driver, key["constraint"], -np.outer(self.shift[k], (high - low) * chosen)))
        frames = []
        for driver, constraint, amount in parts:
            frame = self._long(amount=amount)
            frame = frame[frame["amount"] != 0.0]
            frames.append(frame.assign(driver=driver, constraint=constraint, base=base, against=against))
        return pd.concat(frames, ignore_index=True)

    def posted(self) -> pd.DataFrame:
        """Return AC-like prices, rounded to cents, with delivery factors that stand still at two buses."""
        parts = {name: matrix.copy() for name, matrix in self.components("ac").items()}
        frozen = self.factor["ac"].copy()
        frozen[:2] = frozen[:2, :1] + 0.01
        parts["loss"] = np.round(parts["energy"] * (frozen - 1.0), 2)
        for name in ("energy", "congestion"):
            parts[name] = np.round(parts[name] + (parts["reactive"] if name == "congestion" else 0.0), 2)
        lmp = parts["energy"] + parts["congestion"] + parts["loss"]
        frame = self._long(
            lmp=lmp,
            energy_component=parts["energy"],
            congestion_component=parts["congestion"],
            loss_component=parts["loss"],
        )
        return frame.rename(columns={"bus": "node"}).assign(version=1.0, published_at=pd.NaT)

    def findings(self) -> pd.DataFrame:
        buses = self.grid.buses["bus"]
        return pd.DataFrame(
            {
                "interval_start": [self.starts[30], self.starts[30], pd.NaT],
                "kind": ["stale-factors", "stale-factors", "unknown-node"],
                "node": [buses.iloc[0], buses.iloc[1], "OLD-9"],
                "constraint": ["", "", ""],
                "amount": [0.011, -0.004, np.nan],
                "unit": ["-", "-", ""],
                "sentence": [
                    f"At {self.names[0]} the implied delivery factor stood still for 168 hours.",
                    f"At {self.names[1]} the implied delivery factor stood still for 168 hours.",
                    "Node OLD-9 is not a bus or hub of the scenario.",
                ],
            }
        )

    def settlement(self) -> pd.DataFrame:
        posted = self.posted().set_index(["node", "interval_start"])
        rows = []
        for place, mw in ((0, 120.0), (1, -80.0), (5, 40.0)):
            bus = self.grid.buses["bus"].iloc[place]
            theirs = posted.loc[bus, "loss_component"].to_numpy()
            ours = self.components("ac")["loss"][place]
            rows.append(
                pd.DataFrame(
                    {
                        "account": f"{self.names[place % len(self.names)]} Power",
                        "interval_start": self.starts,
                        "node": bus,
                        "mw": mw,
                        "component": "loss",
                        "posted": theirs,
                        "reference": ours,
                        "amount": mw * (theirs - ours),
                        "amount_low": mw * (theirs - ours) - 0.01 * abs(mw),
                        "amount_high": mw * (theirs - ours) + 0.01 * abs(mw),
                    }
                )
            )
        return pd.concat(rows, ignore_index=True)

    def audit(self) -> pd.DataFrame:
        hour = self.starts[[18, 19, 20]]
        branch = self.grid.branches["branch"].iloc[1]
        rows = [(start, "dc", "overload", branch, 312.0 + k, 300.0, "MVA") for k, start in enumerate(hour)]
        rows += [(hour[0], "dc", "missing-power", "", 17.2, np.nan, "MW")]
        rows += [(hour[1], "dc", "voltage", self.grid.buses["bus"].iloc[3], 0.931, 0.95, "pu")]
        columns = ["interval_start", "formulation", "finding", "element", "value", "limit", "unit"]
        return pd.DataFrame(rows, columns=columns)

    def sentences(self) -> tuple[str, ...]:
        """Return five sentences whose figures come from the arrays."""
        difference = self.components("ac")["lmp"] - self.components("dc")["lmp"]
        bus, hour = np.unravel_index(np.abs(difference).argmax(), difference.shape)
        local = self.starts.tz_convert("America/Boise")[hour]
        share = np.abs(difference).mean()
        loss = self.components("ac")["loss"]
        name = self.grid.buses["name"].iloc[bus]
        one = min(1, len(self.constraint) - 1)
        bound = int((self.shadow["ac"][one] > 0).sum())
        return (
            f"The linear prices (dc) missed the AC ones by {share:.2f} USD/MWh on average over {difference.shape[1]} "
            "hours.",
            f"The widest gap was {difference[bus, hour]:+.2f} USD/MWh at {name}, {local:%a} HE{local.hour + 1:02d}.",
            f"{self.constraint[one]['constraint']} bound only where reactive power counts, in {bound} hours.",
            f"Loss components ran from {loss.min():.2f} to {loss.max():.2f} USD/MWh.",
            f"Delivery factors posted at {self.names[0]} and {self.names[1]} stood still all week.",
        )


def _sweep() -> pd.DataFrame:
    rows = []
    for factor in (0.5, 0.7, 0.9, 1.0, 1.1, 1.2):
        for k, name in enumerate(FORMULATIONS):
            error = 0.0 if name == "ac" else (3 - k) * 0.4 * factor**4
            rows.append(
                {
                    "load_factor": factor,
                    "formulation": name,
                    "mean_price": 20 + 12 * factor**2,
                    "price_error": error,
                    "loss_component_error": 0.3 * error,
                    "cost": 20000 * factor**1.4,
                    "losses_mw": 0.0 if name == "dc" else 18 * factor**2,
                    "hours": 169,
                }
            )
    return pd.DataFrame(rows)
