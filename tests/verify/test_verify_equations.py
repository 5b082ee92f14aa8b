"""The equations themselves: derivatives, the two ways to a residual, and how limits are settled."""

from __future__ import annotations

from dataclasses import fields, replace
from typing import Any

import numpy as np
import pytest
from verify_networks import everything, network, read

from compsize.study.records import NetworkTables
from compsize.verify.devices import TAP
from compsize.verify.flow import Equations, State, settle
from compsize.verify.follow import mismatch_mva
from compsize.verify.model import Added, Model, build_model
from compsize.verify.path import check_point, operating_point, trace, upper


def mixed(**unit: Any) -> NetworkTables:
    """Five buses: tap changer, shift, shunt, mixed loads, svc, statcom, and two units on one bus."""
    return network(
        buses=[{"bus": str(k)} for k in range(1, 6)],
        loads=[
            {"load": "a", "bus": "3", "p_mw": 60.0, "q_mvar": 20.0, "z_share_pct": 30.0, "i_share_pct": 20.0},
            {"load": "b", "bus": "4", "p_mw": 40.0, "q_mvar": 10.0},
            {"load": "c", "bus": "5", "p_mw": 30.0, "q_mvar": 12.0, "i_share_pct": 100.0},
        ],
        branches=[
            {"branch": "1", "from_bus": "1", "to_bus": "2", "r_pu": 0.01, "x_pu": 0.1, "b_pu": 0.05},
            {"branch": "2", "from_bus": "2", "to_bus": "3", "r_pu": 0.02, "x_pu": 0.15, "b_pu": 0.03},
            {"branch": "3", "from_bus": "1", "to_bus": "3", "r_pu": 0.01, "x_pu": 0.2, "tap": 0.98, "shift_deg": 4.0},
            {"branch": "4", "from_bus": "3", "to_bus": "4", "r_pu": 0.0, "x_pu": 0.1, "tap": 0.97}
            | {"regulated_bus": "4", "v_target_pu": 1.01, "tap_min": 0.85, "tap_max": 1.1, "tap_steps": 20},
            {"branch": "5", "from_bus": "3", "to_bus": "5", "r_pu": 0.02, "x_pu": 0.2},
        ],
        generators=[
            {"generator": "A", "bus": "1", "p_mw": 80.0, "v_set_pu": 1.04, "slack": True},
            {"generator": "B", "bus": "2", "p_mw": 30.0, "v_set_pu": 1.02, "q_min_mvar": -10.0, "q_max_mvar": 20.0},
            {"generator": "C", "bus": "2", "p_mw": 20.0, "v_set_pu": 1.02, "q_min_mvar": -5.0, "q_max_mvar": 10.0}
            | unit,
        ],
        shunts=[{"shunt": "s", "bus": "5", "b_mvar": 5.0, "g_mw": 1.0}],
        svcs=[
            {"svc": "v", "bus": "3", "kind": "svc", "q_min_mvar": -20.0, "q_max_mvar": 30.0, "v_ref_pu": 1.0}
            | {"slope_pct": 3.0},
            {"svc": "w", "bus": "5", "kind": "statcom", "q_min_mvar": -10.0, "q_max_mvar": 10.0, "v_ref_pu": 0.99}
            | {"slope_pct": 2.0},
        ],
    )


def made(net: NetworkTables, **options: Any) -> Model:
    model = build_model(net, everything(net, **options))
    assert isinstance(model, Model)
    return model


@pytest.mark.parametrize("limit", [0, 1, -1])
def test_jacobian_agrees_with_differences(limit: int) -> None:
    """dF/dy by central differences, at a random point, with devices regulating or at either limit."""
    equations = Equations(made(mixed(), taps="moving", slack_limits=False))
    assert TAP in equations.kind
    rng = np.random.default_rng(7)
    y = rng.normal(0.0, 0.1, equations.size + 1)
    y[equations.n : 2 * equations.n] += 1.0
    y[2 * equations.n : equations.size] += equations.neutral
    bounded = np.isfinite(equations.high)
    modes = np.where(bounded, limit, 0).astype(np.int8)
    exact = equations.jacobian(y, modes, 0).toarray()
    h = 1e-6
    for k in range(equations.size + 1):
        up, down = y.copy(), y.copy()
        up[k] += h
        down[k] -= h
        column = (equations.residual(up, modes, 0) - equations.residual(down, modes, 0)) / (2.0 * h)
        assert exact[:, k] == pytest.approx(column, abs=2e-8), k


def test_residual_agrees_with_branch_flows() -> None:
    """Bus balances summed from branch currents by hand are what the equations say, to rounding."""
    net = mixed()
    model = made(net)
    equations = Equations(model)
    state = operating_point(equations)
    assert state is not None
    v = equations.voltages(state.y)
    place = {bus: k for k, bus in enumerate(model.buses)}
    s = np.zeros(len(v), dtype=complex)
    for k in range(len(net.branches.branch)):
        f, t = place[net.branches.from_bus[k]], place[net.branches.to_bus[k]]
        y = 1.0 / complex(net.branches.r_pu[k], net.branches.x_pu[k])
        b = 0.5j * net.branches.b_pu[k]
        ratio = net.branches.tap[k] * np.exp(1j * np.deg2rad(net.branches.shift_deg[k]))
        behind = v[f] / ratio  # the ideal transformer stands at the from side
        s[f] += v[f] * np.conj(((y + b) * behind - y * v[t]) / np.conj(ratio))
        s[t] += v[t] * np.conj((y + b) * v[t] - y * behind)
    for k, bus in enumerate(net.loads.bus):
        size = abs(v[place[bus]])
        z, i = net.loads.z_share_pct[k] / 100.0, net.loads.i_share_pct[k] / 100.0
        drawn = complex(net.loads.p_mw[k], net.loads.q_mvar[k]) / 100.0
        s[place[bus]] += drawn * (1.0 - z - i + i * size + z * size**2)
    s[place["5"]] += (0.01 - 0.05j) * abs(v[place["5"]]) ** 2
    s[place["2"]] -= 0.5
    for d, u in zip(model.devices, equations.controls(state.y), strict=True):
        s[d.bus] -= 1j * d.output(abs(v[d.bus]), u)
    s[place["1"]] = 1j * s[place["1"]].imag  # the slack gives whatever active power is left
    assert np.abs(s).max() < 1e-9
    assert mismatch_mva(equations, state) < 1e-6


def test_mismatch_sees_a_wrong_state() -> None:
    """A voltage moved by 0.001 pu shows as a mismatch, so the check can fail."""
    equations = Equations(made(mixed()))
    state = operating_point(equations)
    assert state is not None
    y = state.y.copy()
    y[equations.n + 3] += 1e-3
    assert mismatch_mva(equations, State(y, state.modes, state.segment)) > 0.1


def test_settled_state_is_complementary() -> None:
    """After settling every device either regulates within its limits, or sits at one with its voltage beyond reach."""
    net = read("ieee118")
    for factor, least in ((0.4, 10), (1.0, 0)):
        model = build_model(net, everything(net), load_factor=factor)
        assert isinstance(model, Model)
        equations = Equations(model)
        state = operating_point(equations)
        assert state is not None
        limited = 0
        for d, u, mode in zip(model.devices, equations.controls(state.y), state.modes, strict=True):
            v = state.y[equations.n + d.bus]
            limited += mode != 0
            if mode == 0:
                assert d.low - 1e-8 <= u <= d.high + 1e-8
                assert v == pytest.approx(d.set_pu, abs=1e-9)
            else:
                assert u == pytest.approx(d.high if mode > 0 else d.low, abs=1e-9)
                assert mode * (d.set_pu - v) >= -1e-8
        assert limited >= least


def test_a_frozen_limit_finds_its_way_back() -> None:
    """Units frozen at a limit where they do not belong go back: the settled state does not depend on the start."""
    net = read("ieee30")
    equations = Equations(made(net))
    state = operating_point(equations)
    assert state is not None
    bounded = np.isfinite(equations.high)
    for modes in (np.where(bounded, 1, 0), np.where(bounded & (np.arange(equations.m) % 2 == 0), -1, 0)):
        assert modes.any()
        again = settle(equations, state.y, modes.astype(np.int8))
        assert again is not None
        assert again.y == pytest.approx(state.y, abs=1e-7)


def test_upper_and_lower_branch_are_told_apart() -> None:
    """Two buses with P = 0.8, X = 0.5: of the solutions V^2 = (1 +- 0.6) / 2 only the high one counts as upper."""
    net = network(
        buses=[{"bus": "S"}, {"bus": "L"}],
        loads=[{"load": "D", "bus": "L", "p_mw": 80.0, "q_mvar": 0.0}],
        branches=[{"branch": "1", "from_bus": "S", "to_bus": "L", "r_pu": 0.0, "x_pu": 0.5}],
        generators=[{"generator": "G", "bus": "S", "p_mw": 80.0, "v_set_pu": 1.0, "slack": True}],
    )
    equations = Equations(made(net))
    for square, expected in ((0.8, True), (0.2, False)):
        y = equations.start()
        y[1], y[3] = -np.arctan2(0.4, square), np.sqrt(square)
        state = settle(equations, y, equations.free_modes())
        assert state is not None
        assert state.y[3] == pytest.approx(np.sqrt(square), abs=1e-9)
        assert upper(equations, state) is expected


def test_moving_taps_hold_their_voltage_until_the_end_of_their_range() -> None:
    """With moving taps the regulated voltage is on target at base, and at the nose the tap is at its lower end."""
    model = made(mixed(), taps="moving")
    equations = Equations(model)
    state = operating_point(equations)
    assert state is not None
    j = [d.kind for d in model.devices].index(TAP)
    assert state.modes[j] == 0
    assert state.y[equations.n + model.devices[j].bus] == pytest.approx(1.01, abs=1e-9)
    nose = trace(model)
    assert "4" in nose.limited
    ratios = {"4": 0.85}
    assert check_point(model, nose.t_mw, nose.v, ratios).residual_mva < 1e-5
    assert nose.t_mw > 0.0


def test_two_rigid_devices_on_one_bus_share_it() -> None:
    """A unit and an SVC without slope that hold one voltage act like one source with the sum of both ranges.

    Both turn where the range is used up at V = 1, so the nose is the same however the two share it.
    """

    def net(q_max: float) -> NetworkTables:
        return network(
            buses=[{"bus": "S"}, {"bus": "L"}],
            loads=[{"load": "D", "bus": "L", "p_mw": 50.0, "q_mvar": 10.0}],
            branches=[{"branch": "1", "from_bus": "S", "to_bus": "L", "r_pu": 0.0, "x_pu": 0.5}],
            generators=[
                {"generator": "G", "bus": "S", "p_mw": 50.0, "v_set_pu": 1.0, "slack": True},
                {"generator": "H", "bus": "L", "p_mw": 0.0, "v_set_pu": 1.0, "q_min_mvar": 0.0, "q_max_mvar": q_max},
            ],
        )

    together = build_model(net(110.0), everything(net(110.0)), added=[Added("L", "svc", 30.0, v_ref_pu=1.0)])
    alone = build_model(net(140.0), everything(net(140.0)))
    assert isinstance(together, Model)
    assert isinstance(alone, Model)
    a, b = trace(together), trace(alone)
    assert (a.kind, b.kind) == ("limit", "limit")
    assert a.t_mw == pytest.approx(b.t_mw, rel=1e-6)


def test_noses_do_not_depend_on_bus_order_or_base() -> None:
    """Renumbering the buses or changing the MVA base leaves the nose as it is."""
    net = read("ieee14")
    nose = trace(made(net))
    order = list(reversed(range(14)))
    buses = replace(
        net.buses,
        **{
            f.name: tuple(getattr(net.buses, f.name)[k] for k in order)
            if isinstance(getattr(net.buses, f.name), tuple)
            else getattr(net.buses, f.name)[order]
            for f in fields(net.buses)
        },
    )
    branches = replace(
        net.branches, r_pu=net.branches.r_pu * 0.5, x_pu=net.branches.x_pu * 0.5, b_pu=net.branches.b_pu * 2
    )
    turned = trace(made(replace(net, buses=buses)))
    based = trace(made(replace(net, base_mva=50.0, branches=branches)))
    assert turned.t_mw == pytest.approx(nose.t_mw, rel=1e-9)
    assert based.t_mw == pytest.approx(nose.t_mw, rel=1e-9)
