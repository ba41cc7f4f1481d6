"""Losses the market's way: `dc-loss` with factors that were computed beforehand instead of its own.

Two sources. A table of delivery factors (`delivery_factors` of the scenario) says what the operator used. The operating
points of another run say what factors it would have used, had it taken them from there, some hours old or not. Either,
or the formulation's own losses, can be had at the voltages of another run instead of 1 pu.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Literal, Protocol

import numpy as np
import pandas as pd

from lmpgap.dispatch.names import FORMULATIONS
from lmpgap.dispatch.result import DispatchResult, SolveStatus, no_solution
from lmpgap.errors import DataError, Fault
from lmpgap.runs.folder import RunFolder
from lmpgap.scenario.network import FloatArray, Network
from lmpgap.scenario.scenario import Scenario


@dataclass(frozen=True, kw_only=True)
class GivenLosses:
    """What one interval's `dc-loss` takes as given: a base dispatch, delivery factors, or voltages.

    Attributes
    ----------
    angle : (n_bus,) or None
        Voltage angles of the base dispatch [rad].
    output : (n_resource,) or None
        Output of the base dispatch [pu].
    delivery_factor : (n_bus,) or None
        [-]
    same_interval
        The base is an operating point of this very interval.
    voltage : (n_bus,) or None
        Voltage magnitudes in the loss coefficients [pu]; ``None`` is 1 pu everywhere.
    """

    angle: FloatArray | None = None
    output: FloatArray | None = None
    delivery_factor: FloatArray | None = None
    same_interval: bool = False
    voltage: FloatArray | None = None

    def base(self, network: Network) -> DispatchResult:
        """Return the base dispatch as a result that carries nothing but angles and outputs."""
        nothing = no_solution(
            network,
            formulation="base",
            status=SolveStatus.OPTIMAL,
            message="",
            solver="",
            solver_seconds=0.0,
            total_seconds=0.0,
        )
        if self.angle is None or self.output is None:
            raise ValueError("these losses are given by delivery factors, not by a base dispatch")
        return replace(nothing, p=self.output, point=replace(nothing.point, angle=self.angle))


WITH_VOLTAGES = ("ac", "soc")
"""Formulations whose operating points have voltages, the better one first."""

LossKind = Literal["own", "table", "frozen"]


@dataclass(frozen=True, kw_only=True)
class LossSetting:
    """Where the losses of `dc-loss` come from, as recorded in the manifest.

    Attributes
    ----------
    kind
        ``"own"``: those of its own flows (convex); ``"table"``: the scenario's delivery factors; ``"frozen"``: the
        operating points of another run.
    source
        Name of that run's scenario and formulation, and of the run that voltages were taken from.
    age_hours
        How much older than the interval the operating point is [h].
    """

    kind: LossKind = "own"
    source: str = ""
    age_hours: float = 0.0


class LossSource(Protocol):
    """Gives each interval its losses."""

    @property
    def setting(self) -> LossSetting:
        """What is recorded in the manifest."""
        ...

    def at(self, position: int) -> GivenLosses:
        """Return what the interval at a position takes as given."""
        ...


class FactorTable:
    """The scenario's own table of delivery factors.

    Raises
    ------
    DataError
        When a bus has no factor in some interval; every gap is named.
    """

    setting = LossSetting(kind="table", source="delivery_factors")

    def __init__(self, scenario: Scenario) -> None:
        table = scenario.tables["delivery_factors"]
        if table.empty:
            raise DataError("the scenario has no table delivery_factors to take losses from")
        wide = table.pivot_table(index="interval_start", columns="bus", values="delivery_factor", aggfunc="last")
        wide = wide.reindex(index=scenario.interval_starts, columns=list(scenario.network.buses))
        gaps = wide.isna().sum()
        if gaps.any():
            raise DataError(
                "delivery_factors does not cover every bus in every interval",
                [
                    Fault(table="delivery_factors", column=str(bus), message=f"no factor in {count} interval(s)")
                    for bus, count in gaps[gaps > 0].items()
                ],
            )
        self._factors = wide.to_numpy(float)

    def at(self, position: int) -> GivenLosses:
        """Return the factors of one interval."""
        return GivenLosses(delivery_factor=self._factors[position])


class FrozenPoints:
    """Operating points of another run, possibly some hours old.

    Parameters
    ----------
    run
        Run folder with a solution for each interval, ``age`` earlier.
    formulation
        Whose operating points; by default the last of the ladder that the run holds.
    age
        How much older than the interval the operating point is.
    """

    def __init__(
        self,
        scenario: Scenario,
        run: RunFolder,
        *,
        formulation: str | None = None,
        age: pd.Timedelta | None = None,
    ) -> None:
        self._age = pd.Timedelta(0) if age is None else age
        solves = run.table("solves", columns=["formulation", "status"])
        held = [name for name in FORMULATIONS if (solves["formulation"] == name).any()]
        if not held or (formulation is not None and formulation not in held):
            raise DataError(f"{run.path} has no solves of {formulation or 'any formulation'} to freeze losses at")
        chosen = formulation or held[-1]
        self.setting = LossSetting(
            kind="frozen",
            source=f"{run.manifest['scenario']['name']}, {chosen}",
            age_hours=self._age / pd.Timedelta(hours=1),
        )
        network = scenario.network
        points = run.table("operating_point", formulation=chosen)
        outputs = run.table("dispatch", formulation=chosen)
        self._angles = _wide(points, "bus", "angle_deg", network.buses)
        self._outputs = _wide(outputs, "resource", "mw", network.resources).fillna(0.0)
        if self._angles.isna().all(axis=1).any() or not set(network.buses) <= set(points["bus"]):
            raise DataError(f"{run.path} was made on another network: some buses have no angle there")
        self._starts = scenario.interval_starts
        self._base_mva = network.base_mva

    def covers(self, position: int) -> bool:
        """Return whether there is an operating point for the interval."""
        return self._starts[position] - self._age in self._angles.index

    def at(self, position: int) -> GivenLosses:
        """Return the base dispatch of one interval.

        Raises
        ------
        DataError
            When the run holds no operating point of that age.
        """
        when = self._starts[position] - self._age
        if when not in self._angles.index:
            raise DataError(
                f"there is no operating point of {when.isoformat()} to freeze the losses of "
                f"{self._starts[position].isoformat()} at ({self.setting.source})"
            )
        return GivenLosses(
            angle=np.deg2rad(self._angles.loc[when].to_numpy(float)),
            output=self._outputs.loc[when].to_numpy(float) / self._base_mva,
            same_interval=self._age == pd.Timedelta(0),
        )


class VoltageProfiles:
    """Losses at the voltages of another run's operating points, whatever else they are made of.

    Parameters
    ----------
    run
        Run folder with a solution of each interval under ``soc`` or ``ac``.
    losses
        Where the losses come from besides; the formulation's own flows by default.
    formulation
        Whose voltages; ``ac`` where the run holds it.

    Raises
    ------
    DataError
        When the run holds no formulation with voltages, or another network.
    """

    def __init__(
        self, scenario: Scenario, run: RunFolder, losses: LossSource | None = None, *, formulation: str | None = None
    ) -> None:
        solved = set(run.table("solves", columns=["formulation"])["formulation"])
        held = [name for name in WITH_VOLTAGES if name in solved]
        if not held or (formulation is not None and formulation not in held):
            raise DataError(
                f"{run.path} has no solves of {formulation or ' or '.join(WITH_VOLTAGES)} to take voltages from"
            )
        chosen = formulation or held[0]
        setting = LossSetting() if losses is None else losses.setting
        told = f"voltages of {run.manifest['scenario']['name']}, {chosen}"
        self.setting = replace(setting, source=f"{setting.source}; {told}" if setting.source else told)
        self._losses = losses
        self._starts = scenario.interval_starts
        points = run.table("operating_point", columns=["interval_start", "bus", "v_pu"], formulation=chosen)
        if not set(scenario.network.buses) <= set(points["bus"]):
            raise DataError(f"{run.path} was made on another network: some buses have no voltage there")
        # A bus without a voltage is dead there: no branch at it carries anything.
        self._voltages = _wide(points, "bus", "v_pu", scenario.network.buses).fillna(1.0)

    def at(self, position: int) -> GivenLosses:
        """Return what the interval at a position takes as given.

        Raises
        ------
        DataError
            When the run has no solution of the interval.
        """
        when = self._starts[position]
        if when not in self._voltages.index:
            raise DataError(f"there are no voltages of {when.isoformat()} ({self.setting.source})")
        given = GivenLosses() if self._losses is None else self._losses.at(position)
        return replace(given, voltage=self._voltages.loc[when].to_numpy(float))


def _wide(frame: pd.DataFrame, key: str, value: str, names: tuple[str, ...]) -> pd.DataFrame:
    return frame.pivot(index="interval_start", columns=key, values=value).reindex(columns=list(names))
