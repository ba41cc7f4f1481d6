"""What the page's script reads: prices, drivers and figures, each embedded once."""

from __future__ import annotations

import json
from typing import Any

import numpy as np

from lmpgap.prices.certificate import USABLE_VERDICTS
from lmpgap.report.embed import ArrayStore, compact_matrix, packed_amounts
from lmpgap.report.palette import DARK, DEAD_BAND, LIGHT
from lmpgap.report.pictures import Picture, opening_choice
from lmpgap.report.text import plain
from lmpgap.report.view.cube import COMPONENT_WORDS, COMPONENTS
from lmpgap.report.view.model import WeeklyView

SUM_TOLERANCE = 5e-4
"""Where the parts add up to the price this well, the page adds them itself [currency/MWh]."""


def page_data(view: WeeklyView, pictures: dict[str, Picture], store: ArrayStore) -> dict[str, Any]:
    """Return the page's data as JSON values; arrays go into the store."""
    bus, hour, constraint = opening_choice(view)
    nodes, hours = view.nodes, view.hours
    return {
        "currency": view.currency,
        "deadBand": DEAD_BAND,
        "hours": {
            "label": list(hours.label),
            "ending": hours.hour_ending.tolist(),
            "dayPosition": list(hours.day_position),
        },
        "buses": {
            "id": [plain(name) for name in nodes.bus],
            "name": [plain(name) for name in nodes.name],
            "zone": [plain(name) for name in nodes.zone],
            "load": [round(float(load), 1) for load in nodes.load_mw],
            "x": store.add(nodes.x.astype(np.float32)),
            "y": store.add(nodes.y.astype(np.float32)),
        },
        "sets": list(view.cube.sets),
        "components": {name: COMPONENT_WORDS[name] for name in COMPONENTS},
        "prices": {price_set: _prices(view, price_set, store) for price_set in view.cube.sets},
        "verdicts": {
            "words": list(view.trust.words),
            "usable": [word in USABLE_VERDICTS for word in view.trust.words],
            "code": {name: store.add(code.astype(np.int32)) for name, code in view.trust.code.items()},
        },
        "drivers": [
            {
                "base": block.base,
                "against": block.against,
                "kinds": list(block.kinds),
                "constraints": [plain(name) for name in block.constraints],
                "start": store.add(block.start),
                "key": store.add(block.key.astype(np.uint8) if len(block.kinds) <= 256 else block.key),
                "amount": packed_amounts(block.amount, store),
                "complete": block.complete,
            }
            for block in view.drivers
        ],
        "inside": [
            {"base": base, "against": against, "cells": store.add(cells)}
            for (base, against), cells in view.inside.items()
            if len(cells)
        ],
        "constraints": {
            "name": [plain(name) for name in view.constraints.name],
            "unit": list(view.constraints.unit),
            "shadow": {
                name: compact_matrix(matrix, store) if matrix.size else {"kind": "zero"}
                for name, matrix in view.constraints.shadow.items()
            },
        },
        "choice": {
            "base": view.main.base,
            "against": view.main.against,
            "component": "lmp",
            "bus": bus,
            "hour": hour,
            "constraint": constraint,
        },
        "figures": {slot: _figure(picture) for slot, picture in pictures.items()},
        "palette": {"light": LIGHT, "dark": DARK},
    }


def _prices(view: WeeklyView, price_set: str, store: ArrayStore) -> dict[str, Any]:
    """Return the components of one price set; the price itself only where they do not add up to it."""
    parts = {name: view.cube.get(price_set, name) for name in COMPONENTS[1:]}
    price = view.cube.get(price_set)
    total = np.sum([np.nan_to_num(part.astype(float)) for part in parts.values()], axis=0)
    adds_up = bool(
        np.nanmax(np.abs(np.where(np.isnan(price), np.nan, total - price)), initial=0.0) <= SUM_TOLERANCE
        and np.array_equal(np.isnan(price), np.isnan(parts["energy"]))
    )
    stored = {name: compact_matrix(part, store) for name, part in parts.items()}
    stored["lmp"] = {"kind": "sum"} if adds_up else compact_matrix(price, store)
    return stored


def _figure(picture: Picture) -> dict[str, Any]:
    """Return the figure as JSON values; the heatmap's cells are left to the one copy of the prices."""
    figure: dict[str, Any] = json.loads(picture.figure.to_json())
    if picture.slot == "heatmap":
        for trace in figure["data"]:
            trace.pop("z", None)
    return figure
