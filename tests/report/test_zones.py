"""Zone changes in the report: the right formulation, the largest first, both parts shown."""

import pandas as pd

from lmpgap.report.view.zones import zone_table


def test_the_largest_changes_of_the_chosen_formulation() -> None:
    drift = pd.DataFrame(
        [
            ("ac", "North", "2026-03-02", "2026-03-03", "lmp", 20.0, 25.0, 4.5, 0.5),
            ("ac", "South", "2026-03-02", "2026-03-03", "lmp", 30.0, 21.0, -8.0, -1.0),
            ("ac", "South", "2026-03-02", "2026-03-03", "loss", 1.0, 2.0, 1.0, 0.0),
            ("dc", "South", "2026-03-02", "2026-03-03", "lmp", 30.0, 99.0, 69.0, 0.0),
        ],
        columns=[
            "formulation", "zone", "before", "after", "component", "price_before", "price_after", "price_change",
            "weight_drift",
        ],
    )  # fmt: skip
    table = zone_table(drift, "ac", "USD")
    assert [row[0] for row in table.rows] == ["South", "North"]
    assert table.rows[0][3:] == ("30.00", "21.00", "\N{MINUS SIGN}8.00", "\N{MINUS SIGN}1.00")
    assert table.rows[1][3:] == ("20.00", "25.00", "+4.50", "+0.50")


def test_nothing_is_nothing() -> None:
    empty = pd.DataFrame(columns=["formulation", "zone", "before", "after", "component", "price_before"])
    empty[["price_after", "price_change", "weight_drift"]] = None
    assert zone_table(empty, "ac", "USD").rows == ()
