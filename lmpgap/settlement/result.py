"""What a settlement comes to: frames with everything behind the money."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import date

import pandas as pd

from lmpgap.dispatch.names import FORMULATIONS
from lmpgap.settlement.deadline import DeadlineRule
from lmpgap.settlement.options import SettlementOptions
from lmpgap.settlement.positions import contract_table


@dataclass(frozen=True, kw_only=True)
class Settlement:
    """Money at stake per account, and everything behind it.

    Attributes
    ----------
    claim, against
        Price set that is claimed to be wrong, and the formulation it is held against.
    options
        Choices behind the figures; ``posted_reference`` as it was decided.
    currency, time_zone
        Of the scenario.
    hours
        Length of an interval [h].
    rows
        Per account, interval, node and component: see `lmpgap.settlement.positions.settle_errors`.
    accounts
        Per account and component: see `lmpgap.settlement.aggregate.by_account`.
    baselines
        The same for the two readings of the loss-component error, ``component``, against each formulation with losses
        that the run holds, ``against``.
    left_out
        Rows that do not count, by account, component and reason.
    rights, holders
        What rights are paid on posted and on reference congestion, per interval and per holder.
    reference
        Per interval: which common reference the components were compared on, and its coverage.
    rule, today, deadlines
        The dispute rule, the day the days left are counted from, and one row per account and operating date with the
        amount claimed; no rule, no deadlines.
    notes
        What a reader should know besides.
    """

    claim: str
    against: str
    options: SettlementOptions
    currency: str
    time_zone: str
    hours: float
    rows: pd.DataFrame
    accounts: pd.DataFrame
    baselines: pd.DataFrame
    left_out: pd.DataFrame
    rights: pd.DataFrame
    holders: pd.DataFrame
    reference: pd.DataFrame
    rule: DeadlineRule | None
    today: date | None
    deadlines: pd.DataFrame
    notes: tuple[str, ...]

    @property
    def claims(self) -> pd.DataFrame:
        """One row per account in the reading that is claimed (``options.basis``)."""
        own = self.accounts[self.accounts["component"] == self.options.basis]
        return own.reset_index(drop=True)

    @property
    def table(self) -> pd.DataFrame:
        """The run table ``settlement``."""
        return contract_table(self.rows)

    @property
    def formulations(self) -> tuple[str, ...]:
        """Formulations of the run that the figures rest on, in the order of the ladder."""
        used = {self.claim, self.against, *self.baselines["against"]}
        return tuple(name for name in FORMULATIONS if name in used)
