"""Two buses: noses against closed forms (Van Cutsem and Vournas 1998, chapter 2)."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from verify_networks import everything, network, two_buses

from compsize.study.records import Growth, NetworkTables
from compsize.verify.model import Added, Model, build_model
from compsize.verify.path import check_point, holds, trace


def model(net: NetworkTables, growth: Growth | None = None, **options: Any) -> Model:
    made = build_model(net, growth or everything(net), **options)
    assert isinstance(made, Model)
    return made


def nose(net: NetworkTables, **options: Any) -> tuple[str, float, float]:
    """Kind, nose of the load in pu, and voltage of bus L."""
    case = model(net, **options)
    found = trace(case)
    load = (case.base_mw + found.t_mw) / case.base_mva
    return found.kind, load, float(abs(found.v[case.buses.index("L")]))


def bank(mvar: float) -> list[Added]:
    return [Added("L", "bank", mvar)]


@pytest.mark.parametrize("power_factor", [0.9, 0.95, 1.0])
@pytest.mark.parametrize("b", [0.0, 0.2, 0.4])
@pytest.mark.parametrize("x", [0.25, 0.5])
def test_lossless_nose_is_the_closed_form(power_factor: float, b: float, x: float) -> None:
    """P = E^2 cos phi / (2 X (1 - BX)(1 + sin phi)) and V = E / ((1 - BX) sqrt(2 (1 + sin phi)))."""
    sin = math.sqrt(1.0 - power_factor**2)
    kind, p, v = nose(two_buses((x,), power_factor=power_factor), added=bank(100.0 * b))
    assert kind == "fold"
    assert p == pytest.approx(power_factor / (2.0 * x * (1.0 - b * x) * (1.0 + sin)), rel=1e-10)
    assert v == pytest.approx(1.0 / ((1.0 - b * x) * math.sqrt(2.0 * (1.0 + sin))), rel=1e-5)


@pytest.mark.parametrize(("b", "expected"), [(0.0, (0.624157, 0.578800)), (0.4, (0.757477, 0.712443))])
def test_nose_behind_a_resistance(b: float, expected: tuple[float, float]) -> None:
    """Z = 0.10 + j0.50, 0.95 lagging, by the Thevenin form P = E'^2 cos phi / (2 |Z'| (1 + cos(theta' - phi)))."""
    z = complex(0.1, 0.5)
    z_b = z / (1.0 + 1j * b * z)
    angle = np.angle(z_b) - math.acos(0.95)
    e_b = 1.0 / abs(1.0 + 1j * b * z)
    kind, p, v = nose(two_buses((0.5,), r=0.1, power_factor=0.95), added=bank(100.0 * b))
    assert kind == "fold"
    assert (p, v) == pytest.approx(expected, abs=6e-7)
    assert p == pytest.approx(e_b**2 * 0.95 / (2.0 * abs(z_b) * (1.0 + math.cos(angle))), rel=1e-10)


def test_losing_one_of_two_lines_halves_the_nose() -> None:
    """Where two equal lines are the whole reactance the loss of one halves the power that can be delivered."""
    net = two_buses((0.5, 0.5), power_factor=0.95)
    both, one = nose(net)[1], nose(net, lost=[("branch", "line2")])[1]
    assert both == pytest.approx(1.447895, abs=5e-7)
    assert one == pytest.approx(0.5 * both, rel=1e-10)


def test_sizing_margins_for_nought_to_five_steps() -> None:
    """80 MW at 0.95 lagging, X 0.25 going to 0.50, steps of 10 Mvar: margins from (1/X)(1 - P(0)/P) solved for P."""
    net = two_buses((0.5, 0.5), p=80.0, power_factor=0.95)
    margins = [
        trace(model(net, lost=[("branch", "line1")], added=bank(10.0 * k) if k else [])).t_mw / 0.8 for k in range(6)
    ]
    assert margins == pytest.approx([-9.5066, -4.7438, 0.5483, 6.4629, 13.1168, 20.6579], abs=6e-5)


def test_negative_margin_starts_below_the_base() -> None:
    """A base load without a solution gives a negative margin, found from a lower loading."""
    found = trace(model(two_buses((0.5,), p=80.0, power_factor=0.95)))
    assert found.kind == "fold"
    assert found.start_mw < found.t_mw < 0.0


@pytest.mark.parametrize("b", [0.2, 0.4, 0.55])
def test_svc_ends_in_a_fold_when_it_is_small(b: float) -> None:
    """E = V_ref = 1, X = 0.5, no slope, B below the change-over at 0.585786: the fold of the same shunt."""
    kind, p, _ = nose(two_buses(), added=[Added("L", "svc", 100.0 * b, v_ref_pu=1.0)])
    assert kind == "fold"
    assert p == pytest.approx(1.0 / (2.0 * 0.5 * (1.0 - 0.5 * b)), rel=1e-10)


@pytest.mark.parametrize("b", [0.59, 0.8, 1.2])
def test_svc_ends_at_its_limit_when_it_is_large(b: float) -> None:
    """Beyond the change-over the loading turns where the limit is reached: P = sqrt(1 - (1 - BX)^2) / X, V = 1."""
    case = model(two_buses(), added=[Added("L", "svc", 100.0 * b, v_ref_pu=1.0, name="new")])
    found = trace(case)
    assert (found.kind, found.device) == ("limit", "new")
    assert (10.0 + found.t_mw) / 100.0 == pytest.approx(math.sqrt(1.0 - (1.0 - 0.5 * b) ** 2) / 0.5, rel=1e-10)
    assert abs(found.v[1]) == pytest.approx(1.0, abs=1e-10)


def test_statcom_at_its_current_limit() -> None:
    """I = 0.4, X = 0.5: V = (3a + sqrt(a^2 + 8)) / 4 with a = XI, P = V sqrt(1 - (V - a)^2) / X."""
    a = 0.2
    v_nose = (3.0 * a + math.sqrt(a**2 + 8.0)) / 4.0
    kind, p, v = nose(two_buses(), added=[Added("L", "statcom", 40.0, v_ref_pu=1.0)])
    assert kind == "fold"
    assert p == pytest.approx(v_nose * math.sqrt(1.0 - (v_nose - a) ** 2) / 0.5, rel=1e-10)
    assert (p, v) == pytest.approx((1.292182, 0.858872), abs=1e-6)


def test_slope_counts_on_the_capacitive_rating() -> None:
    """An SVC with 5 % slope reaches its limit at V = V_ref - 0.05 V, as its current is V of the rated current there."""
    x, b = 0.5, 1.2
    case = model(two_buses((x,)), added=[Added("L", "svc", 100.0 * b, slope_pct=5.0, v_ref_pu=1.0, name="new")])
    found = trace(case)
    v = 1.0 / 1.05
    p = math.sqrt((v / x) ** 2 - (b * v**2 - v**2 / x) ** 2)
    assert (found.kind, found.device) == ("limit", "new")
    assert abs(found.v[1]) == pytest.approx(v, abs=1e-10)
    assert (10.0 + found.t_mw) / 100.0 == pytest.approx(p, rel=1e-10)


@pytest.mark.parametrize(("b", "expected"), [(0.0, 0.60063), (0.2, 0.58290), (0.4, 0.55619)])
def test_a_bank_at_an_impedance_load_lowers_the_nose(b: float, expected: float) -> None:
    """E = 1, X = 0.5 to a growing load, a further X = 0.5 to a constant-impedance load G = 1 with B: closed values."""
    net = network(
        buses=[{"bus": "S"}, {"bus": "L"}, {"bus": "Z"}],
        loads=[
            {"load": "D", "bus": "L", "p_mw": 10.0, "q_mvar": 0.0},
            {"load": "C", "bus": "Z", "p_mw": 100.0, "q_mvar": 0.0, "z_share_pct": 100.0},
        ],
        branches=[
            {"branch": "1", "from_bus": "S", "to_bus": "L", "r_pu": 0.0, "x_pu": 0.5},
            {"branch": "2", "from_bus": "L", "to_bus": "Z", "r_pu": 0.0, "x_pu": 0.5},
        ],
        generators=[{"generator": "G", "bus": "S", "p_mw": 0.0, "v_set_pu": 1.0, "slack": True}],
    )
    growth = Growth(("D",), (1.0,), (0.0,), 10.0, "D", "as base")
    added = [Added("Z", "bank", 100.0 * b)] if b else []
    found = trace(model(net, growth, added=added))
    assert 0.1 + found.t_mw / 100.0 == pytest.approx(expected, abs=6e-6)


def test_an_svc_can_lower_the_nose() -> None:
    """E = 1.05, X = 0.1 + 0.4, B = 0.4 at the load: an SVC holding 0.95 at the junction takes 1.37813 to 1.34300."""
    net = network(
        buses=[{"bus": "S"}, {"bus": "J"}, {"bus": "L"}],
        loads=[{"load": "D", "bus": "L", "p_mw": 10.0, "q_mvar": 0.0}],
        branches=[
            {"branch": "1", "from_bus": "S", "to_bus": "J", "r_pu": 0.0, "x_pu": 0.1},
            {"branch": "2", "from_bus": "J", "to_bus": "L", "r_pu": 0.0, "x_pu": 0.4},
        ],
        generators=[{"generator": "G", "bus": "S", "p_mw": 10.0, "v_set_pu": 1.05, "slack": True}],
        shunts=[{"shunt": "B", "bus": "L", "b_mvar": 40.0}],
    )
    assert nose(net)[1] == pytest.approx(1.37813, abs=6e-6)
    svc = Added("J", "svc", 1000.0, absorb_mvar=1000.0, v_ref_pu=0.95)
    assert nose(net, added=[svc])[1] == pytest.approx(1.34300, abs=6e-6)


def test_constant_impedance_never_turns() -> None:
    """Loads that are all constant impedance draw their current from any voltage: there is no nose."""
    found = trace(model(two_buses(z_share_pct=100.0)))
    assert found.kind == "none"
    assert found.t_mw >= 50.0 * 10.0


def test_constant_current_nose() -> None:
    """Unity constant current I = P: V^2 = 1 - (X I)^2 has no solution beyond I = 1/X, where V is 0."""
    case = model(two_buses(i_share_pct=100.0))
    below = trace(case, stop_mw=180.0)
    assert below.kind == "reached"
    assert abs(below.v[1]) == pytest.approx(math.sqrt(1.0 - (0.5 * 1.9) ** 2), abs=1e-10)


def test_holds_up_to_the_nose_and_not_beyond() -> None:
    """A margin just below the nose is held, one just above is not, and the answer carries the nose."""
    case = model(two_buses())
    assert holds(case, 89.999).held
    over = holds(case, 90.001)
    assert not over.held
    assert over.reached_mw == pytest.approx(90.0, abs=1e-8)
    assert over.nose is not None
    assert over.nose.kind == "fold"


def test_holds_is_not_fooled_by_a_solution_after_the_nose() -> None:
    """Beyond a limit-induced nose the lower branch still has solutions; none of them proves a margin."""
    case = model(two_buses(), added=[Added("L", "svc", 80.0, v_ref_pu=1.0)])
    assert holds(case, 149.9).held
    assert not holds(case, 150.1).held
    assert not holds(case, 156.0).held


def test_check_point_judges_right_and_wrong_points() -> None:
    """A true fold has no residual and a singular Jacobian; a point moved off the curve has a residual."""
    case = model(two_buses())
    found = trace(case)
    good = check_point(case, found.t_mw, found.v)
    assert good.residual_mva < 1e-6
    assert good.smallest_singular < 1e-5
    assert check_point(case, found.t_mw, found.v * np.array([1.0, 1.01])).residual_mva > 0.1
    assert check_point(case, 0.5 * found.t_mw, found.v).residual_mva > 1.0


def test_check_point_names_the_device_of_a_limit_nose() -> None:
    """At a limit-induced nose the device is at its limit and its set-point at once, and the Jacobian is regular."""
    case = model(two_buses(), added=[Added("L", "svc", 80.0, v_ref_pu=1.0, name="new")])
    found = trace(case)
    point = check_point(case, found.t_mw, found.v)
    assert point.on_corner == ("new",)
    assert point.residual_mva < 1e-6
    assert point.smallest_singular > 1e-3
