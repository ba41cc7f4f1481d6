"""Prices that are not unique, from a scenario folder to `compare`: no difference inside an interval is a divergence.

The network of "DCOPF-Based LMP Simulation: Algorithm, Comparison With ACOPF, and Sensitivity", IEEE Transactions on
Power Systems 22(4), 2007, with data of "Small Test Systems for Power System Economic Studies", IEEE PES General
Meeting, 2010: at 600 MW of load the cheapest unit is exactly used up and the price is anything from 10 to 14 $/MWh.
"""

from itertools import combinations

import numpy as np
import pytest

from lmpgap.divergence.compare import compare_run
from lmpgap.runs.folder import RunFolder
from tests.support.small_scenarios import (
    FORMULATIONS,
    at_hour,
    branch,
    buses,
    loads,
    offer,
    resource,
    run_of,
    write_scenario,
)

KINK, ABOVE, BELOW = 0, 1, 2
UNITS = [("Alta", "A", 40, 14), ("Park", "A", 170, 15), ("Solitude", "C", 520, 30), ("Sund", "D", 200, 35)]
UNITS += [("Brighton", "E", 600, 10)]
LINES = [("A", "B", 0.0281), ("A", "D", 0.0304), ("A", "E", 0.0064), ("B", "C", 0.0108), ("C", "D", 0.0297)]


@pytest.fixture(scope="module")
def run(tmp_path_factory: pytest.TempPathFactory) -> RunFolder:
    hours = tuple(total / 3 for total in (600.0, 620.0, 580.0))
    folder = write_scenario(
        tmp_path_factory.mktemp("kink") / "scenario",
        buses=buses("A", "B", "C", "D", "E", low=0.9, high=1.1),
        branches=[
            *(branch(f"{one}{other}", (one, other), x=x) for one, other, x in LINES),
            branch("DE", ("D", "E"), x=0.0297, normal_rating_mva=240.0),
        ],
        resources=[
            resource(f"unit {name}", bus, mw, q_min_mvar=-600.0, q_max_mvar=600.0) for name, bus, mw, _ in UNITS
        ],
        offers=[offer(f"unit {name}", mw, dollars) for name, _, mw, dollars in UNITS],
        loads=loads(dict.fromkeys("BCD", hours)),
    )
    return run_of(folder)


@pytest.mark.parametrize("name", FORMULATIONS)
def test_the_run_holds_the_whole_interval_at_the_kink(run: RunFolder, name: str) -> None:
    kink = at_hour(run, "prices", name, KINK)
    assert kink["lmp_low"].to_numpy() == pytest.approx(np.full(5, 10.0), abs=1e-3)
    assert kink["lmp_high"].to_numpy() == pytest.approx(np.full(5, 14.0), abs=1e-3)
    assert kink["lmp"].between(kink["lmp_low"], kink["lmp_high"]).all()


@pytest.mark.parametrize("name", FORMULATIONS)
@pytest.mark.parametrize(("hour", "price"), [(ABOVE, 14.0), (BELOW, 10.0)])
def test_next_to_it_prices_are_unique(run: RunFolder, name: str, hour: int, price: float) -> None:
    rows = at_hour(run, "prices", name, hour)
    assert rows["lmp"].to_numpy() == pytest.approx(np.full(5, price), abs=1e-3)
    assert (rows["lmp_high"] - rows["lmp_low"]).max() < 0.05


def test_compare_calls_no_difference_at_the_kink_a_divergence(run: RunFolder) -> None:
    made = compare_run(run, list(combinations(FORMULATIONS, 2)))
    at_kink = made.differences["interval_start"] == made.differences["interval_start"].min()
    assert made.differences.loc[at_kink, "inside_interval"].all()
    # The solvers do pick different prices there, so that the flag has something to say.
    assert made.differences.loc[at_kink, "difference"].abs().max() > 0.5
    assert made.differences.loc[~at_kink, "difference"].abs().max() < 1e-3


def test_the_kink_counts_as_no_divergence_in_the_rankings(run: RunFolder) -> None:
    made = compare_run(run, [("dc", "ac")])
    assert made.differences["difference"].abs().max() > 0.5
    ranked = made.rankings(10)
    by_hour = ranked["intervals"].set_index("interval_start")["mean_absolute"]
    assert by_hour[made.differences["interval_start"].min()] == 0.0
    assert ranked["buses"]["mean_absolute"].max() < 1e-3
