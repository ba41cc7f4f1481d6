"""The five sentences in weeks in which something is missing."""

from __future__ import annotations

import pandas as pd
import pytest

from lmpgap.divergence.labels import IntervalLabels
from lmpgap.divergence.ladder import closest_to
from lmpgap.divergence.sentences import Wording
from lmpgap.divergence.week import weekly_sentences

NOTHING = pd.DataFrame(columns=["interval_start", "base", "against", "bus", "difference", "inside_interval"])
FINDINGS = pd.DataFrame(columns=["kind"])
HOUR = pd.Timestamp("2026-03-02T08:00Z")


def prices() -> pd.DataFrame:
    return pd.DataFrame(
        [(HOUR, name, bus, 20.0) for name in ("dc", "ac") for bus in ("N1", "N2")],
        columns=["interval_start", "formulation", "bus", "lmp"],
    )


def solves(verdict: str) -> pd.DataFrame:
    return pd.DataFrame(
        {"interval_start": HOUR, "formulation": ["dc", "ac"], "verdict": ["certified", verdict], "objective": 1.0}
    )


def claims(*rows: tuple[str, int, int, float]) -> pd.DataFrame:
    frame = pd.DataFrame(rows, columns=["account", "rows", "left_out", "amount"])
    return frame.assign(amount_low=frame["amount"] - 1, amount_high=frame["amount"] + 1, material=frame["amount"] > 1)


def sentences(**changes: object) -> list[str]:
    given = {"differences": NOTHING, "drivers": pd.DataFrame(), "findings": FINDINGS, **changes}
    return weekly_sentences(prices=prices(), solves=solves("certified"), **given)  # type: ignore[arg-type]


def test_no_hour_in_which_all_are_certified():
    assert closest_to(prices(), solves("uncertified")).empty
    told = weekly_sentences(
        prices=prices(), solves=solves("uncertified"), differences=NOTHING, drivers=NOTHING, findings=FINDINGS
    )
    assert told[0] == (
        "2 solves of dc, ac were made and none could be held against ac; not to be used as a price: 1 of 1 solves of "
        "ac."
    )


def test_positions_that_could_not_be_settled_are_told_with_the_money():
    told = sentences(claims=claims(("Co-op", 2, 1, 50.0), ("Wind", 3, 0, 20.0)))[-1]
    assert "Co-op $50 (between $49 and $51); Wind $20" in told
    assert "; without 1 of 6 position rows, which could not be settled; certain" in told
    assert told.endswith("certain and material for 2 of 2 accounts: 2 paid too much.")


def test_an_account_of_which_nothing_was_settled_has_no_amount():
    told = sentences(claims=claims(("Co-op", 0, 3, 0.0), ("Wind", 3, 0, 20.0)))[-1]
    assert "Co-op" not in told
    assert "without 3 of 6 position rows" in told
    assert sentences(claims=claims(("Co-op", 0, 3, 0.0)))[-1] == (
        "None of the 3 position rows could be settled; the tables say why."
    )


@pytest.mark.parametrize(
    ("kinds", "words"),
    [
        ([], "There are no posted prices to check."),
        (
            ["missing-interval", "missing-interval"],
            "No posted price could be held against a computed one; the checks found 2 matters: 2 stretches of missing "
            "intervals.",
        ),
    ],
)
def test_posted_prices_without_a_computed_one_beside_them(kinds: list[str], words: str):
    assert sentences(findings=pd.DataFrame({"kind": kinds}))[3] == words


def test_tables_that_nothing_came_of_are_not_called_missing():
    told = sentences(n_posted=15, n_position=6)
    assert told[3] == "No posted price could be held against a computed one; the checks found nothing."
    assert told[4] == ("None of the 6 position rows could be settled: there is no posted price to hold them against.")


def test_differences_inside_the_price_intervals_are_not_called_agreement():
    inside = pd.DataFrame([(HOUR, "dc", "ac", "N1", 9.8, True)], columns=NOTHING.columns)
    assert sentences(differences=inside)[1] == (
        "The prices of dc and ac differ only where several prices are right: every difference lies inside the interval "
        "of prices that the dispatch admits."
    )


def test_quarter_hours_are_not_called_hours():
    quarter = Wording(labels=IntervalLabels(interval_minutes=15))
    assert sentences(wording=quarter)[0].startswith("Over 1 interval dc stayed closest to ac")
    assert sentences()[0].startswith("Over 1 hour dc stayed closest to ac")


def test_an_account_in_whose_favour_the_error_is_has_nothing_to_claim():
    frame = claims(("Co-op", 2, 0, 50.0), ("Wind", 3, 0, -20.0)).assign(material=True)
    assert sentences(claims=frame)[-1].endswith(
        "; certain and material for 2 of 2 accounts: 1 paid too much and 1 paid too little."
    )
    assert sentences(claims=frame.assign(material=False))[-1].endswith("none of it is certain enough to claim.")
