"""What the pictures draw, asserted on their traces."""

from __future__ import annotations

import numpy as np
import pytest

from lmpgap.report.figures.base import picture
from lmpgap.report.figures.curves import duration_curve, duration_pairs, hour_profile
from lmpgap.report.figures.evidence import account_stakes, factor_scatter, loading_sweep
from lmpgap.report.figures.places import heatmap, heatmap_order, network_map, scale_bound, sign_symbols
from lmpgap.report.figures.reasons import PARTS, hub_components, ladder, waterfall
from lmpgap.report.figures.series import binding_strip, shadow_timeline, verdict_strip
from lmpgap.report.palette import DARK, LIGHT, diverging
from lmpgap.report.pictures import make_pictures, opening_choice
from lmpgap.report.view import WeeklyView
from tests.report.synthetic import SyntheticRun


def test_map_tells_the_sign_by_hue_and_by_shape(view: WeeklyView) -> None:
    _, hour, _ = opening_choice(view)
    figure = network_map(view, hour)
    buses = figure.data[1]
    values = view.cube.difference("dc", "ac")[:, hour]
    np.testing.assert_allclose(buses.marker.color, values, atol=1e-5)
    shapes = np.array(buses.marker.symbol)
    assert (shapes[values > 0.05] == "triangle-up").all()
    assert (shapes[values < -0.05] == "triangle-down").all()
    assert (buses.marker.cmin, buses.marker.cmid) == (-buses.marker.cmax, 0.0)
    assert buses.marker.cmax == pytest.approx(scale_bound(view.cube.difference("dc", "ac")))


def test_small_differences_are_drawn_as_none() -> None:
    values = np.array([0.04, -0.04, 0.06, -0.06, np.nan], dtype=np.float32)
    assert sign_symbols(values) == ["circle", "circle", "triangle-up", "triangle-down", "circle"]


def luminance(colour: str) -> float:
    """Relative luminance, Web Content Accessibility Guidelines 2.1."""
    channels = [int(colour[i : i + 2], 16) / 255 for i in (1, 3, 5)]
    linear = [c / 12.92 if c <= 0.03928 else ((c + 0.055) / 1.055) ** 2.4 for c in channels]
    return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]


def contrast(one: str, two: str) -> float:
    light, dark = sorted((luminance(one), luminance(two)), reverse=True)
    return (light + 0.05) / (dark + 0.05)


@pytest.mark.parametrize("palette", [LIGHT, DARK], ids=["light", "dark"])
def test_texts_and_signs_stand_out_from_the_paper(palette: dict[str, str]) -> None:
    assert contrast(palette["ink"], palette["paper"]) >= 7.0
    assert contrast(palette["soft"], palette["paper"]) >= 4.5
    for key in ("above_2", "below_2", "dc", "dc-loss", "soc", "ac"):
        assert contrast(palette[key], palette["paper"]) >= 3.0, key


def as_seen_without(colour: str, kind: str) -> np.ndarray:
    """Return linear RGB as a dichromat sees it; matrices of Vienot, Brettel and Mollon, 1999."""
    rgb = np.array([(int(colour[i : i + 2], 16) / 255) ** 2.2 for i in (1, 3, 5)])
    matrix = {
        "red": [[0.11238, 0.88762, 0.0], [0.11238, 0.88762, 0.0], [0.00401, -0.00401, 1.0]],
        "green": [[0.29275, 0.70725, 0.0], [0.29275, 0.70725, 0.0], [-0.02234, 0.02234, 1.0]],
    }[kind]
    return np.asarray(matrix) @ rgb


@pytest.mark.parametrize("palette", [LIGHT, DARK], ids=["light", "dark"])
@pytest.mark.parametrize("kind", ["red", "green"])
def test_both_hues_differ_for_the_colour_blind(palette: dict[str, str], kind: str) -> None:
    for step in (1, 2, 3):
        below, above = (as_seen_without(palette[f"{side}_{step}"], kind) for side in ("below", "above"))
        assert np.abs(below - above).max() > 0.15


def test_every_colour_has_one_light_and_one_dark_version() -> None:
    """The page finds the dark version by the light one, so no light colour may stand for two keys."""
    assert LIGHT.keys() == DARK.keys()
    assert len(set(LIGHT.values())) == len(LIGHT)
    assert [place for place, _ in diverging()] == sorted(place for place, _ in diverging())


def test_heatmap_rows_follow_zone_and_size(view: WeeklyView) -> None:
    figure = heatmap(view)
    order = heatmap_order(view)
    np.testing.assert_array_equal(figure.data[0].z, view.cube.difference("dc", "ac")[order])
    zones = [view.nodes.zone[bus] for bus in order]
    assert zones == sorted(zones)
    assert figure.data[0].zmid == 0.0


def test_duration_curves_fall_from_the_largest_to_the_smallest(view: WeeklyView) -> None:
    figure = duration_curve(view)
    pairs = duration_pairs(view)
    assert [trace.name for trace in figure.data] == [f"ac less {pair.base}" for pair in pairs]
    for trace, pair in zip(figure.data, pairs, strict=True):
        assert (np.diff(trace.y) <= 1e-6).all()
        assert trace.y[0] == pytest.approx(abs(pair.largest), rel=1e-5)


def test_hour_profile_matches_the_table_of_differences(run: SyntheticRun, view: WeeklyView) -> None:
    table = run.tables["differences"].query("base == 'dc' and against == 'ac'")
    ending = table["interval_start"].dt.tz_convert("America/Boise").dt.hour + 1
    expected = table["difference"].abs().groupby(ending).mean()
    bars = hour_profile(view).data[0]
    np.testing.assert_allclose(bars.x, expected.index)
    np.testing.assert_allclose(bars.y, expected, rtol=1e-4)


def test_waterfall_climbs_from_one_price_to_the_other(view: WeeklyView) -> None:
    bus, hour, _ = opening_choice(view)
    steps, ends, _ = waterfall(view, bus, hour).data
    assert list(steps.x) == list(PARTS)
    assert ends.y[0] + np.sum(steps.y) == pytest.approx(ends.y[1], abs=1e-3)
    np.testing.assert_allclose(
        np.asarray(steps.base, dtype=float), ends.y[0] + np.r_[0, np.cumsum(steps.y)[:-1]], rtol=1e-5
    )
    rising = np.array(steps.y) >= 0
    assert {colour for colour, up in zip(steps.marker.color, rising, strict=True) if up} <= {LIGHT["above_2"]}
    assert {colour for colour, up in zip(steps.marker.color, rising, strict=True) if not up} <= {LIGHT["below_2"]}


def test_ladder_stacks_the_mean_size_of_each_driver(run: SyntheticRun, view: WeeklyView) -> None:
    figure = ladder(view)
    assert list(figure.data[0].y) == ["dc → dc-loss", "dc-loss → soc", "soc → ac"]
    drivers = run.tables["drivers"].query("base == 'soc' and against == 'ac'")
    expected = drivers["amount"].abs().groupby(drivers["driver"]).sum() / (12 * 169)
    shown = {trace.name: trace.x[2] for trace in figure.data}
    for driver, value in expected.items():
        name = driver.replace("in base", "before").replace("in against", "after")
        assert shown[name] == pytest.approx(value, abs=0.005), driver


def test_hub_bars_hold_every_hub_and_price_set(view: WeeklyView) -> None:
    figure = hub_components(view)
    assert [trace.name for trace in figure.data] == ["congestion", "loss", "reactive"]
    assert len(figure.data[0].x) == 2 * 5
    place = list(zip(*figure.data[0].y, strict=True)).index(("Ridge hub", "ac"))
    assert figure.data[1].x[place] == pytest.approx(view.hubs.means["ac"]["loss"][1], rel=1e-5)


def test_binding_strip_has_one_mark_per_row_of_the_table(run: SyntheticRun, view: WeeklyView) -> None:
    figure = binding_strip(view, 3)
    counts = run.tables["constraints"].groupby("formulation").size()
    assert {trace.name: len(trace.x) for trace in figure.data} == counts.to_dict()
    assert figure.layout.shapes[0].x0 == 3


def test_shadow_timeline_shows_one_constraint_under_each_formulation(view: WeeklyView) -> None:
    figure = shadow_timeline(view, 1, 0)
    for trace in figure.data:
        np.testing.assert_array_equal(trace.y, view.constraints.shadow[trace.name][1])
    assert len({trace.line.dash for trace in figure.data}) == 4


def test_verdict_strip_has_one_mark_per_solve_and_crosses_what_may_not_be_used(view: WeeklyView) -> None:
    figure = verdict_strip(view, 0)
    assert sum(len(trace.x) for trace in figure.data) == 4 * 169
    symbols = {trace.name: trace.marker.symbol for trace in figure.data}
    assert symbols["not a price"] == symbols["uncertified"] == "x-thin"
    assert "x-thin" not in (symbols["exact"], symbols["close"], symbols["certified"])


def test_account_marks_are_hollow_where_the_interval_holds_zero(view: WeeklyView) -> None:
    trace = account_stakes(view).data[0]
    for account, mark, low, high in zip(
        view.accounts, trace.marker.symbol, trace.error_x.arrayminus, trace.error_x.array, strict=True
    ):
        assert (mark == "circle-open") == (account.low <= 0 <= account.high)
        assert (low, high) == (
            pytest.approx(account.amount - account.low, rel=1e-5),
            pytest.approx(account.high - account.amount, rel=1e-5),
        )


def test_factor_scatter_sets_stale_points_apart(view: WeeklyView) -> None:
    assert view.factors is not None
    figure = factor_scatter(view, view.factors)
    assert len(figure.data[2].x) == int(view.factors.stale.sum())
    assert figure.data[0].x[0] == figure.data[0].y[0]


def test_sweep_has_one_line_per_formulation_but_ac(view: WeeklyView) -> None:
    assert view.sweep is not None
    figure = loading_sweep(view, view.sweep)
    assert [trace.name for trace in figure.data] == ["dc", "dc-loss", "soc"]
    assert (np.diff(figure.data[0].y) > 0).all()


def test_figures_are_kept_in_single_precision(view: WeeklyView) -> None:
    for item in make_pictures(view).values():
        for trace in item.figure.data:
            for key in ("x", "y", "z", "base"):
                values = getattr(trace, key, None) if key in trace else None
                if isinstance(values, np.ndarray) and values.dtype.kind == "f":
                    assert values.dtype == np.float32, (item.slot, key)


def test_every_picture_has_words_and_a_table(view: WeeklyView) -> None:
    pictures = make_pictures(view)
    assert set(pictures) == {
        "map", "heatmap", "duration", "profile", "waterfall", "ladder", "hubs", "binding", "shadow", "losses",
        "factors", "sweep", "stakes", "verdicts",
    }  # fmt: skip
    for item in pictures.values():
        assert item.alternative
        assert item.reading
        assert item.key_figures.rows
        for row in item.key_figures.rows:
            assert len(row) == len(item.key_figures.columns) == len(item.key_figures.numeric)


def test_no_picture_animates_or_shows_the_vendor(view: WeeklyView) -> None:
    assert picture(300).layout.template.layout.to_plotly_json() == {}
    for item in make_pictures(view).values():
        assert not item.figure.frames
        assert item.figure.layout.updatemenus == ()
