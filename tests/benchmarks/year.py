"""A year of hours from a scenario of one week: the week again and again, each time with other loads."""

from __future__ import annotations

import shutil
from pathlib import Path

import numpy as np
import pandas as pd

HOURS = 8760
_WEEK = pd.Timedelta(days=7)
_LEFT_OUT = ("posted", "posted_constraints", "positions", "rights", "delivery_factors", "outages")
"""What a year of solves has no use for."""


def write_year(week: Path, folder: Path, hours: int = HOURS, seed: int = 0) -> Path:
    """Write a scenario of ``hours`` hours whose weeks are the given one with loads up to 3 % off, and return it.

    Tables by interval are taken through UTC, so that a change of clocks within the week neither drops an hour nor
    repeats one.
    """
    folder.mkdir(parents=True)
    rng = np.random.default_rng(seed)
    for file in sorted(week.iterdir()):
        if file.stem in _LEFT_OUT:
            continue
        if file.suffix != ".parquet":
            shutil.copy(file, folder / file.name)
            continue
        frame = pd.read_parquet(file)
        starts = pd.to_datetime(frame["interval_start"], utc=True)
        first = starts.min()
        frame = frame[starts < first + _WEEK]
        starts = starts[starts < first + _WEEK]
        repeats = []
        for n in range(-(-hours // 168)):
            part = frame.copy()
            moved = starts + n * _WEEK
            kept = moved < first + pd.Timedelta(hours=hours)
            part["interval_start"] = moved.dt.strftime("%Y-%m-%dT%H:%M:%S+00:00")
            if file.stem == "loads":
                factor = rng.uniform(0.97, 1.0, len(part))
                for column in ("mw", "mvar"):
                    part[column] = part[column] * factor
            repeats.append(part[kept])
        pd.concat(repeats, ignore_index=True).to_parquet(folder / file.name)
    return folder
