"""Losses, money balance, delivery factors posted against recomputed, hub means, loading sweep, AC audit."""

from __future__ import annotations

import numpy as np
import pandas as pd

from lmpgap.report.text import NO_VALUE, number, percent
from lmpgap.report.view.cube import COMPONENTS, LADDER, POSTED, Matrix, PriceCube
from lmpgap.report.view.hours import Hours
from lmpgap.report.view.model import FactorsView, HubView, LossesView, SweepView, Table
from lmpgap.report.view.nodes import Hubs, Nodes
from lmpgap.scenario.network import BoolArray, FloatArray
from lmpgap.tolerances import DEFAULT_TOLERANCES

MOST_POINTS = 4000
"""Points of the delivery-factor picture; more are thinned evenly."""

SMALL_ENERGY = 1.0
"""Energy components below this make an implied delivery factor mostly rounding [currency/MWh]."""


def losses_view(
    solves: pd.DataFrame, money: pd.DataFrame, cube: PriceCube, hours: Hours, currency: str, interval_hours: float
) -> LossesView:
    """Return total losses per hour and formulation, and the week's money balance."""
    series = {}
    rows = []
    for formulation in cube.formulations:
        losses = np.full(hours.n, np.nan)
        part = solves[solves["formulation"].astype(str) == formulation]
        if len(part):
            place = hours.position(part["interval_start"])
            figures = pd.to_numeric(part["losses_mw"], errors="coerce").to_numpy(dtype=float)
            losses[place[place >= 0]] = figures[place >= 0]
        series[formulation] = losses
        component = cube.get(formulation, "loss").astype(float)
        if np.isfinite(losses).any():
            rows.append(
                (
                    formulation,
                    number(float(np.nansum(losses)) * interval_hours, 0),
                    number(float(np.nanmean(losses)), 1),
                    number(float(np.nanmax(losses)), 1),
                    hours.label[int(np.nanargmax(losses))],
                    number(float(np.nanmin(component)), signed=True) if np.isfinite(component).any() else NO_VALUE,
                    number(float(np.nanmax(component)), signed=True) if np.isfinite(component).any() else NO_VALUE,
                )
            )
    return LossesView(
        losses_mw=series,
        table=Table(
            caption="Losses over the week and the range of the loss component",
            columns=(
                "Formulation",
                "Energy lost, MWh",
                "Mean, MW",
                "Largest, MW",
                "in hour",
                f"Lowest loss component, {currency}/MWh",
                "Highest",
            ),
            numeric=(False, True, True, True, False, True, True),
            rows=tuple(rows),
            note="A lossless formulation has neither losses nor a loss component.",
        ),
        money=_money_table(money, cube, currency),
    )


def _money_table(money: pd.DataFrame, cube: PriceCube, currency: str) -> Table:
    formulations = cube.formulations
    rows: list[tuple[str, ...]] = []
    if not money.empty:
        frame = money.assign(
            amount=pd.to_numeric(money["amount"], errors="coerce"), formulation=money["formulation"].astype(str)
        )
        order = frame[["basis", "item"]].astype(str).drop_duplicates()
        totals = frame.groupby([frame["basis"].astype(str), frame["item"].astype(str), "formulation"])["amount"].sum()
        for basis, item in order.itertuples(index=False):
            figures = [number(float(totals.get((basis, item, name), np.nan)), 0) for name in formulations]
            rows.append((item, basis, *figures))
    return Table(
        caption=f"Money balance of the week, {currency}",
        columns=("Item", "Split by", *formulations),
        numeric=(False, False, *(True,) * len(formulations)),
        rows=tuple(rows),
        note="Marginal losses are about twice average losses, so charging them collects more than the losses cost.",
    )


def factors_view(cube: PriceCube, findings: pd.DataFrame, nodes: Nodes, hours: Hours) -> FactorsView | None:
    """Return implied delivery factors of posted prices against those of the fullest lossy formulation.

    The implied factor is (energy + loss) / energy; hours with an energy component near zero say nothing and
    are left out.
    """
    lossy = [name for name in reversed(LADDER) if name in cube.sets and name != "dc"]
    if POSTED not in cube.sets or not lossy:
        return None
    posted = _factors(cube, POSTED)
    recomputed = _factors(cube, lossy[0])
    usable = np.isfinite(posted) & np.isfinite(recomputed)
    if not usable.any():
        return None
    bus, hour = np.nonzero(usable)
    stale = np.zeros(usable.shape, dtype=bool)
    if not findings.empty:
        part = findings[findings["kind"].astype(str) == "stale-factors"]
        row, column = nodes.position(part["node"]), hours.position(part["interval_start"])
        for one, first in zip(row.tolist(), column.tolist(), strict=True):
            if one >= 0:
                stale[one] |= _standing_still(posted[one], cube.get(POSTED, "energy")[one], first)
    if len(bus) > MOST_POINTS:
        every = np.unique(np.linspace(0, len(bus) - 1, MOST_POINTS).astype(np.int64))
        bus, hour = bus[every], hour[every]
    return FactorsView(
        recomputed_from=lossy[0],
        bus=bus.astype(np.int64),
        hour=hour.astype(np.int64),
        posted=posted[bus, hour],
        recomputed=recomputed[bus, hour],
        stale=stale[bus, hour],
    )


def _standing_still(factor: FloatArray, energy: Matrix, first: int) -> BoolArray:
    """Return the hours, from the first one on, in which a factor stays what it was, within rounding; all if none."""
    if first < 0:
        return np.ones(len(factor), dtype=bool)
    with np.errstate(divide="ignore", invalid="ignore"):
        room = 4.0 * DEFAULT_TOLERANCES.posted_rounding / np.abs(energy.astype(float)) + 1e-4
        same = np.abs(factor - factor[first]) <= room
    same[:first] = False
    moved = np.flatnonzero(~same[first:])
    if moved.size:
        same[first + int(moved[0]) :] = False
    return np.asarray(same)


def _factors(cube: PriceCube, price_set: str) -> FloatArray:
    energy = cube.get(price_set, "energy").astype(float)
    loss = cube.get(price_set, "loss").astype(float)
    safe = np.abs(energy) >= SMALL_ENERGY
    return np.asarray(np.divide(energy + loss, energy, out=np.full(energy.shape, np.nan), where=safe))


def hub_view(cube: PriceCube, hubs: Hubs, posted: pd.DataFrame) -> HubView:
    """Return the week mean of each component at each hub, over hours that the price set has.

    A hub's posted price comes from its buses where they are posted, else from what was posted for the hub itself.
    """
    means = {}
    for price_set in cube.sets:
        parts = {}
        for component in COMPONENTS:
            matrix = cube.get(price_set, component).astype(float)
            finite = np.isfinite(matrix)
            count = finite.sum(axis=1)
            mean = np.divide(
                np.where(finite, matrix, 0.0).sum(axis=1), count, out=np.full(len(matrix), np.nan), where=count > 0
            )
            parts[component] = hubs.weights @ np.where(np.isnan(mean), 0.0, mean)
            missing = (hubs.weights != 0.0) @ np.isnan(mean) > 0
            parts[component] = np.where(missing, np.nan, parts[component])
        means[price_set] = parts
    _add_posted_hubs(means, hubs, posted)
    return HubView(hubs=hubs, means=means)


def _add_posted_hubs(means: dict[str, dict[str, FloatArray]], hubs: Hubs, posted: pd.DataFrame) -> None:
    """Fill the posted means of hubs whose buses are not posted from the hubs' own posted prices, in place."""
    if POSTED not in means:
        return
    for place, hub in enumerate(hubs.name):
        own = posted[posted["node"].astype(str) == hub]
        if own.empty or np.isfinite(means[POSTED]["lmp"][place]):
            continue
        for component in COMPONENTS:
            source = "lmp" if component == "lmp" else f"{component}_component"
            means[POSTED][component][place] = own[source].mean() if source in own.columns else 0.0


def sweep_view(sweep: pd.DataFrame, currency: str) -> SweepView | None:
    """Return the loading sweep, or nothing if none was run."""
    if sweep.empty:
        return None
    frame = sweep.assign(formulation=sweep["formulation"].astype(str))
    factor = np.unique(frame["load_factor"].to_numpy(dtype=float))

    def curve(formulation: str, column: str) -> FloatArray:
        part = frame[frame["formulation"] == formulation].drop_duplicates("load_factor").set_index("load_factor")
        return pd.to_numeric(part[column], errors="coerce").reindex(factor).to_numpy(dtype=float)

    names = [name for name in LADDER if (frame["formulation"] == name).any()]
    ordered = frame.sort_values(["load_factor"], kind="stable")
    figures = ordered[["load_factor", *_SWEEP_COLUMNS]].apply(pd.to_numeric, errors="coerce").to_numpy(dtype=float)
    rows = tuple(
        (
            number(line[0]),
            formulation,
            *(number(value, places) for value, places in zip(line[1:], _PLACES, strict=True)),
        )
        for line, formulation in zip(figures, ordered["formulation"], strict=True)
    )
    return SweepView(
        factor=factor,
        price_error={name: curve(name, "price_error") for name in names},
        loss_component_error={name: curve(name, "loss_component_error") for name in names},
        table=Table(
            caption=f"Load scaled: prices, errors against ac in {currency}/MWh, cost in {currency}/h",
            columns=(
                "Load factor",
                "Formulation",
                "Mean price",
                "Price error",
                "Loss component error",
                "Cost",
                "Losses, MW",
                "Hours",
            ),
            numeric=(True, False, True, True, True, True, True, True),
            rows=rows,
        ),
    )


_SWEEP_COLUMNS = ("mean_price", "price_error", "loss_component_error", "cost", "losses_mw", "hours")
_PLACES = (2, 2, 2, 0, 1, 0)

AUDIT_WORDS = {
    "missing-power": "Power missing in the AC power flow",
    "overload": "Branch above its rating",
    "voltage": "Voltage outside its band",
    "angle": "Angle difference beyond its limit",
    "reactive": "Resource at its reactive limit",
    "output": "Resource beyond its range, making up what is missing",
    "losses": "Losses in the AC power flow",
    "angle-error": "Branch angle off by",
    "no-power-flow": "No AC power flow near the dispatch",
    "no-repair": "No AC-feasible redispatch found",
    "moved": "Power moved by the nearest repair",
    "redispatch": "Output moved by the nearest repair",
    "repair-cost": "Cost of the nearest repair over the AC optimum",
}


def audit_table(audit: pd.DataFrame, hours: Hours) -> Table:
    """Return what an AC power flow makes of the linear dispatches: count and worst case by kind of finding."""
    rows = []
    if not audit.empty:
        frame = audit.assign(
            place=hours.position(audit["interval_start"]),
            value=pd.to_numeric(audit["value"], errors="coerce"),
            limit=pd.to_numeric(audit["limit"], errors="coerce"),
        )
        frame = frame[frame["place"] >= 0]
        for (formulation, finding), part in frame.groupby(["formulation", "finding"], sort=False, observed=True):
            beyond = (part["value"] - part["limit"]).abs().where(part["limit"].notna(), part["value"].abs())
            if beyond.isna().all():
                # Told by its reason, which stands in the place of the element.
                reason, first = str(part["element"].iloc[0]), hours.label[int(part["place"].iloc[0])]
                words = AUDIT_WORDS.get(str(finding), str(finding))
                rows.append((str(formulation), words, f"{part['place'].nunique()}", reason, "", "", "", first))
                continue
            worst = part.iloc[int(np.nan_to_num(beyond.to_numpy(dtype=float), nan=-1.0).argmax())]
            limit = float(worst["limit"])
            rows.append(
                (
                    str(formulation),
                    AUDIT_WORDS.get(str(finding), str(finding)),
                    f"{part['place'].nunique()}",
                    str(worst["element"]) if pd.notna(worst["element"]) else "",
                    f"{number(float(worst['value']))} {worst['unit']}",
                    number(limit) if np.isfinite(limit) else "",
                    percent(float(worst["value"]) / limit - 1.0)
                    if str(finding) == "overload" and np.isfinite(limit) and limit
                    else "",
                    hours.label[int(worst["place"])],
                )
            )
    return Table(
        caption="AC power flow at the linear dispatch: what would happen on the grid",
        columns=("Dispatch", "Finding", "Intervals", "Worst at", "Value", "Limit", "Beyond", "in hour"),
        numeric=(False, False, True, False, True, True, True, False),
        rows=tuple(rows),
        note="The dispatch is held and the AC equations are solved; the slack is spread over the resources.",
    )
