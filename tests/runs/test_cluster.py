"""The same run on a cluster of two worker processes."""

import warnings
from pathlib import Path

import pandas as pd
import pytest

from lmpgap.errors import LmpgapError
from lmpgap.runs.price import price
from lmpgap.scenario.read import read_scenario
from tests.runs.test_price import assert_same
from tests.support.scenarios import hourly_scenario

distributed = pytest.importorskip("distributed", reason="needs the extra `cluster` (package distributed)")


@pytest.fixture
def scheduler():
    with warnings.catch_warnings():
        # Closing sockets and event loops of the cluster's own is not what is tested here.
        warnings.simplefilter("ignore")
        with distributed.LocalCluster(
            n_workers=2, threads_per_worker=1, processes=True, dashboard_address=None, silence_logs=50
        ) as cluster:
            yield cluster.scheduler_address


@pytest.mark.filterwarnings("ignore::pytest.PytestUnraisableExceptionWarning", "ignore::ResourceWarning")
@pytest.mark.filterwarnings("ignore::DeprecationWarning")
def test_a_cluster_gives_the_same_bits(scheduler: str, tmp_path: Path) -> None:
    scenario = hourly_scenario(tmp_path / "scenario", hours=6)
    here = price(read_scenario(scenario), tmp_path / "here", formulations=("dc", "dc-loss"))
    there = price(
        read_scenario(scenario),
        tmp_path / "there",
        formulations=("dc", "dc-loss"),
        workers=2,
        cluster=scheduler,
    )
    assert_same(here, there)
    assert isinstance(there.table("prices"), pd.DataFrame)


@pytest.mark.filterwarnings("ignore")
def test_a_cluster_that_does_not_answer_is_told(tmp_path: Path) -> None:
    scenario = hourly_scenario(tmp_path / "scenario", hours=2)
    with pytest.raises(LmpgapError, match="no cluster scheduler answers at"):
        price(read_scenario(scenario), tmp_path / "run", formulations=("dc",), cluster="tcp://127.0.0.1:1")
