"""Measured speed of the driver account, in processor time; run with ``-m benchmark_suite``."""

from __future__ import annotations

import time
from itertools import combinations

import numpy as np
import pytest

from lmpgap.divergence.compare import compare_run
from tests.divergence.synthetic import random_run, run_of

pytestmark = pytest.mark.benchmark_suite


def test_a_week_of_fifty_buses_and_all_pairs_takes_less_than_two_seconds():
    rng = np.random.default_rng(0)
    names = ("dc", "dc-loss", "soc", "ac")
    run = run_of(*(random_run(rng, n, n_interval=168, n_bus=50, n_constraint=10, share_binding=1.0) for n in names))

    class Store:
        def table(self, name):
            return run[name]

        def write(self, name, frame):
            pass

    began = time.process_time()
    made = compare_run(Store(), combinations(names, 2))
    assert time.process_time() - began < 2.0
    assert len(made.differences) == 6 * 168 * 50
