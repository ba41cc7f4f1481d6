"""Colours and marks of the report: two hues around zero, and a mark of its own for each formulation.

The two hues (blue below zero, orange above) differ in lightness and in hue for every common kind of colour
blindness, and no statement rests on colour alone: signs have marker shapes, formulations have dashes and
symbols. Each colour exists in a light and a dark version under the same key; figures are made in the light
one and the page exchanges it by key.
"""

from __future__ import annotations

LIGHT: dict[str, str] = {
    "ink": "#1b2330",
    "soft": "#5c6675",
    "rule": "#dcd7cc",
    "grid": "#e9e5dc",
    "paper": "#fdfcf9",
    "middle": "#ece8df",
    "below_3": "#123f73",
    "below_2": "#2f6cab",
    "below_1": "#93b7dc",
    "above_1": "#f0b98a",
    "above_2": "#cc6a1e",
    "above_3": "#853a05",
    "level_0": "#f1ede4",
    "level_1": "#c9bfd6",
    "level_2": "#8c78ab",
    "level_3": "#412b63",
    "wire": "#b9b3a6",
    "dc": "#8a8273",
    "dc-loss": "#1d7f7a",
    "soc": "#7a4fa3",
    "ac": "#1b2331",
    "posted": "#b0820f",
    "energy": "#9aa1ab",
    "congestion": "#355f8c",
    "loss": "#c98a2b",
    "reactive": "#8d4c78",
    "other": "#c4beb2",
}

DARK: dict[str, str] = {
    "ink": "#eceff4",
    "soft": "#a3adbb",
    "rule": "#353c47",
    "grid": "#2a303a",
    "paper": "#14181f",
    "middle": "#2d333d",
    "below_3": "#a9d0fb",
    "below_2": "#5d9fe0",
    "below_1": "#335d8c",
    "above_1": "#8a5426",
    "above_2": "#e58a3c",
    "above_3": "#ffd0a3",
    "level_0": "#232831",
    "level_1": "#4d4163",
    "level_2": "#8f7bb5",
    "level_3": "#dccdf5",
    "wire": "#4b5360",
    "dc": "#b3aa98",
    "dc-loss": "#4fc1ba",
    "soc": "#b48fe0",
    "ac": "#eceff5",
    "posted": "#e0b23f",
    "energy": "#7f8894",
    "congestion": "#76a6da",
    "loss": "#e3ad57",
    "reactive": "#cf8ab9",
    "other": "#59606b",
}

DASH: dict[str, str] = {"dc": "dot", "dc-loss": "dash", "soc": "dashdot", "ac": "solid", "posted": "longdash"}
"""Line style of each price set."""

SYMBOL: dict[str, str] = {
    "dc": "circle-open",
    "dc-loss": "diamond-open",
    "soc": "square-open",
    "ac": "circle",
    "posted": "star-triangle-up",
}
"""Marker of each price set."""

ABOVE, BELOW, LEVEL = "triangle-up", "triangle-down", "circle"
"""Marker by sign: above zero, below zero, within the dead band around zero."""

DEAD_BAND = 0.05
"""Differences smaller than this are drawn as no difference [currency/MWh]; the width at which a price
interval counts as not unique."""


def diverging() -> list[list[float | str]]:
    """Return the two-hue scale centred on zero, as plotly wants it."""
    keys = ("below_3", "below_2", "below_1", "middle", "above_1", "above_2", "above_3")
    places = (0.0, 0.2, 0.38, 0.5, 0.62, 0.8, 1.0)
    return [[place, LIGHT[key]] for place, key in zip(places, keys, strict=True)]


def sequential() -> list[list[float | str]]:
    """Return the one-hue scale for a price itself."""
    keys = ("level_0", "level_1", "level_2", "level_3")
    return [[place, LIGHT[key]] for place, key in zip((0.0, 0.35, 0.7, 1.0), keys, strict=True)]


def colour(price_set: str) -> str:
    """Return the light colour of a price set or component; a neutral one for names that are unknown."""
    return LIGHT.get(price_set, LIGHT["other"])
