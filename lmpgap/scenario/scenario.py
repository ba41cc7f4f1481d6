"""The scenario: what the analyst brought, read, validated and ready to be solved interval by interval."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field, replace
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from lmpgap.errors import Fault
from lmpgap.scenario.build import build_network, name_positions
from lmpgap.scenario.intervals import IntervalSource
from lmpgap.scenario.network import FloatArray, IntervalInputs, Network
from lmpgap.scenario.settings import ScenarioSettings
from lmpgap.scenario.times import hour_ending_labels
from lmpgap.scenario.typed import ColumnTable, TextColumn, TimeArray

if TYPE_CHECKING:
    import pandas as pd


class LazyFrames(Mapping[str, "pd.DataFrame"]):
    """Tables as data frames, made when they are asked for: pandas alone takes half a second to import."""

    def __init__(self, tables: Mapping[str, ColumnTable]) -> None:
        self._tables = tables
        self._frames: dict[str, pd.DataFrame] = {}

    def __getitem__(self, name: str) -> pd.DataFrame:
        if name not in self._frames:
            self._frames[name] = to_frame(self._tables[name])
        # A shallow copy: what a caller changes in it stays with the caller.
        return self._frames[name].copy(deep=False)

    def __iter__(self) -> Iterator[str]:
        return iter(self._tables)

    def __len__(self) -> int:
        return len(self._tables)

    def __repr__(self) -> str:
        return f"LazyFrames({', '.join(f'{name}: {table.n_row}' for name, table in self._tables.items())})"


@dataclass(frozen=True, kw_only=True, eq=False)
class Scenario:
    """A validated scenario folder.

    Attributes
    ----------
    folder
        Where it was read from.
    settings
        `scenario.toml`.
    columns
        Every table of the contract as typed numpy columns, empty ones included.
    source
        What the intervals are assembled from; use `inputs`.
    hashes
        SHA-256 of each file that was read, by file name.
    warnings
        What is allowed and yet worth a look.
    """

    folder: Path
    settings: ScenarioSettings
    columns: Mapping[str, ColumnTable]
    source: IntervalSource
    hashes: Mapping[str, str] = field(default_factory=dict)
    warnings: tuple[Fault, ...] = ()

    @cached_property
    def tables(self) -> Mapping[str, pd.DataFrame]:
        """Every table of the contract as a data frame: defaults filled in, times in UTC."""
        return LazyFrames(self.columns)

    @cached_property
    def network(self) -> Network:
        """The network, per unit."""
        return build_network(self.columns, self.settings.base_mva, name_positions(self.columns))

    @property
    def starts(self) -> TimeArray:
        """Start of each interval in UTC, shape (n_interval,)."""
        return self.source.starts

    @property
    def n_interval(self) -> int:
        """Number of intervals."""
        return self.source.n_interval

    @cached_property
    def interval_starts(self) -> pd.DatetimeIndex:
        """Start of each interval in UTC, as a time index."""
        import pandas as pd

        return pd.DatetimeIndex(self.starts, name="interval_start").tz_localize("UTC")

    def inputs(self, position: int) -> IntervalInputs:
        """Return one interval, per unit.

        Parameters
        ----------
        position
            Counted from zero along `interval_starts`.

        Raises
        ------
        IndexError
            For a position that is not one of the intervals.
        """
        return self.source.at(position)

    def reference_weights(self, position: int) -> FloatArray:
        """Return the weights of the reference in one interval, shape (n_bus,), sum 1 [-].

        Load-weighted unless `[reference]` says otherwise; where an interval has no load to weight by, all
        buses weigh the same (and reading the scenario gave a warning).
        """
        kind = self.settings.reference.kind
        if kind == "load":
            load = self.source.load.at(position)[0]
            total = float(load.sum())
            if total <= 0:
                return np.full(load.size, 1.0 / load.size)
            return np.asarray(load / total)
        weights = np.zeros(self.network.n_bus)
        if kind == "bus":
            weights[self.network.buses.index(self.settings.reference.bus)] = 1.0
            return weights
        table = self.columns["reference_weights"]
        place = {bus: i for i, bus in enumerate(self.network.buses)}
        weights[table.text("bus").positions(place)] = table.number("weight")
        return weights / float(weights.sum())

    def hour_ending(self, starts: Any) -> pd.Series[str]:
        """Return labels such as ``2026-11-01 HE02`` in the scenario's time zone for interval starts.

        Parameters
        ----------
        starts
            Times with an offset: an index, a series or a list.

        See Also
        --------
        lmpgap.scenario.times.hour_ending_labels : How the repeated hour of autumn is marked.
        """
        import pandas as pd

        index = starts.index if isinstance(starts, pd.Series) else None
        times = pd.DatetimeIndex(starts)
        if times.tz is None and times.size:
            raise ValueError("interval starts need a time zone, or they may mean two different hours")
        utc = times.tz_convert("UTC").tz_localize(None) if times.size else times
        labels = hour_ending_labels(
            utc.to_numpy().astype("M8[us]"), self.settings.time_zone, self.settings.interval_minutes
        )
        return pd.Series(labels, index=index, dtype="str", name="hour_ending")

    def with_load_factor(self, factor: float) -> Scenario:
        """Return the scenario with all fixed load, active and reactive, multiplied."""
        loads = self.columns["loads"]
        scaled = replace(
            loads,
            columns={**loads.columns, "mw": factor * loads.number("mw"), "mvar": factor * loads.number("mvar")},
        )
        load = self.source.load
        scaled_load = replace(load, static=factor * load.static, values=factor * load.values)
        return replace(self, columns={**self.columns, "loads": scaled}, source=replace(self.source, load=scaled_load))

    def __getstate__(self) -> dict[str, Any]:
        """Leave out what can be made again, so that workers receive little."""
        return {k: v for k, v in self.__dict__.items() if k not in ("tables", "interval_starts")}


def to_frame(table: ColumnTable) -> pd.DataFrame:
    """Return a table as a data frame with the columns of its definition."""
    import pandas as pd

    columns: dict[str, Any] = {}
    for name, column in table.columns.items():
        if isinstance(column, TextColumn):
            columns[name] = pd.array(list(column.values) or [""], dtype="str").take(column.codes)
        elif column.dtype.kind == "M":
            columns[name] = pd.DatetimeIndex(column).tz_localize("UTC")
        else:
            columns[name] = column
    return pd.DataFrame(columns)
