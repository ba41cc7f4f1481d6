"""What a run has to solve: settings that one folder keeps, keys per solve, and chunks of intervals."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import asdict, dataclass, field, replace
from typing import Any

import numpy as np

from lmpgap.dispatch.names import FORMULATIONS
from lmpgap.errors import LmpgapError
from lmpgap.runs.fingerprint import fingerprint
from lmpgap.runs.given_losses import GivenLosses, LossSetting, LossSource
from lmpgap.scenario.network import FloatArray, IntervalInputs
from lmpgap.scenario.scenario import Scenario
from lmpgap.scenario.settings import DcConvention, Penalties, Reference
from lmpgap.tolerances import DEFAULT_TOLERANCES, Tolerances

SOLVE_VERSION = 1
"""Raised whenever a change of code changes results, so that old solves are not taken for new ones."""

_CHUNK_INTERVALS = 24
_CHUNK_PRICES = 400_000
"""A chunk is at most a day, and less where that would be more than this many price rows."""

_ROUNDS = 4
"""With several workers, each gets at least so many chunks."""


@dataclass(frozen=True, kw_only=True)
class RunSettings:
    """Settings of the solves; one run folder keeps to one set of them.

    Attributes
    ----------
    uniqueness
        Search price intervals where prices may not be unique.
    reactive_sources
        How many sources of the reactive component to list by bus; the rest is gathered in one row.
    losses
        Where the losses of ``dc-loss`` come from.
    audit
        Put the linear dispatches on the AC grid in every interval that ``ac`` is solved for.
    repaired
        Formulations whose dispatch is also repaired: the nearest AC-feasible redispatch takes an AC solve each.
    """

    reference: Reference = field(default_factory=Reference)
    dc: DcConvention = field(default_factory=DcConvention)
    penalties: Penalties = field(default_factory=Penalties)
    tolerances: Tolerances = DEFAULT_TOLERANCES
    uniqueness: bool = True
    reactive_sources: int = 8
    losses: LossSetting = field(default_factory=LossSetting)
    audit: bool = True
    repaired: tuple[str, ...] = ("dc-loss",)

    @staticmethod
    def of(scenario: Scenario, **changes: Any) -> RunSettings:
        """Return the settings of a scenario, some of them changed."""
        settings = scenario.settings
        return RunSettings(
            **{"reference": settings.reference, "dc": settings.dc, "penalties": settings.penalties, **changes}
        )

    def as_dict(self) -> dict[str, Any]:
        """Return the settings as plain values, for the manifest."""
        return asdict(self)


def settings_differences(old: Mapping[str, Any], new: Mapping[str, Any], prefix: str = "") -> list[str]:
    """Return the settings that differ, each as ``name: old -> new``."""
    lines = []
    for name in sorted({*old, *new}):
        before, after = old.get(name), new.get(name)
        if isinstance(before, Mapping) and isinstance(after, Mapping):
            lines += settings_differences(before, after, f"{prefix}{name}.")
        elif before != after:
            lines.append(f"{prefix}{name}: {before!r} in the folder, {after!r} now")
    return lines


@dataclass(frozen=True, kw_only=True)
class PlannedInterval:
    """One interval to solve: which formulations, and the key of each."""

    position: int
    start: np.datetime64
    inputs: IntervalInputs
    weights: FloatArray
    keys: Mapping[str, str]
    given: GivenLosses | None = None


class Plan:
    """The intervals and formulations of a run, with keys that tell whether a stored solve still holds.

    Parameters
    ----------
    formulations
        Those to solve. ``ac`` starts from the cone solution, and the verdict on ``soc`` needs ``ac``: what a
        solve depends on besides its inputs is part of its key.
    positions
        Positions of the intervals; all by default.
    losses
        Source of the losses that ``dc-loss`` takes as given; its own by default.
    """

    def __init__(
        self,
        scenario: Scenario,
        formulations: tuple[str, ...],
        settings: RunSettings,
        positions: range | list[int] | None = None,
        losses: LossSource | None = None,
    ) -> None:
        unknown = [name for name in formulations if name not in FORMULATIONS]
        if unknown or not formulations:
            raise LmpgapError(
                f"{', '.join(unknown) or 'no name'} is not a formulation; choose from {', '.join(FORMULATIONS)}"
            )
        self.scenario = scenario
        self.formulations = tuple(name for name in FORMULATIONS if name in formulations)
        self.settings = settings if losses is None else replace(settings, losses=losses.setting)
        self._losses = losses
        self.positions = list(range(scenario.n_interval) if positions is None else positions)
        self._starts = scenario.starts.astype("datetime64[us]")
        self._common = fingerprint(SOLVE_VERSION, scenario.network, self.settings.as_dict())

    @property
    def covers_all(self) -> bool:
        """True when the plan has every interval of the scenario."""
        return len(self.positions) == len(self._starts)

    def start(self, position: int) -> np.datetime64:
        """Return the start of an interval, UTC."""
        return np.datetime64(self._starts[position])

    def interval(self, position: int, formulations: tuple[str, ...] | None = None) -> PlannedInterval:
        """Return one interval with the keys of the given formulations (those of the plan by default)."""
        inputs = self.scenario.inputs(position)
        weights = self.scenario.reference_weights(position)
        content = fingerprint(self._common, inputs, weights)
        chosen = self.formulations if formulations is None else formulations
        given = self._losses.at(position) if self._losses is not None and "dc-loss" in chosen else None
        return PlannedInterval(
            position=position,
            start=self._starts[position],
            inputs=inputs,
            weights=weights,
            keys={
                name: fingerprint(
                    content, name, name == "soc" and "ac" in chosen, given if name == "dc-loss" else None
                )[:32]
                for name in chosen
            },
            given=given,
        )

    def chunks(self, wanted: Mapping[int, tuple[str, ...]], workers: int) -> Iterator[list[PlannedInterval]]:
        """Yield the intervals that still have to be solved, in chunks of consecutive ones."""
        size = min(_CHUNK_INTERVALS, max(1, _CHUNK_PRICES // max(1, 4 * self.scenario.network.n_bus)))
        if workers > 1:
            # The same number of chunks for every worker, and several of them, so that all finish about together.
            rounds = max(_ROUNDS, -(-len(wanted) // (workers * size)))
            size = max(1, -(-len(wanted) // (workers * rounds)))
        positions = sorted(wanted)
        for first in range(0, len(positions), size):
            yield [self.interval(p, wanted[p]) for p in positions[first : first + size]]


def ledger_entry(start: np.datetime64, formulation: str) -> str:
    """Return the name of one solve in the ledger."""
    return f"{np.datetime_as_string(start, unit='s')}Z|{formulation}"
