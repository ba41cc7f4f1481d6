"""Write the Larkspur Divide demo: the scenario folder and the key to what is planted in it.

    python scenarios/make_larkspur.py                        the committed week, every fault planted
    python scenarios/make_larkspur.py --faults none --out D  the same week with clean posted prices
    python scenarios/make_larkspur.py --faults stale-factors,rounding --out D

The inputs (network, plants, loads, weather) come from the modules of `larkspur_parts` and a fixed seed and are the
same for every choice of faults. The operator's prices are then cleared from those inputs with a linear dispatch with
marginal losses, and published with the faults that were asked for. Running the script again writes the same bytes.
"""

from __future__ import annotations

import argparse
import shutil
import sys
from pathlib import Path

import pandas as pd
from larkspur_parts import demand, fleet, grid, market, sites, weather
from larkspur_parts.clearing import ClearedHour, clear
from larkspur_parts.faults import FAULTS, FORGOTTEN_OUTAGE, REVISED_HOURS, Planted
from larkspur_parts.posting import Publisher
from larkspur_parts.settings_text import SCENARIO_TOML
from larkspur_parts.truth import planted_table, stale_dollars

from lmpgap.scenario.read import read_scenario
from lmpgap.scenario.scenario import Scenario

HERE = Path(__file__).resolve().parent
SCENARIO, TRUTH = "larkspur", "larkspur_truth"

HOURLY = ("loads", "availability", "interface_limits", "positions", "posted", "delivery_factors")
"""Tables with a row per hour are Parquet, the others CSV for reading by eye."""


def input_tables() -> dict[str, pd.DataFrame]:
    """Return every table that does not depend on clearing the week."""
    return {
        "buses": sites.buses(),
        "branches": grid.branches(),
        "resources": fleet.resources(),
        "offers": fleet.offers(),
        "loads": demand.loads(),
        "bids": demand.bids(),
        "availability": weather.availability(),
        "outages": grid.outages(),
        "contingencies": grid.contingencies(),
        "monitored": grid.monitored(),
        "interfaces": grid.interfaces(),
        "interface_limits": demand.interface_limits(),
        "hubs": market.hubs(),
        "rights": market.rights(),
    }


def write(folder: Path, name: str, table: pd.DataFrame) -> None:
    """Write one table, Parquet for hourly ones."""
    if name in HOURLY:
        table.to_parquet(folder / f"{name}.parquet", index=False, compression="zstd")
    else:
        table.to_csv(folder / f"{name}.csv", index=False, lineterminator="\n")


def write_inputs(folder: Path) -> None:
    """Write everything that does not depend on clearing the week, into an empty folder."""
    shutil.rmtree(folder, ignore_errors=True)
    folder.mkdir(parents=True)
    (folder / "scenario.toml").write_text(SCENARIO_TOML, encoding="utf-8", newline="\n")
    for name, table in input_tables().items():
        write(folder, name, table)


def clear_week(scenario: Scenario) -> tuple[dict[int, ClearedHour], dict[int, ClearedHour]]:
    """Return the cleared week, and the revised day as it was cleared first, by position in the week."""
    cleared = clear(scenario, range(len(scenario.interval_starts)))
    return cleared, clear(scenario, REVISED_HOURS, FORGOTTEN_OUTAGE)


def write_outcome(
    out: Path,
    scenario: Scenario,
    cleared: dict[int, ClearedHour],
    first_try: dict[int, ClearedHour],
    planted: Planted,
) -> None:
    """Write what the operator publishes, the positions, and the key to the planted faults."""
    folder, truth = out / SCENARIO, out / TRUTH
    shutil.rmtree(truth, ignore_errors=True)
    truth.mkdir(parents=True)
    publisher = Publisher(scenario.network.buses, cleared, planted)
    output = pd.DataFrame([hour.output for hour in cleared.values()], columns=list(scenario.network.resources))
    positions = market.positions(output, {name: plant[0] for name, plant in fleet.PLANTS.items()})
    write(folder, "positions", positions)
    write(folder, "posted", publisher.posted(first_try))
    write(folder, "posted_constraints", publisher.posted_constraints())
    write(folder, "delivery_factors", publisher.delivery_factors())
    write(truth, "planted", planted_table(planted))
    write(truth, "stale_factor_dollars", stale_dollars(publisher, positions))


def make(out: Path, planted: Planted) -> None:
    """Write ``out/larkspur`` and ``out/larkspur_truth``."""
    write_inputs(out / SCENARIO)
    scenario = read_scenario(out / SCENARIO)
    cleared, first_try = clear_week(scenario)
    write_outcome(out, scenario, cleared, first_try, planted)


def main(arguments: list[str]) -> None:
    """Read the command line and write the demo."""
    parser = argparse.ArgumentParser(description="Write the Larkspur Divide demo.")
    parser.add_argument("--faults", default="all", help=f"all, none, or a list with commas of: {', '.join(FAULTS)}")
    parser.add_argument("--out", type=Path, default=HERE, help="folder to write into (default: next to the script)")
    chosen = parser.parse_args(arguments)
    make(chosen.out, Planted.parse(chosen.faults))
    print(f"written: {chosen.out / SCENARIO} and {chosen.out / TRUTH}")


if __name__ == "__main__":
    main(sys.argv[1:])
