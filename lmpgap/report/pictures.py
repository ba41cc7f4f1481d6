"""The pictures of the report by slot: figure, words, and the table that stands in for it on paper."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import plotly.graph_objects as go

from lmpgap.report.figures.curves import (
    duration_curve,
    duration_pairs,
    duration_values,
    hour_profile,
    hour_profile_values,
)
from lmpgap.report.figures.evidence import account_stakes, factor_scatter, loading_sweep
from lmpgap.report.figures.places import heatmap, network_map
from lmpgap.report.figures.reasons import PARTS, hub_components, ladder, waterfall
from lmpgap.report.figures.series import LEAST_LOSS_MW, binding_strip, losses_timeline, shadow_timeline, verdict_strip
from lmpgap.report.text import number
from lmpgap.report.view.cube import COMPONENTS
from lmpgap.report.view.model import FactorsView, Table, WeeklyView


@dataclass(frozen=True, kw_only=True)
class Picture:
    """One picture of the report.

    Attributes
    ----------
    slot
        Name by which template and script know it.
    title
        Heading.
    reading
        How to read it, in one or two sentences.
    alternative
        What it shows, for those who cannot see it.
    figure
    key_figures
        The table beside it on screen when asked for, and always on paper.
    """

    slot: str
    title: str
    reading: str
    alternative: str
    figure: go.Figure
    key_figures: Table


def opening_choice(view: WeeklyView) -> tuple[int, int, int]:
    """Return the bus, hour and constraint that the report opens with: those of the largest difference."""
    return max(view.main.worst_bus, 0), max(view.main.worst_hour, 0), 0


def make_pictures(view: WeeklyView) -> dict[str, Picture]:
    """Return every picture that the week has data for; a missing slot means there is nothing to draw."""
    bus, hour, constraint = opening_choice(view)
    pair = f"{view.main.against} less {view.main.base}"
    place, time = view.nodes.name[bus], view.hours.label[hour]
    pictures = [
        Picture(
            slot="map",
            title="The network at one hour",
            reading=(
                "Triangles up: the first price set is higher; triangles down: lower; circles: no difference worth the "
                "name. Hollow marks lie inside a price interval. Everything beyond the scale has its end colour."
                + (" Positions were worked out from the branches." if view.nodes.automatic else "")
            ),
            alternative=f"Network map of {pair} at {time}; the largest difference is at {place}.",
            figure=network_map(view, hour),
            key_figures=view.where,
        ),
        Picture(
            slot="heatmap",
            title="Every bus, every hour",
            reading=(
                "Rows are buses, columns are hours; orange above zero, blue below. "
                "Choose a cell to follow it elsewhere."
            ),
            alternative=f"Heatmap of {pair} over {view.nodes.n} buses and {view.hours.n} intervals.",
            figure=heatmap(view),
            key_figures=view.when,
        ),
        Picture(
            slot="duration",
            title="How often, how far",
            reading=(
                "The size of the difference that is reached or exceeded in a share of all bus-hours; "
                "the scale is logarithmic."
            ),
            alternative="Duration curves of the differences between price sets.",
            figure=duration_curve(view),
            key_figures=_duration_table(view),
        ),
        Picture(
            slot="profile",
            title="Hour of the day",
            reading="The mean over the week by hour ending; the repeated hour counts under its clock hour.",
            alternative=f"Mean size and mean of {pair} by hour of the day.",
            figure=hour_profile(view),
            key_figures=_profile_table(view),
        ),
        Picture(
            slot="waterfall",
            title="From one price to the other",
            reading="Each step adds the change of one component; level marks are the two prices.",
            alternative=f"Steps from the {view.main.base} to the {view.main.against} price at {place}, {time}.",
            figure=waterfall(view, bus, hour),
            key_figures=_waterfall_table(view, bus, hour),
        ),
    ]
    if view.ladder:
        pictures.append(
            Picture(
                slot="ladder",
                title="What each assumption costs",
                reading=(
                    "Each step lets one assumption fall: no losses, then no voltages or reactive power, then the "
                    "relaxation. Bars add the mean size of each driver; drivers of opposite sign both count."
                ),
                alternative="Stacked bars of the mean size of each driver for every step of the ladder.",
                figure=ladder(view),
                key_figures=_ladder_table(view),
            )
        )
    if view.hubs.hubs.name:
        pictures.append(
            Picture(
                slot="hubs",
                title="Components at hubs",
                reading="Week means beside the energy component, which the table holds.",
                alternative="Bars of the mean congestion, loss and reactive components at each hub by price set.",
                figure=hub_components(view),
                key_figures=_hub_table(view),
            )
        )
    if view.constraints.name:
        pictures += [
            Picture(
                slot="binding",
                title="Which formulations bind, and when",
                reading=(
                    "One mark per hour and formulation in which the limit holds. "
                    "Choose a mark to follow the constraint."
                ),
                alternative="Hours in which each constraint binds, by formulation.",
                figure=binding_strip(view, hour),
                key_figures=view.constraints.table,
            ),
            Picture(
                slot="shadow",
                title="Shadow price of one constraint",
                reading="Fall of cost per unit of relaxed limit and hour; zero where the limit does not bind.",
                alternative=f"Shadow price of {view.constraints.name[constraint]} over the week by formulation.",
                figure=shadow_timeline(view, constraint, hour),
                key_figures=view.constraints.table,
            ),
        ]
    if any(
        np.abs(np.nan_to_num(losses)).max(initial=0.0) >= LEAST_LOSS_MW for losses in view.losses.losses_mw.values()
    ):
        pictures.append(
            Picture(
                slot="losses",
                title="Losses over the week",
                reading="Total losses of each formulation that has them.",
                alternative="Total losses over the week by formulation.",
                figure=losses_timeline(view, hour),
                key_figures=view.losses.table,
            )
        )
    if view.factors is not None:
        pictures.append(
            Picture(
                slot="factors",
                title="Delivery factors, posted against recomputed",
                reading="Points off the diagonal settle losses at a factor that the operating point does not support.",
                alternative="Scatter of delivery factors implied by posted prices against recomputed ones.",
                figure=factor_scatter(view, view.factors),
                key_figures=_factor_table(view, view.factors),
            )
        )
    if view.sweep is not None:
        pictures.append(
            Picture(
                slot="sweep",
                title="How the error grows with load",
                reading="Every load scaled by one factor, then solved again; the scale is logarithmic.",
                alternative="Mean price error against AC by load factor and formulation.",
                figure=loading_sweep(view, view.sweep),
                key_figures=view.sweep.table,
            )
        )
    if view.accounts:
        pictures.append(
            Picture(
                slot="stakes",
                title="Loss component by account",
                reading="The point is the amount, the line its interval; only an interval clear of zero is a claim.",
                alternative="Amount at stake and its interval for each account.",
                figure=account_stakes(view),
                key_figures=view.stakes,
            )
        )
    if view.trust.words:
        pictures.append(
            Picture(
                slot="verdicts",
                title="Verdict of every solve",
                reading="Circles may be used; crosses may not, and their prices carry a mark wherever they are shown.",
                alternative="Verdict of each solve over the week by formulation.",
                figure=verdict_strip(view, hour),
                key_figures=view.trust.summary,
            )
        )
    return {picture.slot: picture for picture in pictures}


def _duration_table(view: WeeklyView) -> Table:
    shares = (1, 5, 10, 25, 50)
    rows = []
    for pair in duration_pairs(view):
        values = duration_values(view, pair)
        rows.append(
            (
                f"{pair.against} less {pair.base}",
                number(pair.mean_absolute),
                number(abs(pair.largest)),
                *(number(float(values[2 * share])) for share in shares),
                f"{pair.not_unique:,}",
            )
        )
    return Table(
        caption=f"Size of the difference, {view.currency}/MWh",
        columns=("Pair", "Mean", "Largest", *(f"in {share} %" for share in shares), "Not unique, bus-hours"),
        numeric=(False, *(True,) * (len(shares) + 3)),
        rows=tuple(rows),
        note="Reached or exceeded in that share of bus-hours.",
    )


def _profile_table(view: WeeklyView) -> Table:
    """Return the profile in three blocks of hours side by side, so that it fits beside its picture on paper."""
    endings, size, mean = hour_profile_values(view, view.main)
    cells = [
        (f"{int(ending):02d}", number(float(one)), number(float(two), signed=True))
        for ending, one, two in zip(endings, size, mean, strict=True)
    ]
    depth = -(-len(cells) // 3)
    blank = ("", "", "")
    rows = tuple(
        tuple(
            text
            for block in range(3)
            for text in (cells[block * depth + row] if block * depth + row < len(cells) else blank)
        )
        for row in range(depth)
    )
    return Table(
        caption=f"{view.main.against} less {view.main.base} by hour ending (HE), {view.currency}/MWh",
        columns=("HE", "Mean size", "Mean") * 3,
        numeric=(True,) * 9,
        rows=rows,
    )


def _waterfall_table(view: WeeklyView, bus: int, hour: int) -> Table:
    base, against = view.main.base, view.main.against
    rows = []
    for part in (*PARTS, "lmp"):
        one = float(view.cube.get(base, part)[bus, hour])
        two = float(view.cube.get(against, part)[bus, hour])
        rows.append(
            (part if part != "lmp" else "whole price", number(one), number(two), number(two - one, signed=True))
        )
    return Table(
        caption=f"{view.nodes.name[bus]}, {view.hours.label[hour]}, {view.currency}/MWh",
        columns=("Component", base, against, "Change"),
        numeric=(False, True, True, True),
        rows=tuple(rows),
    )


def _ladder_table(view: WeeklyView) -> Table:
    rows = tuple(
        (
            f"{step.base} → {step.against}",
            number(step.mean_absolute),
            number(step.bias, signed=True),
            number(step.largest, signed=True),
            *(number(step.by_component[part]) for part in PARTS),
        )
        for step in view.ladder
    )
    return Table(
        caption=f"Steps of the ladder, {view.currency}/MWh",
        columns=("Step", "Mean size", "Mean", "Largest", *PARTS),
        numeric=(False, *(True,) * (3 + len(PARTS))),
        rows=rows,
        note="Component columns hold the mean size of that component's change.",
    )


def _hub_table(view: WeeklyView) -> Table:
    rows = tuple(
        (hub, price_set, *(number(float(view.hubs.means[price_set][part][place])) for part in COMPONENTS))
        for place, hub in enumerate(view.hubs.hubs.name)
        for price_set in view.cube.sets
    )
    return Table(
        caption=f"Week means at hubs, {view.currency}/MWh",
        columns=("Hub", "Price set", "Whole price", *PARTS),
        numeric=(False, False, *(True,) * len(COMPONENTS)),
        rows=rows,
    )


def _factor_table(view: WeeklyView, factors: FactorsView, rows: int = 12) -> Table:
    gap = factors.posted - factors.recomputed
    count = np.bincount(factors.bus, minlength=view.nodes.n)
    mean = np.divide(
        np.bincount(factors.bus, weights=gap, minlength=view.nodes.n),
        count,
        out=np.zeros(view.nodes.n),
        where=count > 0,
    )
    order = np.argsort(-np.abs(mean), kind="stable")[:rows]
    body = []
    for bus in order:
        if not count[bus]:
            continue
        own = factors.bus == bus
        body.append(
            (
                view.nodes.name[bus],
                number(float(factors.posted[own].mean()), 4),
                number(float(factors.recomputed[own].mean()), 4),
                number(float(mean[bus]), 4, signed=True),
                "yes" if factors.stale[own].any() else "",
            )
        )
    return Table(
        caption="Delivery factors, week means at the buses furthest off",
        columns=("Bus", "Implied by posted", f"Recomputed ({factors.recomputed_from})", "Gap", "Found stale"),
        numeric=(False, True, True, True, False),
        rows=tuple(body),
    )
