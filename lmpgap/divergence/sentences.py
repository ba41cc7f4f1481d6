"""A difference and its drivers in plain words, with figures that add up."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import pandas as pd

from lmpgap.divergence.drivers import (
    BINDS_ONLY_IN_AGAINST,
    BINDS_ONLY_IN_BASE,
    CONGESTION,
    DELIVERY_FACTOR,
    ENERGY_PRICE,
    REACTIVE,
    SHADOW_PRICE,
    SHIFT_FACTOR,
    UNSPLIT,
)
from lmpgap.divergence.labels import IntervalLabels


@dataclass(frozen=True, kw_only=True)
class Wording:
    """How things are called in sentences.

    Attributes
    ----------
    labels
        Names of intervals.
    names
        Display name by bus, hub or constraint; what is missing keeps its own name.
    unit
        Of a price.
    """

    labels: IntervalLabels = field(default_factory=IntervalLabels)
    names: Mapping[str, str] = field(default_factory=dict)
    unit: str = "$/MWh"

    def name(self, thing: str) -> str:
        """Return the display name."""
        return self.names.get(thing, thing)


def driver_sentences(
    differences: pd.DataFrame, drivers: pd.DataFrame, wording: Wording | None = None, *, most_parts: int = 3
) -> list[str]:
    """Return one sentence per row of ``differences``: who is above whom, by how much, and from what.

    Parameters
    ----------
    differences
        The rows to tell, e.g. the largest ones; columns of the run table ``differences``.
    drivers
        Run table ``drivers``, at least the rows of these differences.
    most_parts
        Parts that are named; what remains is told as the rest, so that the figures shown add up to the difference
        shown.
    """
    keys = ["interval_start", "base", "against", "bus"]
    wanted = pd.MultiIndex.from_frame(differences[keys])
    at = pd.MultiIndex.from_frame(drivers[keys])
    parts = dict(iter(drivers[at.isin(wanted)].groupby(keys, sort=False)))
    none = drivers.iloc[:0]
    return [
        difference_sentence(row, parts.get(tuple(row[key] for key in keys), none), wording, most_parts=most_parts)
        for _, row in differences.iterrows()
    ]


def difference_sentence(
    difference: pd.Series[Any],
    drivers: pd.DataFrame,
    wording: Wording | None = None,
    *,
    most_parts: int = 3,
) -> str:
    """Return the sentence of one difference from its own driver rows; see `driver_sentences`.

    Examples
    --------
    "At Fernhill, Tue HE19, dc is 8.40 $/MWh below ac: 6.10 from the limit L6 forward, which binds only in ac, and
    2.30 from losses."
    """
    wording = wording or Wording()
    base, against = str(difference["base"]), str(difference["against"])
    total = float(difference["difference"])
    where = f"At {wording.name(str(difference['bus']))}, {wording.labels.label(difference['interval_start'])}"
    cents = round(100.0 * total)
    sign = 1 if cents >= 0 else -1
    gap = f"{abs(cents) / 100.0:,.2f} {wording.unit}"
    if cents == 0:
        head = f"{where}, {base} and {against} agree to the cent"
    else:
        head = f"{where}, {base} is {gap} {'below' if cents > 0 else 'above'} {against}"
    if difference.get("inside_interval", False):
        head += ", no more than the prices themselves are undetermined by"
    parts = _merged(drivers, base, against, wording)
    named = [(sign * round(100.0 * amount), words) for amount, words in parts[:most_parts]]
    named = [(part, words) for part, words in named if part != 0]
    rest = abs(cents) - sum(part for part, _ in named)
    told = [f"{'' if part > 0 else 'less '}{abs(part) / 100.0:,.2f} {words}" for part, words in named]
    if rest and told:
        told.append(f"{'' if rest > 0 else 'less '}{abs(rest) / 100.0:,.2f} from the rest")
    if not told:
        return f"{head}."
    # Clauses with commas of their own are kept apart by semicolons.
    mark = ";" if any("," in words for _, words in named) else ","
    body = told[0] if len(told) == 1 else f"{f'{mark} '.join(told[:-1])}{mark if mark == ';' else ''} and {told[-1]}"
    return f"{head}: {body}."


def _merged(drivers: pd.DataFrame, base: str, against: str, wording: Wording) -> list[tuple[float, str]]:
    """Return (amount, words) by cause, largest first; both parts of one constraint are one cause."""
    causes: dict[tuple[str, str], dict[str, float]] = {}
    for driver, constraint, amount in zip(
        drivers["driver"].astype(str), drivers["constraint"].astype(str), drivers["amount"].astype(float), strict=True
    ):
        if driver in (SHADOW_PRICE, SHIFT_FACTOR):
            cause = ("limit", constraint)
        else:
            cause = (driver, "" if driver == REACTIVE else constraint)
        amounts = causes.setdefault(cause, {})
        amounts[driver] = amounts.get(driver, 0.0) + amount
    told = [
        (sum(amounts.values()), _cause_words(cause, amounts, base, against, wording))
        for cause, amounts in causes.items()
    ]
    return sorted(told, key=lambda part: (-abs(part[0]), part[1]))


def _cause_words(
    cause: tuple[str, str], amounts: Mapping[str, float], base: str, against: str, wording: Wording
) -> str:
    kind, constraint = cause
    limit = f"the limit {wording.name(constraint)}"
    if kind == "limit":
        by_price, by_factor = abs(amounts.get(SHADOW_PRICE, 0.0)), abs(amounts.get(SHIFT_FACTOR, 0.0))
        if by_price > 3.0 * by_factor:
            return f"from {limit}, whose shadow price differs"
        if by_factor > 3.0 * by_price:
            return f"from {limit}, on which this bus weighs differently"
        return f"from {limit}, whose shadow price and shift factor differ"
    words = {
        ENERGY_PRICE: "from the energy price",
        DELIVERY_FACTOR: "from losses",
        BINDS_ONLY_IN_BASE: f"from {limit}, which binds only in {base}",
        BINDS_ONLY_IN_AGAINST: f"from {limit}, which binds only in {against}",
        REACTIVE: "from reactive power and voltage",
        CONGESTION: f"from {limit}" if constraint else "from congestion",
        UNSPLIT: "outside the price components",
    }
    return words[kind]
