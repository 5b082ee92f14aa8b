"""What defines a nose: the equations hold there, the Jacobian is singular at a fold, a device sits on a corner else."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import Literal

import numpy as np
import pytest
from nose_cases import Case, Lost, find, of_everything
from numpy.typing import NDArray
from verify_networks import everything, read

from compsize.flow.equations import DEAD, factorise, new_state, residual
from compsize.flow.lu import new_factors, solve
from compsize.network.cases import Addition, build_case
from compsize.nose.engine import Engine, Nose, Point
from compsize.nose.newton import floating
from compsize.study.records import NetworkTables
from compsize.verify.model import Model, build_model
from compsize.verify.path import check_point, trace

NETWORKS: dict[str, Sequence[Lost]] = {
    "ieee14": [(), (("branch", "3"),), (("branch", "10"),), (("generator", "2"),), (("branch", "15"), ("shunt", "S9"))],
    "ieee30": [(), (("branch", "2"),), (("branch", "36"),), (("load", "L5"),), (("branch", "10"), ("branch", "20"))],
    "everything": [(), (("branch", "2"),), (("branch", "1"),), (("generator", "B"),), (("svc", "v"),)],
}
CASES = [(name, lost) for name, events in NETWORKS.items() for lost in events]


def tables(name: str) -> NetworkTables:
    return of_everything() if name == "everything" else read(name)


def least_singular(case: Case, point: Point, segments: NDArray[np.int64]) -> float:
    """Least singular value of the Jacobian at a point with given segments, from its inverse by the factors."""
    pattern, model = case.grid.pattern, case.model.case
    state = new_state(case.grid.count, case.grid.tap_branches.size)
    state.th[:], state.v[:], state.seg[:] = point.th, point.v, segments
    out = np.zeros(2 * case.grid.count)
    residual(pattern, model, state, point.loading, 0, out)
    factors = new_factors(pattern)
    if factorise(pattern, model, state, point.loading, factors, -1, 0.0) == 0.0:
        return 0.0
    inverse = np.eye(out.size)
    for k in range(out.size):
        column = inverse[:, k].copy()
        solve(pattern, factors, column)
        inverse[:, k] = column
    return float(1.0 / np.linalg.norm(inverse, 2))


def rows_at(case: Case, point: Point) -> float:
    """Largest row of the equations at a point [pu]."""
    state = new_state(case.grid.count, case.grid.tap_branches.size)
    state.th[:], state.v[:], state.seg[:] = point.th, point.v, point.seg
    out = np.zeros(2 * case.grid.count)
    return float(residual(case.grid.pattern, case.model.case, state, point.loading, 0, out))


@pytest.mark.parametrize(("name", "lost"), CASES)
def test_nose(name: str, lost: Lost) -> None:
    """The rows vanish at the nose; the Jacobian is singular at a fold, and regular where a device is on a corner."""
    case = find(tables(name), lost=lost)
    nose = case.nose
    assert nose.kind in ("fold", "limit")
    assert nose.point is not None
    assert rows_at(case, nose.point) < 1e-9
    _within_limits(case, nose.point)
    here = least_singular(case, nose.point, nose.point.seg)
    assert nose.base is not None
    before = least_singular(case, nose.base, nose.base.seg)
    if nose.kind == "fold":
        assert here < 1e-6 * before
        assert nose.culprit == -1
    else:
        assert here > 1e-4 * before
        _corner(case, nose)


def _within_limits(case: Case, point: Point) -> None:
    """What floats at each device lies in its segment."""
    state = new_state(case.grid.count, case.grid.tap_branches.size)
    state.th[:], state.v[:], state.seg[:] = point.th, point.v, point.seg
    residual(case.grid.pattern, case.model.case, state, point.loading, 0, np.zeros(2 * case.grid.count))
    for i in case.model.case.dev:
        s = case.model.case.segptr[i] + point.seg[i]
        value = floating(case.model.case, state, i)
        assert case.model.case.low[s] - 1e-8 <= value <= case.model.case.high[s] + 1e-8


def _corner(case: Case, nose: Nose) -> None:
    """The device named at a limit-induced nose is at its limit and at its set-point, and no load more has a state."""
    assert nose.point is not None
    i = nose.culprit
    assert i >= 0
    state = new_state(case.grid.count, case.grid.tap_branches.size)
    state.th[:], state.v[:], state.seg[:] = nose.point.th, nose.point.v, nose.point.seg
    residual(case.grid.pattern, case.model.case, state, nose.loading, 0, np.zeros(2 * case.grid.count))
    s = case.model.case.segptr[i] + nose.point.seg[i]
    value = floating(case.model.case, state, i)
    assert min(abs(value - case.model.case.low[s]), abs(value - case.model.case.high[s])) < 1e-8


@pytest.mark.parametrize(("name", "lost"), CASES)
def test_nose_agrees_with_the_second_opinion(name: str, lost: Lost) -> None:
    """Kind and margin are those that separate code traces, and its own residual of the engine's point is nil."""
    _agrees(tables(name), lost, "locked")


@pytest.mark.parametrize("lost", NETWORKS["everything"])
def test_nose_with_moving_taps_agrees_with_the_second_opinion(lost: Lost) -> None:
    """The same with tap changers that move, on either side of their branch."""
    _agrees(of_everything(), lost, "moving")


def _agrees(net: NetworkTables, lost: Lost, taps: Literal["locked", "moving"]) -> None:
    growth = everything(net, taps=taps)
    case = find(net, growth, lost)
    model = build_model(net, growth, lost)
    assert isinstance(model, Model)
    other = trace(model)
    assert case.nose.kind == other.kind
    assert case.margin_mw == pytest.approx(other.t_mw, abs=1e-7 * (case.model.base_mw + abs(other.t_mw)))
    ratios: dict[str, float] = {}
    assert case.nose.point is not None
    for m, k in enumerate(case.grid.tap_branches.tolist()):
        branch = net.branches.branch[int(case.grid.branch_row[k])]
        ratios[branch] = float(case.nose.point.v[case.grid.tap_nodes[m]])
    alive = [k for k, bus in enumerate(net.buses.bus) if bus in model.buses]
    check = check_point(model, case.margin_mw, case.complex_v()[alive], ratios)
    assert check.residual_mva < 1e-5


@pytest.mark.parametrize(("name", "lost"), CASES)
def test_loading_grows_along_the_way(name: str, lost: Lost) -> None:
    """From the operating point the loading never falls, the nose is the largest, and beyond it nothing is solved."""
    net = tables(name)
    case = find(net, everything(net), lost)
    engine = Engine(case.grid)
    nose = engine.nose(case.model, points=1000)
    loading = nose.log[:, 0]
    assert loading.size > 5
    assert loading[0] == pytest.approx(0.0, abs=1e-12)
    assert (np.diff(loading) >= -1e-10).all()
    assert loading.max() == pytest.approx(nose.loading, abs=1e-9)
    near = nose.point
    assert near is not None
    assert engine.settle(case.model, near, nose.loading * (1.0 + 1e-3) + 1e-4) is None


def test_base_case_solves_at_high_voltage() -> None:
    """Every bus of the operating point lies above 0.9 pu: limits are looked at after the equations are solved."""
    for name in ("ieee14", "ieee30", "ieee118"):
        net = read(name)
        case = find(net)
        base = case.nose.base
        assert base is not None
        assert base.v[case.grid.node].min() > 0.9


def test_the_same_nose_from_any_start() -> None:
    """Tables without a starting point, and with a foolish one, give the same nose."""
    net = read("ieee30")
    expected = find(net).margin_mw
    for v, angle in ((np.nan, np.nan), (0.9, 20.0)):
        buses = replace(net.buses, v_pu=net.buses.v_pu * 0.0 + v, angle_deg=net.buses.angle_deg * 0.0 + angle)
        assert find(replace(net, buses=buses)).margin_mw == pytest.approx(expected, rel=1e-9)


def test_a_near_nose_is_the_traced_one() -> None:
    """From the nose of the intact network with one step less the nose of the next is the one traced from the base."""
    case = find(read("ieee30"))
    engine = Engine(case.grid)
    near = case.nose
    bus = case.grid.bus_index["30"]
    for step in range(1, 6):
        model = build_case(case.grid, (), (Addition(bus, b_pu=0.04 * step),))
        traced = engine.nose(model)
        found = engine.nose_near(model, near)
        assert found is not None
        assert found.kind == traced.kind
        assert found.loading == pytest.approx(traced.loading, rel=1e-9)
        near = found


def test_cut_off_buses_keep_still() -> None:
    """Buses that an outage cuts off keep their start through the trace and enter no row."""
    net = of_everything()
    case = find(net, everything(net), (("branch", "7"),))
    assert case.nose.point is not None
    node = case.grid.node[case.grid.bus_index["7"]]
    assert case.model.case.role[node] & DEAD
    assert case.nose.point.v[node] == 1.0
    assert case.nose.point.th[node] == 0.0
