"""What an interval holds: loads, outages, availability, offers, bids, limits; against hand-made expectations."""

from __future__ import annotations

import dataclasses
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from lmpgap.scenario.network import IntervalInputs
from tests.scenario.folder import BASE, HOURS, read, swap, warnings

BASE_MVA = 100.0


def cost(inputs: IntervalInputs, resource: int, mw: float) -> float:
    """Return the cost of an output [$/h] as a dispatch would add it up: fixed cost, then segments in order."""
    total, left = inputs.fixed_cost[resource], mw / BASE_MVA - inputs.p_min[resource]
    segments = inputs.segments
    for s in np.flatnonzero(segments.resource == resource):
        taken = min(left, segments.width[s])
        slope = (segments.price_end[s] - segments.price_start[s]) / segments.width[s] if segments.width[s] else 0.0
        total += BASE_MVA * (segments.price_start[s] * taken + 0.5 * slope * taken**2)
        left -= taken
    assert left < 1e-9
    return float(total)


def test_static_offers_are_clipped_to_the_range(tmp_path: Path) -> None:
    inputs = read(tmp_path).inputs(0)
    # Hydro: 20 to 200 MW on 0-100 at 10 and 100-200 from 20 to 30; Gas: a curve that ends at 120 caps 150.
    np.testing.assert_array_equal(inputs.segments.resource, [0, 0, 1])
    np.testing.assert_allclose(inputs.segments.width, [0.8, 1.0, 1.2])
    np.testing.assert_allclose(inputs.segments.price_start, [10, 20, 40])
    np.testing.assert_allclose(inputs.segments.price_end, [10, 30, 40])
    np.testing.assert_allclose(inputs.p_min, [0.2, 0.0])
    np.testing.assert_allclose(inputs.p_max, [2.0, 1.2])
    np.testing.assert_allclose(inputs.fixed_cost, [100 + 20 * 10, 0])
    assert cost(inputs, 0, 150) == pytest.approx(100 + 1000 + 50 * 20 + 0.5 * 0.1 * 50**2)


def test_a_minimum_inside_a_sloped_segment(tmp_path: Path) -> None:
    inputs = read(tmp_path, swap("resources.csv", "20,200", "150,180")).inputs(0)
    np.testing.assert_allclose(inputs.segments.width, [0, 0.3, 1.2])
    np.testing.assert_allclose(inputs.segments.price_start[1], 25)
    np.testing.assert_allclose(inputs.segments.price_end[1], 28)
    assert inputs.fixed_cost[0] == pytest.approx(100 + 1000 + 50 * 20 + 0.5 * 0.1 * 50**2)


def test_negative_output_is_paid_for_by_its_curve(tmp_path: Path) -> None:
    # A store that charges: at -40 MW it pays 40 x 15 for what it takes.
    changes = {
        **swap("resources.csv", "Gas,East,0,150", "Gas,East,-40,150"),
        **swap("offers.csv", "Gas,1,0,120,40,40", "Gas,1,-40,0,15,\nGas,2,0,150,40,"),
    }
    inputs = read(tmp_path, changes).inputs(0)
    assert inputs.fixed_cost[1] == pytest.approx(-40 * 15)
    assert cost(inputs, 1, 0) == pytest.approx(0)
    assert cost(inputs, 1, 10) == pytest.approx(400)


@given(
    st.lists(st.tuples(st.floats(0, 100), st.floats(0, 50), st.floats(0, 30)), min_size=1, max_size=4),
    st.floats(0, 1),
    st.floats(0, 1),
    st.floats(0, 1),
)
def test_cost_is_the_integral_of_the_offer(
    tmp_path_factory: pytest.TempPathFactory,
    steps: list[tuple[float, float, float]],
    low: float,
    high: float,
    at: float,
) -> None:
    rows, mw, price = [], 0.0, -20.0
    for i, (size, jump, climb) in enumerate(steps):
        rows.append((i, round(mw, 6), round(mw + size, 6), price + jump, price + jump + climb))
        mw, price = mw + size, price + jump + climb
    end = rows[-1][2]
    low, high = sorted((round(low * end, 6), round(high * end, 6)))
    output = low + at * (high - low)
    changes = {
        "resources.csv": f"resource,bus,eco_min_mw,eco_max_mw\nG,East,{low},{high}\n",
        "offers.csv": "resource,segment,from_mw,to_mw,price,end_price\n"
        + "".join(f"G,{i},{a},{b},{p},{e}\n" for i, a, b, p, e in rows),
    }
    inputs = read(tmp_path_factory.mktemp("offer"), changes).inputs(0)
    exact = 0.0
    for _, a, b, p, e in rows:
        taken = min(max(output - a, 0.0), b - a)
        exact += p * taken + (0.5 * (e - p) / (b - a) * taken**2 if b > a else 0.0)
    assert cost(inputs, 0, output) == pytest.approx(exact, abs=1e-6)
    order = np.flatnonzero(inputs.segments.width > 0)
    marginal = np.stack([inputs.segments.price_start, inputs.segments.price_end], axis=1)[order].ravel()
    assert np.all(np.diff(marginal) >= -1e-6)


def test_offers_of_single_intervals_replace_the_whole_curve(tmp_path: Path) -> None:
    text = (
        "resource,segment,from_mw,to_mw,price,end_price,interval_start\n"
        "Hydro,1,0,100,10,,\nHydro,2,100,200,20,30,\nGas,1,0,120,40,40,\n"
        f"Hydro,7,0,180,5,,{HOURS[1]}\n"
        f"Gas,1,0,50,1,,{HOURS[2]}\nGas,2,50,60,2,,{HOURS[2]}\nGas,3,60,70,3,4,{HOURS[2]}\n"
    )
    scenario = read(tmp_path, {"offers.csv": text})
    first, second, third = (scenario.inputs(k) for k in range(3))
    for inputs in (first, second, third):
        np.testing.assert_array_equal(inputs.segments.resource, [0, 0, 1, 1, 1])
    np.testing.assert_allclose(first.segments.width, [0.8, 1, 1.2, 0, 0])
    np.testing.assert_allclose(first.segments.price_end, [10, 30, 40, 40, 40])
    np.testing.assert_allclose(second.segments.width, [1.6, 0, 1.2, 0, 0])
    np.testing.assert_allclose(second.segments.price_start[:2], [5, 5])
    np.testing.assert_allclose(second.p_max, [1.8, 1.2])
    np.testing.assert_allclose(second.fixed_cost, [100 + 20 * 5, 0])
    np.testing.assert_allclose(third.segments.width, [0.8, 1, 0.5, 0.1, 0.1])
    np.testing.assert_allclose(third.segments.price_start[2:], [1, 2, 3])
    np.testing.assert_allclose(third.segments.price_end[2:], [1, 2, 4])
    np.testing.assert_allclose(third.p_max, [2.0, 0.7])


def test_availability_and_resource_outages(tmp_path: Path) -> None:
    changes = {
        "availability.csv": "interval_start,resource,eco_max_mw,eco_min_mw\n"
        f"{HOURS[0]},Hydro,110,\n{HOURS[1]},Hydro,15,\n{HOURS[2]},Gas,50,30\n",
        "outages.csv": f"kind,id,first_interval,last_interval\nresource,Gas,{HOURS[0]},{HOURS[1]}\n",
    }
    scenario = read(tmp_path, changes)
    first, second, third = (scenario.inputs(k) for k in range(3))
    np.testing.assert_allclose((first.p_min, first.p_max), ([0.2, 0], [1.1, 0]))
    np.testing.assert_allclose(first.segments.width, [0.8, 0.1, 0])
    np.testing.assert_array_equal(first.resource_in_service, [True, False])
    # A maximum below the minimum pulls the minimum down with it, and says so.
    np.testing.assert_allclose((second.p_min, second.p_max), ([0.15, 0], [0.15, 0]))
    np.testing.assert_allclose(second.fixed_cost, [100 + 150, 0])
    np.testing.assert_allclose((third.p_min, third.p_max), ([0.2, 0.3], [2, 0.5]))
    np.testing.assert_allclose(third.segments.width, [0.8, 1, 0.2])
    np.testing.assert_allclose(third.fixed_cost, [300, 1200])
    assert [warning.kind for warning in scenario.warnings] == ["lowered minimum"]


def test_out_of_service_resources_cost_nothing(tmp_path: Path) -> None:
    text = BASE["resources.csv"].replace("no_load_cost\n", "no_load_cost,in_service\n")
    text = text.replace(",100\n", ",100,false\n").replace("gas,\n", "gas,,\n")
    inputs = read(tmp_path, {"resources.csv": text}).inputs(0)
    np.testing.assert_array_equal(inputs.p_max, [0, 1.2])
    np.testing.assert_array_equal(inputs.fixed_cost, [0, 0])
    np.testing.assert_array_equal(inputs.segments.width, [0, 0, 1.2])


def test_branch_outages_include_their_first_and_last_interval(tmp_path: Path) -> None:
    text = (
        "kind,id,first_interval,last_interval\n"
        f"branch,NS,{HOURS[0]},{HOURS[1]}\nbranch,NE,{HOURS[1]},{HOURS[1]}\nbranch,SE,2020-01-01T00:00Z,2020-01-02T00:00Z\n"
    )
    scenario = read(tmp_path, {"outages.csv": text})
    service = [scenario.inputs(k).branch_in_service.tolist() for k in range(3)]
    assert service == [[False, True, True], [False, False, True], [True, True, True]]


def test_a_row_without_a_time_holds_where_there_is_none_with_one(tmp_path: Path) -> None:
    text = BASE["loads.csv"] + "North,,7,1\n" + f"North,{HOURS[1]},9,2\n"
    scenario = read(tmp_path, {"loads.csv": text})
    assert [scenario.inputs(k).load_p[0] for k in range(3)] == pytest.approx([0.07, 0.09, 0.07])
    assert [scenario.inputs(k).load_q[0] for k in range(3)] == pytest.approx([0.01, 0.02, 0.01])
    assert scenario.warnings == ()


def test_bids_have_the_same_slots_in_every_interval(tmp_path: Path) -> None:
    text = (
        "bus,segment,mw,price,interval_start\n"
        f"South,1,10,50,\nSouth,2,5,30,\nEast,1,8,60,\nSouth,1,4,70,{HOURS[1]}\nEast,3,2,20,{HOURS[2]}\n"
    )
    scenario = read(tmp_path, {"bids.csv": text})
    bids = [scenario.inputs(k).bids for k in range(3)]
    for bid in bids:
        np.testing.assert_array_equal(bid.bus, [1, 1, 2, 2])
    np.testing.assert_allclose(
        [bid.width for bid in bids], [[0.1, 0.05, 0.08, 0], [0.04, 0, 0.08, 0], [0.1, 0.05, 0, 0.02]]
    )
    np.testing.assert_allclose(bids[1].price[[0, 2]], [70, 60])
    np.testing.assert_allclose(bids[2].price[3], 20)


def test_interfaces_and_their_limits(tmp_path: Path) -> None:
    changes = {
        "interfaces.csv": "interface,branch,weight\nSouthward,NS,1\nSouthward,SE,-0.5\nOther,NE,1\nFree,SE,1\n",
        "interface_limits.csv": "interface,limit_mw,reverse_limit_mw,interval_start\n"
        f"Southward,90,,\nOther,50,40,\nSouthward,70,60,{HOURS[2]}\n",
    }
    scenario = read(tmp_path, changes)
    interfaces = scenario.network.interfaces
    assert interfaces is not None
    assert interfaces.names == ("Southward", "Other", "Free")
    np.testing.assert_array_equal(interfaces.weights.toarray(), [[1, 0, -0.5], [0, 1, 0], [0, 0, 1]])
    first, third = scenario.inputs(0), scenario.inputs(2)
    np.testing.assert_allclose(first.interface_limit, [0.9, 0.5, np.inf])
    np.testing.assert_allclose(first.interface_reverse_limit, [np.inf, 0.4, np.inf])
    np.testing.assert_allclose(third.interface_limit, [0.7, 0.5, np.inf])
    np.testing.assert_allclose(third.interface_reverse_limit, [0.6, 0.4, np.inf])
    assert [str(w) for w in scenario.warnings] == [
        "interfaces.csv, column interface: no limit in interface_limits: Free"
    ]


def test_network_units_and_missing_limits(tmp_path: Path) -> None:
    network = read(tmp_path).network
    np.testing.assert_allclose(network.shunt_g, [0, 0.015, 0])
    np.testing.assert_allclose(network.shunt_b, [0, 0.2, 0])
    np.testing.assert_allclose(network.tap, [1, 0.98, 1])
    np.testing.assert_allclose(network.shift, [0, np.deg2rad(5), 0])
    np.testing.assert_allclose(network.normal_rating, [1.2, np.inf, 1.0])
    np.testing.assert_allclose(network.emergency_rating, [1.5, 1.4, np.inf])
    np.testing.assert_array_equal(network.angle_min, [-np.inf] * 3)
    np.testing.assert_array_equal(network.angle_max, [np.inf] * 3)
    np.testing.assert_allclose(network.q_min, [-0.5, -np.inf])
    np.testing.assert_allclose(network.q_max, [0.6, np.inf])
    assert network.interfaces is None
    assert network.contingencies is None


def test_contingencies_and_what_is_monitored(tmp_path: Path) -> None:
    text = "contingency,branch\nloss of NS,NS\nloss of SE,SE\n"
    contingencies = read(tmp_path / "all", {"contingencies.csv": text}).network.contingencies
    assert contingencies is not None
    assert contingencies.names == ("loss of NS", "loss of SE")
    assert [out.tolist() for out in contingencies.branches] == [[0], [2]]
    assert contingencies.monitored.tolist() == [True, True, False]
    changes = {"contingencies.csv": text, "monitored.csv": "branch\nNE\nSE\n"}
    scenario = read(tmp_path / "some", changes)
    assert scenario.network.contingencies is not None
    assert scenario.network.contingencies.monitored.tolist() == [False, True, True]
    assert [str(w) for w in scenario.warnings] == [
        "monitored.csv, line 3, column branch: has no emergency_rating_mva, so that no contingency can ever bind on "
        "it (found 'SE')"
    ]


def test_reference_weights(tmp_path: Path) -> None:
    scenario = read(tmp_path / "load")
    np.testing.assert_allclose(scenario.reference_weights(0), [0, 0.75, 0.25])
    settings = BASE["scenario.toml"]
    bus = read(tmp_path / "bus", {"scenario.toml": settings + '[reference]\nkind = "bus"\nbus = "East"\n'})
    np.testing.assert_array_equal(bus.reference_weights(2), [0, 0, 1])
    changes = {
        "scenario.toml": settings + '[reference]\nkind = "weights"\n',
        "reference_weights.csv": "bus,weight\nEast,3\nNorth,1\n",
    }
    np.testing.assert_allclose(read(tmp_path / "weights", changes).reference_weights(1), [0.25, 0, 0.75])


def test_an_interval_without_load_has_equal_weights_and_a_warning(tmp_path: Path) -> None:
    changes = {"loads.csv": f"bus,interval_start,mw\nSouth,{HOURS[0]},5\nSouth,{HOURS[1]},0\n"}
    scenario = read(tmp_path, changes)
    np.testing.assert_allclose(scenario.reference_weights(1), [1 / 3] * 3)
    assert "no load to weight the reference by in 1 of 2 intervals" in str(scenario.warnings[0])


def test_without_offers_there_is_a_warning(tmp_path: Path) -> None:
    found = warnings(tmp_path, {"offers.csv": None})
    assert found == [
        "offers.csv: there are no offers: nothing can be dispatched, and only posted prices can be checked"
    ]


def test_load_factor(tmp_path: Path) -> None:
    scenario = read(tmp_path)
    double = scenario.with_load_factor(2.0)
    for k in range(3):
        one, two = scenario.inputs(k), double.inputs(k)
        np.testing.assert_allclose(two.load_p, 2 * one.load_p)
        np.testing.assert_allclose(two.load_q, 2 * one.load_q)
        np.testing.assert_array_equal(two.p_max, one.p_max)
    np.testing.assert_allclose(double.tables["loads"]["mw"], 2 * scenario.tables["loads"]["mw"])
    assert scenario.tables["loads"]["mw"].iloc[0] == 90


def test_positions_outside_the_axis_are_refused(tmp_path: Path) -> None:
    scenario = read(tmp_path)
    for position in (-1, 3):
        with pytest.raises(IndexError, match="there are 3 intervals"):
            scenario.inputs(position)


def test_inputs_may_be_changed_without_harm(tmp_path: Path) -> None:
    scenario = read(tmp_path)
    before = scenario.inputs(0)
    for item in dataclasses.fields(before):
        value = getattr(before, item.name)
        if isinstance(value, np.ndarray) and value.dtype == float:
            value += 1.0
    assert scenario.inputs(0).load_p[1] == pytest.approx(0.9)
    assert scenario.inputs(0).p_max[0] == pytest.approx(2.0)


def test_tables_of_another_week_are_told(tmp_path: Path) -> None:
    """Nothing would come of them, and nothing else would say why."""
    other = "2025-03-07T23:00:00-07:00"
    posted = f"interval_start,node,lmp\n{other},North,20\n"
    held = "of an interval of loads.csv: nothing is held against them"
    positions = f"account,interval_start,node,mw\nCo-op,{other},North,5\nCo-op,{HOURS[0]},North,5\n"
    assert warnings(tmp_path, {"posted.csv": posted, "positions.csv": positions}) == [
        f"posted.csv, column interval_start: none of the rows is {held}",
        f"positions.csv, column interval_start: 1 of 2 rows are not {held}",
    ]
    longer = posted + f"{HOURS[0]},North,20\n"
    assert warnings(tmp_path / "longer", {"posted.csv": longer}) == []
