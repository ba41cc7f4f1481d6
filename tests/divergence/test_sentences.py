"""Sentences carry the right sign and figures that add up."""

from __future__ import annotations

import re

import numpy as np
import pandas as pd
import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st

from lmpgap.divergence.compare import compare
from lmpgap.divergence.labels import IntervalLabels, listed, stretches
from lmpgap.divergence.sentences import Wording, difference_sentence, driver_sentences
from tests.divergence.synthetic import random_run, run_of

TUESDAY = pd.Timestamp("2026-03-03T18:00:00-07:00").tz_convert("UTC")


def difference(amount: float) -> pd.Series:
    return pd.Series(
        {
            "interval_start": TUESDAY,
            "base": "dc",
            "against": "ac",
            "bus": "B7",
            "difference": amount,
            "inside_interval": False,
        }
    )


def drivers(*rows: tuple[str, str, float]) -> pd.DataFrame:
    return pd.DataFrame(rows, columns=["driver", "constraint", "amount"])


WORDING = Wording(
    labels=IntervalLabels(time_zone="America/Boise"),
    names={"B7": "Fernhill", "L6 forward": "Ridge to Fernhill"},
)


def test_a_positive_difference_means_base_is_below():
    rows = drivers(
        ("binds only in against", "L6 forward", 6.1), ("delivery factor", "", 2.05), ("energy price", "", 0.25)
    )
    assert difference_sentence(difference(8.4), rows, WORDING) == (
        "At Fernhill, Tue HE19, dc is 8.40 $/MWh below ac: 6.10 from the limit Ridge to Fernhill, which binds "
        "only in ac; 2.05 from losses; and 0.25 from the energy price."
    )


def test_a_negative_difference_means_base_is_above_and_opposite_parts_are_taken_off():
    rows = drivers(
        ("energy price", "", -5.0), ("delivery factor", "", 1.0), ("reactive", "B1", -0.3), ("reactive", "B2", -0.2)
    )
    assert difference_sentence(difference(-4.5), rows, WORDING) == (
        "At Fernhill, Tue HE19, dc is 4.50 $/MWh above ac: 5.00 from the energy price, less 1.00 from losses "
        "and 0.50 from reactive power and voltage."
    )


def test_both_parts_of_a_constraint_are_one_cause_and_the_rest_is_told():
    rows = drivers(
        ("shadow price", "L6 forward", 3.0),
        ("shift factor", "L6 forward", -0.5),
        ("energy price", "", 1.0),
        ("delivery factor", "", 0.4),
        ("reactive", "B1", 0.2),
    )
    text = difference_sentence(difference(4.1), rows, WORDING, most_parts=2)
    assert text.endswith(
        "2.50 from the limit Ridge to Fernhill, whose shadow price differs; 1.00 from the energy price; "
        "and 0.60 from the rest."
    )


def test_agreement_is_told_as_agreement():
    assert difference_sentence(difference(0.004), drivers(), WORDING) == (
        "At Fernhill, Tue HE19, dc and ac agree to the cent."
    )


@settings(max_examples=30, deadline=None)
@given(seed=st.integers(0, 2**32 - 1), parts=st.integers(1, 4))
@example(seed=1342, parts=1)  # a difference of less than half a cent with parts of several dollars
def test_figures_shown_add_up_to_the_difference_shown(seed, parts):
    rng = np.random.default_rng(seed)
    run = run_of(random_run(rng, "dc"), random_run(rng, "ac"))
    comparison = compare(run, run, base="dc", against="ac")
    for text, amount in zip(
        driver_sentences(comparison.differences, comparison.drivers, most_parts=parts),
        comparison.differences["difference"],
        strict=True,
    ):
        head, _, body = text.partition(": ")
        gap = re.search(r"(?:dc is) ([\d,.]+) \$/MWh", head)
        assert (gap is None) == (round(100.0 * amount) == 0)
        shown = 0.0 if gap is None else float(gap[1].replace(",", ""))
        figures = re.findall(r"(less )?([\d,]*\d\.\d\d) (?:from|outside)", body)
        total = sum((-1.0 if less else 1.0) * float(value.replace(",", "")) for less, value in figures)
        assert total == pytest.approx(shown, abs=1e-9)
        assert gap is None or ("below" in head) == (amount > 0)


def test_hours_are_told_in_local_time_and_the_second_autumn_hour_is_marked():
    labels = IntervalLabels(time_zone="America/Boise")
    first = pd.Timestamp("2026-11-01T07:00:00Z")  # 01:00 summer time
    hours = pd.date_range(first, periods=3, freq="h")
    assert [labels.label(hour) for hour in hours] == ["Sun HE02", "Sun HE02 (second)", "Sun HE03"]
    assert labels.stretch(hours[0], hours[2]) == "Sun HE02 to HE03"
    assert labels.stretch(hours[0], hours[0] + pd.Timedelta(days=1)) == "Sun HE02 to Mon HE01"
    quarter = IntervalLabels(time_zone="America/Boise", interval_minutes=15)
    assert quarter.label(pd.Timestamp("2026-03-03T18:15:00-07:00")) == "Tue 18:15"
    month = pd.date_range(first, periods=24 * 30, freq="h")
    assert IntervalLabels.of(month, "America/Boise", 60).label(first) == "Sun 1 Nov HE02"


def test_stretches_and_lists():
    assert list(stretches(np.array([5, 1, 2, 3, 9, 9]))) == [(1, 3), (5, 5), (9, 9)]
    assert list(stretches(np.zeros(0, dtype=np.int64))) == []
    assert listed(["A"]) == "A"
    assert listed(["A", "B"]) == "A and B"
    assert listed(list("ABCDEF")) == "A, B, C and 3 others"
