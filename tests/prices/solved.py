"""The benchmark networks solved once for all tests of this folder."""

from __future__ import annotations

from functools import cache

from lmpgap.dispatch.ac_check import AcCheck, ac_check
from lmpgap.dispatch.formulation import build_formulation
from lmpgap.dispatch.limits import FlowLimits
from lmpgap.dispatch.options import DispatchOptions
from lmpgap.dispatch.result import DispatchResult
from lmpgap.prices.certificate import Certificate, certify
from lmpgap.prices.components import PriceSplit, split_prices
from lmpgap.scenario.network import IntervalInputs, Network
from tests.support.networks import load_network, scale_load

CASES = ("case3", "case5", "case14", "case30", "case118")
FORMULATIONS = ("dc", "dc-loss", "soc", "ac")


@cache
def loaded(case: str, factor: float = 1.0) -> tuple[Network, IntervalInputs]:
    network, inputs = load_network(case)
    return network, scale_load(inputs, factor)


@cache
def solved(case: str, name: str, factor: float = 1.0) -> DispatchResult:
    network, inputs = loaded(case, factor)
    formulation = build_formulation(name, network, inputs.branch_in_service, DispatchOptions())
    start = solved(case, "soc", factor) if name == "ac" else None
    return formulation.solve(inputs, FlowLimits.none(network.n_branch), start)


@cache
def split(case: str, name: str, factor: float = 1.0) -> PriceSplit:
    network, inputs = loaded(case, factor)
    return split_prices(
        network, inputs.branch_in_service, solved(case, name, factor), inputs.load_p, reactive_sources=None
    )


@cache
def checked(case: str, factor: float = 1.0) -> AcCheck:
    network, inputs = loaded(case, factor)
    return ac_check(network, inputs, solved(case, "soc", factor), FlowLimits.none(network.n_branch))


def certified(case: str, name: str, factor: float = 1.0, *, with_ac: bool = True) -> Certificate:
    network, inputs = loaded(case, factor)
    return certify(
        network,
        inputs,
        solved(case, name, factor),
        split(case, name, factor),
        ac=solved(case, "ac", factor) if with_ac else None,
        check=checked(case, factor) if name == "soc" else None,
    )
