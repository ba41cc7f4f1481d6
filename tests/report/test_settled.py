"""Claims, deadlines and rights in the report are those of the settlement."""

from __future__ import annotations

from datetime import date

import pandas as pd

from lmpgap.report.view import build_view
from lmpgap.settlement.deadline import DeadlineRule
from lmpgap.settlement.options import SettlementOptions
from lmpgap.settlement.result import Settlement
from tests.report.synthetic import SyntheticRun

EMPTY = pd.DataFrame()


def settled(rule: DeadlineRule | None) -> Settlement:
    accounts = pd.DataFrame(
        {
            "account": ["Small", "Large", "Large"],
            "component": ["delivery-factor", "delivery-factor", "loss"],
            "amount": [10.0, -900.0, 5.0],
            "amount_low": [-5.0, -1000.0, 4.0],
            "amount_high": [20.0, -800.0, 6.0],
            "material": [False, True, False],
        }
    )
    deadlines = pd.DataFrame(
        {
            "account": ["Large", "Large", "Small"],
            "operating_date": [date(2026, 10, 26), date(2026, 10, 27), date(2026, 10, 26)],
            "amount": [-500.0, -400.0, 10.0],
            "counted_from": [date(2026, 10, 27)] * 3,
            "deadline": [date(2026, 12, 26), date(2026, 12, 27), date(2026, 12, 26)],
            "days_left": pd.array([30, 31, None], dtype="Int64"),
        }
    )
    holders = pd.DataFrame(
        {
            "holder": ["Large"],
            "amount_posted": [1000.0],
            "amount_reference": [1200.0],
            "difference": [-200.0],
            "losses_left_open": [50.0],
        }
    )
    return Settlement(
        claim="posted",
        against="ac",
        options=SettlementOptions(basis="delivery-factor"),
        currency="USD",
        time_zone="America/Boise",
        hours=1.0,
        rows=EMPTY,
        accounts=accounts,
        baselines=EMPTY,
        left_out=EMPTY,
        rights=EMPTY,
        holders=holders,
        reference=EMPTY,
        rule=rule,
        today=None,
        deadlines=deadlines,
        notes=("A note.",),
    )


def test_claims_deadlines_and_rights_are_told(run: SyntheticRun) -> None:
    rule = DeadlineRule(days=60, label="Own rule")
    view = build_view(run.tables, run.scenario, {}, ["One sentence."], settlement=settled(rule))
    assert [(total.account, total.amount, total.material) for total in view.accounts] == [
        ("Large", -900.0, True),
        ("Small", 10.0, False),
    ]
    assert view.stakes.rows[0][-1] == "charged too little, material"
    assert view.stakes.rows[1][-1] == "not certain, not material"
    assert view.deadlines.rows[0] == ("Large", "2026-12-26", "30", "−500", "2026-12-27", "−900")  # noqa: RUF001
    assert view.deadlines.rows[1][2] == "—"
    assert "Own rule" in view.deadlines.note
    assert view.rights.rows[0][3] == "−200"  # noqa: RUF001
    assert view.settlement_notes == ("A note.",)


def test_without_a_rule_there_are_no_deadlines(run: SyntheticRun) -> None:
    view = build_view(run.tables, run.scenario, {}, ["One sentence."], settlement=settled(None))
    assert view.deadlines.rows == ()
