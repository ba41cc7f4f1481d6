"""The typed view model: everything the weekly report shows, worked out and ordered, before any drawing."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from lmpgap.report.view.cube import Matrix, PriceCube
from lmpgap.report.view.hours import Hours
from lmpgap.report.view.nodes import Hubs, Nodes
from lmpgap.scenario.network import BoolArray, FloatArray, IntArray


@dataclass(frozen=True, kw_only=True)
class Table:
    """A table of finished texts.

    Attributes
    ----------
    caption
        What the rows are.
    columns
    numeric
        True for columns of figures, which are aligned at their end.
    rows
    note
        What a reader should know about the rows, such as how many were left out.
    chooses
        Bus and hour that a row stands for, -1 where it stands for none; empty if rows cannot be chosen.
    """

    caption: str
    columns: tuple[str, ...]
    numeric: tuple[bool, ...]
    rows: tuple[tuple[str, ...], ...]
    note: str = ""
    chooses: tuple[tuple[int, int], ...] = ()


@dataclass(frozen=True, kw_only=True)
class Tile:
    """One headline figure."""

    label: str
    figure: str
    note: str


@dataclass(frozen=True, kw_only=True)
class PairView:
    """How far one price set lies from another, ``against`` minus ``base``.

    Attributes
    ----------
    mean_absolute, typical_95, largest, bias
        Over all buses and hours that both price [currency/MWh]; ``largest`` keeps its sign.
    worst_bus, worst_hour
        Positions of the largest difference; -1 if there is none.
    not_unique
        Number of bus-hours whose difference lies inside a price interval.
    counted
        Number of bus-hours that both price.
    by_component
        Mean absolute difference of each component [currency/MWh].
    drivers
        Mean absolute amount of each kind of driver [currency/MWh]; empty if the pair was not explained.
    """

    base: str
    against: str
    mean_absolute: float
    typical_95: float
    largest: float
    bias: float
    worst_bus: int
    worst_hour: int
    not_unique: int
    counted: int
    by_component: Mapping[str, float]
    drivers: Mapping[str, float]


@dataclass(frozen=True, kw_only=True)
class DriverBlock:
    """Drivers of one pair, cell by cell.

    Attributes
    ----------
    base, against
    kinds : (n_key,)
        Driver of each key.
    constraints : (n_key,)
        Constraint of each key; empty where the driver has none.
    start : (n_cell + 1,)
        Where each cell's rows begin; cells are bus x hour, hour running fastest.
    key : (n_row,)
    amount : (n_row,)
        [currency/MWh]; the rows of a cell add up to its difference.
    complete
        False when only the largest differences were kept to hold the page small.
    kept_cells
        Number of cells with rows.
    """

    base: str
    against: str
    kinds: tuple[str, ...]
    constraints: tuple[str, ...]
    start: NDArray[np.uint32]
    key: NDArray[np.uint16]
    amount: NDArray[np.float32]
    complete: bool
    kept_cells: int


@dataclass(frozen=True, kw_only=True)
class ConstraintsView:
    """Binding constraints over the week.

    Attributes
    ----------
    name, kind, unit : (n_constraint,)
        Ordered by the largest sum of shadow prices over hours and formulations.
    shadow : by formulation (n_constraint, n_hour)
        Shadow price [currency per unit and hour]; 0 where the constraint does not bind.
    at_penalty : by formulation (n_constraint, n_hour)
    table
    left_out
        Number of constraints beyond those shown.
    """

    name: tuple[str, ...]
    kind: tuple[str, ...]
    unit: tuple[str, ...]
    shadow: Mapping[str, Matrix]
    at_penalty: Mapping[str, BoolArray]
    table: Table
    left_out: int


@dataclass(frozen=True, kw_only=True)
class TrustView:
    """Verdict of every solve.

    Attributes
    ----------
    words
        Verdicts that occur.
    code : by formulation (n_hour,)
        Position in ``words``; -1 where there is no solve.
    summary, residuals, left_out, uniqueness
        Tables for the trust section.
    """

    words: tuple[str, ...]
    code: Mapping[str, IntArray]
    summary: Table
    residuals: Table
    left_out: Table
    uniqueness: Table


@dataclass(frozen=True, kw_only=True)
class LossesView:
    """Losses and what the loss component rests on.

    Attributes
    ----------
    losses_mw : by formulation (n_hour,)
        Total losses [MW].
    table
    money
        Money balance; no rows without one.
    """

    losses_mw: Mapping[str, FloatArray]
    table: Table
    money: Table


@dataclass(frozen=True, kw_only=True)
class FactorsView:
    """Delivery factors, posted against recomputed, one point per bus and sampled hour.

    Attributes
    ----------
    recomputed_from
        The price set behind the recomputed factors.
    bus, hour : (n_point,)
    posted, recomputed : (n_point,)
        [-], on the components' own reference.
    stale : (n_point,)
        True where the posted-price checks found the factor stale.
    """

    recomputed_from: str
    bus: IntArray
    hour: IntArray
    posted: FloatArray
    recomputed: FloatArray
    stale: BoolArray


@dataclass(frozen=True, kw_only=True)
class HubView:
    """Week means at hubs: by price set and component, (n_hub,) [currency/MWh]."""

    hubs: Hubs
    means: Mapping[str, Mapping[str, FloatArray]]


@dataclass(frozen=True, kw_only=True)
class SweepView:
    """Divergence against loading: by formulation (n_factor,) figures."""

    factor: FloatArray
    price_error: Mapping[str, FloatArray]
    loss_component_error: Mapping[str, FloatArray]
    table: Table


@dataclass(frozen=True, kw_only=True)
class AccountTotal:
    """Money of one account over the week [currency], with its interval.

    ``material`` is ``None`` where no threshold was applied.
    """

    account: str
    amount: float
    low: float
    high: float
    material: bool | None = None


@dataclass(frozen=True, kw_only=True)
class WeeklyView:
    """Everything the weekly report shows.

    Attributes
    ----------
    title, currency, time_zone
    sentences
        What happened this week, in words with figures.
    tiles
        Headline figures.
    nodes, hours, cube, hubs
        What the pictures are drawn from.
    pairs
        Differences between price sets, the main one first.
    main
        The pair that the report opens with.
    ladder
        One pair per step from the barest to the fullest formulation.
    zones
        Day-to-day changes of zone prices and their weight drift.
    tracking
        How well each formulation tracks the alternating-current prices.
    inside : by (base, against), positions
        Cells (bus x hour, hour running fastest) whose difference lies inside a price interval.
    drivers
        Drivers of the explained pairs.
    """

    title: str
    currency: str
    time_zone: str
    sentences: tuple[str, ...]
    tiles: tuple[Tile, ...]
    nodes: Nodes
    hours: Hours
    cube: PriceCube
    hubs: HubView
    pairs: tuple[PairView, ...]
    main: PairView
    ladder: tuple[PairView, ...]
    tracking: Table
    inside: Mapping[tuple[str, str], NDArray[np.uint32]]
    drivers: tuple[DriverBlock, ...]
    stakes: Table
    exposure: Table
    accounts: tuple[AccountTotal, ...]
    where: Table
    when: Table
    why: Table
    constraints: ConstraintsView
    losses: LossesView
    factors: FactorsView | None
    zones: Table
    audit: Table
    findings: Table
    settlement: Table
    deadlines: Table
    rights: Table
    settlement_notes: tuple[str, ...]
    sweep: SweepView | None
    trust: TrustView
    conventions: tuple[tuple[str, str], ...]
    cautions: tuple[str, ...]
    inputs: Table
    produced_by: tuple[tuple[str, str], ...]
