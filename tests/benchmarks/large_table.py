"""Turn the rows of `tests.benchmarks.large` into the table of LARGE.md.

    python -m tests.benchmarks.large_table convex.csv ac.csv > table.md

Of several rows for one case and formulation the last one counts.
"""

from __future__ import annotations

import csv
import sys
from collections.abc import Iterable

FORMULATIONS = ("dc", "dc-loss", "soc", "ac")
SOLVED = ("optimal", "locally optimal")


def rows_of(paths: Iterable[str]) -> dict[tuple[str, str], dict[str, str]]:
    """Return the rows by case and formulation."""
    found: dict[tuple[str, str], dict[str, str]] = {}
    for path in paths:
        with open(path, newline="") as file:
            for row in csv.DictReader(file):
                found[row["case"], row["formulation"]] = row
    return found


def cell(row: dict[str, str] | None) -> str:
    """Return verdict, deviation from the published figure, price residual, seconds and memory of one solve."""
    if row is None:
        return "-"
    if row["status"] not in SOLVED:
        return f"**{row['status']}**"
    against = row["against_published"]
    shown = "" if not against else f"; {float(against):+.3f} pt" if row["formulation"] == "soc" else ""
    if against and row["formulation"] in ("dc", "ac"):
        shown = f"; {float(against):+.0e}"
    verdict = {"not verified": "ok", "certified": "ok"}.get(row["verdict"], f"**{row['verdict']}**")
    return (
        f"{verdict}{shown}; {float(row['price_residual']):.0e}; {float(row['cpu_seconds']):.1f} s "
        f"({float(row['total_seconds']):.0f}); {float(row['memory_mb']):.0f} MB"
    )


def table(found: dict[tuple[str, str], dict[str, str]]) -> str:
    """Return the Markdown table, smallest network first."""
    cases = sorted({case for case, _ in found}, key=lambda case: int(case[4:].split("_")[0].rstrip("kwpso")))
    lines = ["| network | " + " | ".join(FORMULATIONS) + " | soc against ac |", "|---" * (len(FORMULATIONS) + 2) + "|"]
    for case in cases:
        cells = [cell(found.get((case, name))) for name in FORMULATIONS]
        verdict = found.get((case, "ac"), {}).get("soc_verdict", "")
        lines.append(f"| {case} | " + " | ".join(cells) + f" | {verdict} |")
    return "\n".join(lines)


def reasons(found: dict[tuple[str, str], dict[str, str]]) -> str:
    """Return a list of the solves that give no usable answer, with what they said."""
    lines = []
    for (case, name), row in sorted(found.items()):
        if row["status"] not in SOLVED or row["verdict"] == "uncertified":
            lines.append(f"- {case}, `{name}`: {row['status']}. {row.get('message') or row.get('reasons')}")
    return "\n".join(lines)


if __name__ == "__main__":
    rows = rows_of(sys.argv[1:])
    sys.stdout.write(table(rows) + "\n\n" + reasons(rows) + "\n")
