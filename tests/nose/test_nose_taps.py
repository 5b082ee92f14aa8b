"""Tap changers that move: closed forms on two buses, a source of 1 pu behind X = 0.5 and a unity-power-factor load."""

from __future__ import annotations

import math

import pytest
from nose_cases import Case, find
from verify_networks import everything, network

from compsize.network.cases import build_case
from compsize.network.grid import build_grid
from compsize.nose.engine import Engine
from compsize.study.records import NetworkTables

X, LOW, HIGH = 0.5, 0.85, 1.15


def two_buses(side: str, beside: bool = False) -> NetworkTables:
    """A tap changer between source S and load L that holds L, with its ratio at S (``to``) or at L (``from``)."""
    f, t = ("S", "L") if side == "to" else ("L", "S")
    line = {"branch": "line", "from_bus": "S", "to_bus": "L", "r_pu": 0.0, "x_pu": 0.25}
    return network(
        buses=[{"bus": "S"}, {"bus": "L"}],
        loads=[{"load": "D", "bus": "L", "p_mw": 40.0, "q_mvar": 0.0}],
        branches=[
            {"branch": "T", "from_bus": f, "to_bus": t, "r_pu": 0.0, "x_pu": X, "regulated_bus": "L"}
            | {"v_target_pu": 1.0, "tap_min": LOW, "tap_max": HIGH, "tap_steps": 20},
            *([line] if beside else []),
        ],
        generators=[{"generator": "A", "bus": "S", "p_mw": 40.0, "v_set_pu": 1.0, "slack": True}],
    )


def nose(net: NetworkTables, taps: str) -> Case:
    return find(net, everything(net, taps=taps))


@pytest.mark.parametrize("side", ["to", "from"])
def test_locked(side: str) -> None:
    """A locked ratio of 1 leaves the plain line: P = 1 / (2 X)."""
    case = nose(two_buses(side), "locked")
    assert case.nose.kind == "fold"
    assert case.nose_mw == pytest.approx(100.0, rel=1e-9)


@pytest.mark.parametrize("side", ["from", "to"])
def test_fold_with_the_ratio_at_its_end(side: str) -> None:
    """Beyond the end of the ratio the curve goes on to the fold of that ratio.

    At S a ratio t makes the source 1 / t: P = 1 / (2 X t^2) at V = 1 / (t sqrt(2)); at L it makes the source t behind
    X t^2: P = 1 / (2 X) at V = t / sqrt(2).
    """
    case = nose(two_buses(side), "moving")
    assert case.nose.kind == "fold"
    p, v = (1.0 / (2.0 * X * LOW**2), 1.0 / (LOW * math.sqrt(2.0)))
    if side == "from":
        p, v = 1.0 / (2.0 * X), HIGH / math.sqrt(2.0)
    assert case.nose_mw / 100.0 == pytest.approx(p, rel=1e-9)
    assert case.v("L") == pytest.approx(v, abs=1e-6)


def test_ratio_holds_the_target_until_it_ends() -> None:
    """At 110 MW the load's voltage is held at 1 by the ratio 1 / sqrt(1 + (P X)^2): Q = 0, V^2 = V cos d / t."""
    net = two_buses("to")
    grid = build_grid(net, everything(net, taps="moving"))
    engine, model = Engine(grid), build_case(grid)
    point = engine.settle(model, engine.flat(model), 110.0 / 40.0 - 1.0)
    assert point is not None
    assert point.v[grid.node[1]] == pytest.approx(1.0, abs=1e-10)
    assert point.v[grid.tap_nodes[0]] == pytest.approx(1.0 / math.sqrt(1.0 + (1.1 * X) ** 2), abs=1e-10)


@pytest.mark.parametrize("side", ["to", "from"])
def test_a_lost_tap_changer_takes_its_branch(side: str) -> None:
    """With a line of X = 0.25 beside it, the loss of the tap changer leaves that line's nose."""
    net = two_buses(side, beside=True)
    case = find(net, everything(net, taps="moving"), (("branch", "T"),))
    assert case.nose.kind == "fold"
    assert case.nose_mw == pytest.approx(200.0, rel=1e-9)
