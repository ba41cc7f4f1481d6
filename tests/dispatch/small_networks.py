"""Networks small enough to be worked out by hand."""

from __future__ import annotations

import numpy as np

from lmpgap.scenario.network import IntervalInputs, Network, OfferSegments

FREE = np.inf


def two_bus(
    *,
    r: float = 0.0,
    x: float = 0.1,
    load_mw: float = 100.0,
    load_mvar: float = 0.0,
    prices: tuple[float, float] = (20.0, 50.0),
    capacity_mw: tuple[float, float] = (500.0, 500.0),
    rating_mva: float = FREE,
    v: tuple[tuple[float, float], tuple[float, float]] = ((1.0, 1.0), (1.0, 1.0)),
    q_mvar: tuple[float, float] = (FREE, FREE),
    angle_max_deg: float = FREE,
) -> tuple[Network, IntervalInputs]:
    """Return a resource at each of two buses, one line, and a load at the second bus; 100 MVA base."""
    base = 100.0
    network = Network(
        base_mva=base,
        buses=("west", "east"),
        v_min=np.array([v[0][0], v[1][0]]),
        v_max=np.array([v[0][1], v[1][1]]),
        shunt_g=np.zeros(2),
        shunt_b=np.zeros(2),
        branches=("line",),
        from_bus=np.array([0]),
        to_bus=np.array([1]),
        r=np.array([r]),
        x=np.array([x]),
        charging=np.zeros(1),
        tap=np.ones(1),
        shift=np.zeros(1),
        normal_rating=np.array([rating_mva / base]),
        emergency_rating=np.array([np.inf]),
        angle_min=np.array([-np.inf]),
        angle_max=np.array([np.deg2rad(angle_max_deg)]),
        resources=("west unit", "east unit"),
        resource_bus=np.array([0, 1]),
        q_min=-np.array(q_mvar) / base,
        q_max=np.array(q_mvar) / base,
    )
    inputs = IntervalInputs(
        start="2026-01-01T00:00:00+00:00",
        load_p=np.array([0.0, load_mw / base]),
        load_q=np.array([0.0, load_mvar / base]),
        branch_in_service=np.ones(1, dtype=bool),
        resource_in_service=np.ones(2, dtype=bool),
        p_min=np.zeros(2),
        p_max=np.array(capacity_mw) / base,
        segments=OfferSegments(
            resource=np.array([0, 1]),
            width=np.array(capacity_mw) / base,
            price_start=np.array(prices),
            price_end=np.array(prices),
        ),
        fixed_cost=np.zeros(2),
    )
    return network, inputs
