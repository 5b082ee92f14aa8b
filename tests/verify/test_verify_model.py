"""From tables to models: pick-up rules, lost units and slacks, islands, equipment."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from verify_networks import everything, network

from compsize.errors import UsageError
from compsize.study.records import NetworkTables
from compsize.verify.flow import Equations
from compsize.verify.model import Added, Model, NotEvaluable, build_model
from compsize.verify.path import operating_point, trace
from compsize.verify.pickup import fill


def ring(**unit: Any) -> NetworkTables:
    """Four buses in a ring, a fifth on a spur; units A (slack, bus 1), B (bus 2), C (bus 3); loads at 3, 4 and 5."""
    return network(
        buses=[{"bus": str(k)} for k in range(1, 6)],
        loads=[
            {"load": "a", "bus": "3", "p_mw": 50.0, "q_mvar": 10.0},
            {"load": "b", "bus": "4", "p_mw": 40.0, "q_mvar": 10.0},
            {"load": "c", "bus": "5", "p_mw": 10.0, "q_mvar": 5.0},
        ],
        branches=[
            {"branch": f"{f}-{t}", "from_bus": f, "to_bus": t, "r_pu": 0.01, "x_pu": 0.1}
            for f, t in ("12", "23", "34", "41", "45")
        ],
        generators=[
            {"generator": "A", "bus": "1", "p_mw": 30.0, "v_set_pu": 1.03, "slack": True, "p_max_mw": 200.0},
            {"generator": "B", "bus": "2", "p_mw": 40.0, "v_set_pu": 1.02, "p_max_mw": 60.0, "pickup": 0.75} | unit,
            {"generator": "C", "bus": "3", "p_mw": 20.0, "v_set_pu": 1.01, "p_max_mw": 30.0, "pickup": 0.25},
        ],
    )


def made(net: NetworkTables, lost: list[tuple[str, str]] | None = None, **options: Any) -> Model:
    model = build_model(net, everything(net, **options), lost or [])
    assert isinstance(model, Model)
    return model


def power(model: Model, t_mw: float) -> list[float]:
    """MW of the units other than the slack."""
    return model.schedule.power(t_mw, model.schedule.segment(t_mw))[0].tolist()


@pytest.mark.parametrize(
    ("pickup", "expected"),
    [
        ("proportional", [40.0 + 10.0 * 40.0 / 100.0, 20.0 + 10.0 * 20.0 / 100.0]),
        ("slack", [40.0, 20.0]),
        ("headroom", [40.0 + 10.0 * 20.0 / 200.0, 20.0 + 10.0 * 10.0 / 200.0]),
        ("table", [40.0 + 7.5, 20.0 + 2.5]),
    ],
)
def test_pickup_of_ten_megawatts(pickup: str, expected: list[float]) -> None:
    """Shares by p_mw over the base load, none, by p_max - p (of 170 + 20 + 10 MW), and by the pickup column."""
    assert power(made(ring(), pickup=pickup), 10.0) == pytest.approx(expected)


def test_slack_takes_the_remainder_and_the_losses() -> None:
    """All generation together is the load plus losses, whatever the others pick up."""
    model = made(ring())
    nose = trace(model, stop_mw=25.0)
    entries = model.entries
    flow = nose.v[entries.row] * np.conj(entries.value * nose.v[entries.col])
    s = np.zeros(5, dtype=complex)
    np.add.at(s, entries.row, flow)
    losses = 100.0 * s.real.sum()
    slack = 100.0 * s.real[0]
    assert losses > 0.0
    assert slack == pytest.approx(125.0 + losses - sum(power(model, 25.0)), abs=1e-6)


def test_a_unit_at_its_maximum_stops_and_the_others_take_its_share() -> None:
    """By the table: C (25 %) is full after 40 MW, B (75 %) then takes all until it is full, then the slack does."""
    units = ring()
    generators = replace(units.generators, p_max_mw=np.array([200.0, 80.0, 30.0]))
    model = made(replace(units, generators=generators), pickup="table", pickup_limits=True)
    assert power(model, 20.0) == pytest.approx([55.0, 25.0])
    assert power(model, 40.0) == pytest.approx([70.0, 30.0])
    assert power(model, 45.0) == pytest.approx([75.0, 30.0])
    assert power(model, 60.0) == pytest.approx([80.0, 30.0])
    assert model.schedule.start_mw.tolist() == pytest.approx([0.0, 40.0, 50.0])


def test_fill_is_continuous_and_never_above_the_maximum() -> None:
    """Over random shares and maxima the schedule has no jumps, and no unit passes its maximum."""
    rng = np.random.default_rng(3)
    for _ in range(50):
        n = int(rng.integers(1, 7))
        p = rng.uniform(0.0, 50.0, n)
        weight = rng.uniform(0.0, 0.3, n)
        p_max = p + rng.uniform(0.0, 20.0, n)
        schedule = fill(p, weight, p_max)
        for t in np.linspace(0.0, 300.0, 61):
            now = schedule.power(t, schedule.segment(t))[0]
            assert (now <= p_max + 1e-9).all()
            again = schedule.power(t + 1e-9, schedule.segment(t + 1e-9))[0]
            assert again == pytest.approx(now, abs=1e-7)
        assert schedule.power(-5.0, schedule.segment(-5.0))[0] == pytest.approx(p - 5.0 * weight)


def test_pickup_limits_change_the_nose_at_the_breakpoint_only() -> None:
    """A limit on pick-up that is not reached leaves the path alone; one that is reached moves the nose."""
    net = ring()
    free = trace(made(net)).t_mw
    wide = replace(net, generators=replace(net.generators, p_max_mw=np.full(3, 1e5)))
    assert trace(made(wide, pickup_limits=True)).t_mw == pytest.approx(free, rel=1e-10)
    assert abs(trace(made(net, pickup_limits=True)).t_mw - free) > 1.0


def test_lost_generation_is_shared_by_the_units_left() -> None:
    """Loss of C (20 MW): by p_mw over the 100 MW of load, B takes 40 % of it; the slack alone by ``slack``."""
    assert power(made(ring(), [("generator", "C")]), 0.0) == pytest.approx([40.0 + 20.0 * 40.0 / 100.0])
    assert power(made(ring(), [("generator", "C")], pickup="slack"), 0.0) == pytest.approx([40.0])
    assert power(made(ring(), [("generator", "C")], pickup="table"), 0.0) == pytest.approx([60.0])


def test_a_lost_slack_passes_to_the_largest_unit() -> None:
    """Without A the unit with most MW, B, balances; C takes its part of the 30 MW that A gave."""
    model = made(ring(), [("generator", "A")])
    assert model.buses[model.slack_bus] == "2"
    assert power(model, 0.0) == pytest.approx([20.0 + 30.0 * 20.0 / 100.0])
    assert any("slack passes to B" in note for note in model.notes)


def test_an_island_without_a_source_is_dropped() -> None:
    """Loss of the spur takes bus 5 and its 10 MW out of the base, and says so; the others grow in its place."""
    model = made(ring(), [("branch", "4-5")])
    assert model.buses == ("1", "2", "3", "4")
    assert model.base_mw == pytest.approx(90.0)
    assert model.notes == ("dropped: 5",)
    assert 100.0 * model.load_growth.real.sum() == pytest.approx(1.0)


def test_a_lost_part_with_the_slack_is_not_evaluable() -> None:
    """Cut off from the rest, the slack's bus alone cannot carry the case."""
    found = build_model(ring(), everything(ring()), [("branch", "1-2"), ("branch", "4-1")])
    assert isinstance(found, NotEvaluable)
    assert "slack" in found.reason


def test_without_growing_load_a_case_is_not_evaluable() -> None:
    """Where all load that grows is lost there is no direction to follow."""
    lost = [("load", "a"), ("load", "b"), ("load", "c")]
    found = build_model(ring(), everything(ring()), lost)
    assert isinstance(found, NotEvaluable)
    assert "growing load" in found.reason


def test_a_lost_load_leaves_the_base() -> None:
    """The margin of an outage that loses a load counts the MW of the loads left."""
    model = made(ring(), [("load", "a")])
    assert model.base_mw == pytest.approx(50.0)
    assert power(model, 10.0) == pytest.approx([40.0 + 10.0 * 40.0 / 50.0, 20.0 + 10.0 * 20.0 / 50.0])


def test_unknown_elements_are_errors() -> None:
    """An outage of something that is not in the tables is a wrong call."""
    with pytest.raises(UsageError, match="no branch '9-9'"):
        build_model(ring(), everything(ring()), [("branch", "9-9")])
    with pytest.raises(UsageError, match="no pump 'x'"):
        build_model(ring(), everything(ring()), [("pump", "x")])


def test_units_of_one_bus_share_their_limits() -> None:
    """Two units on a bus act as one with the sum of their reactive ranges, whatever the split."""
    one = ring(q_min_mvar=-10.0, q_max_mvar=20.0)
    rows = {"bus": ["1", "2", "2", "3"], "p": [30.0, 15.0, 25.0, 20.0]}
    g = one.generators
    two = replace(
        one,
        generators=replace(
            g,
            generator=("A", "B1", "B2", "C"),
            bus=tuple(rows["bus"]),
            p_mw=np.array(rows["p"]),
            v_set_pu=np.array([1.03, 1.02, 1.02, 1.01]),
            q_min_mvar=np.array([-np.inf, -4.0, -6.0, -np.inf]),
            q_max_mvar=np.array([np.inf, 13.0, 7.0, np.inf]),
            p_max_mw=np.full(4, np.nan),
            pickup=np.full(4, np.nan),
            slack=np.array([True, False, False, False]),
            status=np.ones(4, dtype=bool),
        ),
    )
    assert trace(made(two)).t_mw == pytest.approx(trace(made(one)).t_mw, rel=1e-12)
    assert trace(made(one)).t_mw < trace(made(one, generator_limits=False)).t_mw


def test_slack_limits_bind_only_where_they_are_asked_for() -> None:
    """A limited slack loses its voltage and with it margin, but only with ``slack_limits``."""
    net = ring()
    low, high = net.generators.q_min_mvar.copy(), net.generators.q_max_mvar.copy()
    low[0], high[0] = -50.0, 30.0
    net = replace(net, generators=replace(net.generators, q_min_mvar=low, q_max_mvar=high))
    assert trace(made(net, slack_limits=True)).t_mw < trace(made(net)).t_mw - 1.0


def test_light_load_is_shared_like_growth() -> None:
    """At 40 % of base load the units give way by their shares, so that about 40 % of each is left."""
    model = build_model(ring(), everything(ring()), load_factor=0.4)
    assert isinstance(model, Model)
    assert power(model, 0.0) == pytest.approx([40.0 * 0.4, 20.0 * 0.4])
    assert 100.0 * model.load_base.real.sum() == pytest.approx(40.0)


def test_an_added_device_without_a_bus_in_service_is_left_out() -> None:
    """Equipment on a part that an outage drops takes no part in the case."""
    net = ring()
    added = [Added("5", "svc", 20.0), Added("5", "bank", 20.0)]
    with_it = build_model(net, everything(net), [("branch", "4-5")], added)
    assert isinstance(with_it, Model)
    assert len(with_it.devices) == len(made(net, [("branch", "4-5")]).devices)
    assert trace(with_it).t_mw == pytest.approx(trace(made(net, [("branch", "4-5")])).t_mw, rel=1e-12)


def test_negative_load_and_reactance_are_solved() -> None:
    """A negative load and a series capacitor on a branch are no obstacle to the base state or the nose."""
    net = ring()
    net = replace(
        net,
        loads=replace(net.loads, p_mw=np.array([50.0, 40.0, -8.0]), q_mvar=np.array([10.0, 10.0, -2.0])),
        branches=replace(net.branches, x_pu=np.array([0.1, 0.1, 0.1, 0.1, -0.02]), r_pu=np.full(5, 0.001)),
    )
    model = made(net)
    assert operating_point(Equations(model)) is not None
    nose = trace(model)
    assert nose.kind == "fold"
    assert model.base_mw == pytest.approx(82.0)
