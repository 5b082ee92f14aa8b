"""The engine on two and three buses, against closed forms (Van Cutsem and Vournas 1998, chapter 2)."""

from __future__ import annotations

import cmath
import math
from dataclasses import replace
from typing import Any

import pytest
from nose_cases import Added, find
from verify_networks import everything, network, two_buses

from compsize.study.records import NetworkTables

# Largest load and its voltage [pu] for 0.90 lagging, 0.95 lagging, unity and 0.98 leading: (R, X, B) behind E = 1.
# Closed forms, checked by brute force to 1e-9 in power and 1e-5 in voltage.
TABLE = {
    (0.0, 0.25, 0.0): (1.253578, 0.590098, 1.447895, 0.617272, 2.000000, 0.707107, 2.446934, 0.790075),
    (0.0, 0.25, 0.2): (1.319556, 0.621156, 1.524100, 0.649760, 2.105263, 0.744323, 2.575720, 0.831657),
    (0.0, 0.25, 0.4): (1.392864, 0.655665, 1.608772, 0.685858, 2.222222, 0.785674, 2.718815, 0.877861),
    (0.0, 0.50, 0.0): (0.626789, 0.590098, 0.723947, 0.617272, 1.000000, 0.707107, 1.223467, 0.790075),
    (0.0, 0.50, 0.2): (0.696432, 0.655665, 0.804386, 0.685858, 1.111111, 0.785674, 1.359408, 0.877861),
    (0.0, 0.50, 0.4): (0.783486, 0.737623, 0.904934, 0.771590, 1.250000, 0.883883, 1.529334, 0.987593),
    (0.05, 0.25, 0.0): (1.100450, 0.558332, 1.248313, 0.578800, 1.639608, 0.646544, 1.927604, 0.708148),
    (0.05, 0.25, 0.4): (1.209184, 0.616848, 1.369048, 0.638853, 1.788829, 0.711767, 2.094580, 0.778017),
    (0.10, 0.50, 0.0): (0.550225, 0.558332, 0.624157, 0.578800, 0.819804, 0.646544, 0.963802, 0.708148),
    (0.10, 0.50, 0.2): (0.604592, 0.616848, 0.684524, 0.638853, 0.894414, 0.711767, 1.047290, 0.778017),
    (0.10, 0.50, 0.4): (0.670597, 0.688711, 0.757477, 0.712443, 0.983417, 0.791218, 1.145855, 0.862738),
}
ANGLES = (math.acos(0.9), math.acos(0.95), 0.0, -math.acos(0.98))


def nose_of(z: complex, b: float, angle: float, e: float = 1.0) -> tuple[float, float]:
    """Largest load and its voltage [pu] by the Thevenin form, load at the power factor angle ``angle`` [rad]."""
    e_b, z_b = e / abs(1.0 + 1j * b * z), z / (1.0 + 1j * b * z)
    apart = cmath.phase(z_b) - angle
    p = e_b**2 * math.cos(angle) / (2.0 * abs(z_b) * (1.0 + math.cos(apart)))
    return p, e_b / (2.0 * math.cos(apart / 2.0))


@pytest.mark.parametrize("values", list(TABLE))
@pytest.mark.parametrize("k", range(4))
def test_table_of_two_bus_noses(values: tuple[float, float, float], k: int) -> None:
    """Noses with resistance, capacitors and four power factors: the table to its digits, the closed form to 1e-9."""
    r, x, b = values
    p, v = nose_of(complex(r, x), b, ANGLES[k])
    assert (p, v) == pytest.approx(TABLE[values][2 * k : 2 * k + 2], abs=6e-7)
    net = two_buses((x,), r=r, p=30.0)
    loads = replace(net.loads, q_mvar=30.0 * math.tan(ANGLES[k]) + 0.0 * net.loads.q_mvar)
    case = find(replace(net, loads=loads), added=(Added("L", 100.0 * b),))
    assert case.nose.kind == "fold"
    assert case.nose_mw / 100.0 == pytest.approx(p, rel=1e-9)
    assert case.v("L") == pytest.approx(v, abs=1e-6)
    assert case.nose.worst_residual < 1e-9


@pytest.mark.parametrize("e", [0.9, 1.0, 1.1])
def test_nose_grows_with_the_square_of_the_source(e: float) -> None:
    """P_max = E^2 cos phi / (2 X (1 + sin phi)), V in proportion to E."""
    case = find(two_buses((0.25,), power_factor=0.95, e=e))
    p, v = nose_of(0.25j, 0.0, ANGLES[1], e)
    assert case.nose_mw / 100.0 == pytest.approx(p, rel=1e-9)
    assert case.v("L") == pytest.approx(v, abs=1e-6)


def test_losing_one_of_two_lines_halves_the_nose() -> None:
    """Where two equal lines are the whole reactance the loss of one halves the power that can be delivered."""
    net = two_buses((0.5, 0.5), power_factor=0.95)
    both, one = find(net), find(net, lost=(("branch", "line2"),))
    assert both.nose_mw == pytest.approx(144.7895, abs=5e-5)
    assert one.nose_mw == pytest.approx(0.5 * both.nose_mw, rel=1e-9)
    assert one.v("L") == pytest.approx(both.v("L"), abs=1e-6)


@pytest.mark.parametrize(
    ("steps", "percent"), [(0, -9.5066), (1, -4.7438), (2, 0.5483), (3, 6.4629), (4, 13.1168), (5, 20.6579)]
)
def test_margins_of_the_sizing_example(steps: int, percent: float) -> None:
    """80 MW at 0.95 lagging, X going from 0.25 to 0.5, steps of 10 Mvar: margins, two of them negative."""
    net = two_buses((0.5, 0.5), p=80.0, power_factor=0.95)
    case = find(net, lost=(("branch", "line1"),), added=(Added("L", 10.0 * steps),))
    assert case.margin_mw / 0.8 == pytest.approx(percent, abs=5e-5)
    assert case.nose.kind == "fold"
    assert (case.nose.base is None) is (percent < 0.0)
    assert case.nose.status == ("no solution at base load" if percent < 0.0 else "")


@pytest.mark.parametrize("load_mw", [75.0, 120.0, 400.0, 1400.0])
def test_negative_margins_however_deep(load_mw: float) -> None:
    """However far the base load is beyond the nose, the nose below it is found."""
    case = find(two_buses((0.5,), p=load_mw, power_factor=0.95))
    assert case.nose.kind == "fold"
    assert case.nose_mw == pytest.approx(72.3947, abs=5e-5)
    assert case.margin_mw < 0.0


SVC_CHANGE_OVER = 0.585786


@pytest.mark.parametrize("b", [0.2, 0.4, 0.58])
def test_small_svc_ends_in_a_fold(b: float) -> None:
    """E = V_ref = 1, X = 0.5, no slope, B below 0.585786: the fold of the same shunt, P = 1 / (2 X (1 - BX))."""
    case = find(two_buses(), added=(Added("L", 100.0 * b, "svc"),))
    assert case.nose.kind == "fold"
    assert case.nose_mw == pytest.approx(100.0 / (1.0 - 0.5 * b), rel=1e-9)
    if b == 0.4:
        assert case.nose_mw == pytest.approx(125.0, rel=1e-9)


@pytest.mark.parametrize("b", [0.59, 0.8, 1.2])
def test_large_svc_ends_at_its_limit(b: float) -> None:
    """Beyond the change-over the loading turns where the limit is reached: P = sqrt(1 - (1 - BX)^2) / X, V = 1."""
    case = find(two_buses(), added=(Added("L", 100.0 * b, "svc"),))
    assert case.nose.kind == "limit"
    assert case.nose_mw / 100.0 == pytest.approx(math.sqrt(1.0 - (1.0 - 0.5 * b) ** 2) / 0.5, rel=1e-9)
    assert case.v("L") == pytest.approx(1.0, abs=1e-10)
    assert case.nose.culprit == case.grid.node[case.grid.bus_index["L"]]
    if b == 0.8:
        assert case.nose_mw == pytest.approx(160.0, rel=1e-9)


def test_slope_of_the_margin_at_a_limit() -> None:
    """At B = 0.8 the limit-induced nose rises by dP/dB = (1 - BX) / sqrt(1 - (1 - BX)^2) = 0.75 from both sides."""
    here = find(two_buses(), added=(Added("L", 80.0, "svc"),)).nose_mw
    for step in (0.01, -0.01):
        there = find(two_buses(), added=(Added("L", 80.0 + step, "svc"),)).nose_mw
        assert (there - here) / step == pytest.approx(0.75, abs=2e-4)


@pytest.mark.parametrize("i", [0.1, 0.4])
def test_statcom_at_its_current_limit(i: float) -> None:
    """With a = XI: V = (3a + sqrt(a^2 + 8)) / 4, P = V sqrt(1 - (V - a)^2) / X; I = 0.4 gives 1.292182 at 0.858872."""
    a = 0.5 * i
    v = (3.0 * a + math.sqrt(a**2 + 8.0)) / 4.0
    case = find(two_buses(), added=(Added("L", 100.0 * i, "statcom"),))
    assert case.nose.kind == "fold"
    assert case.nose_mw / 100.0 == pytest.approx(v * math.sqrt(1.0 - (v - a) ** 2) / 0.5, rel=1e-9)
    assert case.v("L") == pytest.approx(v, abs=1e-6)
    if i == 0.4:
        assert (case.nose_mw / 100.0, case.v("L")) == pytest.approx((1.292182, 0.858872), abs=1e-6)


@pytest.mark.parametrize("kind", ["svc", "statcom"])
def test_slope_counts_on_the_capacitive_rating(kind: str) -> None:
    """With 5 % slope the limit is reached at V_ref / 1.05 (SVC) or V_ref - 0.05 (STATCOM); the loading turns there."""
    q, x = 1.2, 0.5
    case = find(two_buses((x,)), added=(Added("L", 100.0 * q, kind, slope=5.0),))
    v = 1.0 / 1.05 if kind == "svc" else 0.95
    given = q * v**2 if kind == "svc" else q * v
    p = math.sqrt((v / x) ** 2 - (given - v**2 / x) ** 2)
    assert case.nose.kind == "limit"
    assert case.v("L") == pytest.approx(v, abs=1e-10)
    assert case.nose_mw / 100.0 == pytest.approx(p, rel=1e-9)


@pytest.mark.parametrize(("b", "expected"), [(0.0, 0.60063), (0.2, 0.58290), (0.4, 0.55619)])
def test_more_capacitor_can_lower_the_nose(b: float, expected: float) -> None:
    """E = 1, X = 0.5 to a growing unity load, a further X = 0.5 to a constant impedance G = 1 with B: noses fall."""
    net = network(
        buses=[{"bus": "S"}, {"bus": "L"}, {"bus": "G"}],
        loads=[
            {"load": "D", "bus": "L", "p_mw": 10.0, "q_mvar": 0.0},
            {"load": "Z", "bus": "G", "p_mw": 100.0, "q_mvar": 0.0, "z_share_pct": 100.0},
        ],
        branches=[
            {"branch": "1", "from_bus": "S", "to_bus": "L", "r_pu": 0.0, "x_pu": 0.5},
            {"branch": "2", "from_bus": "L", "to_bus": "G", "r_pu": 0.0, "x_pu": 0.5},
        ],
        generators=[{"generator": "A", "bus": "S", "p_mw": 10.0, "v_set_pu": 1.0, "slack": True}],
    )
    growth = everything(net)
    growth = replace(growth, loads=("D",), dp_mw=(1.0,), dq_mvar=(0.0,), base_mw=10.0, pickup="slack")
    case = find(net, growth, added=(Added("G", 100.0 * b),))
    # The stub is the shunt y = 1 / (jX + 1 / (G + jB)) at L, which makes a Thevenin source of the whole.
    y = 1.0 / (0.5j + 1.0 / complex(1.0, b))
    source, z = 1.0 / (1.0 + 0.5j * y), 0.5j / (1.0 + 0.5j * y)
    closed = abs(source) ** 2 / (2.0 * abs(z) * (1.0 + math.cos(cmath.phase(z))))
    assert closed == pytest.approx(expected, abs=6e-6)
    assert case.nose.kind == "fold"
    assert case.nose_mw / 100.0 == pytest.approx(closed, rel=1e-9)


def junction(**load: Any) -> NetworkTables:
    """E = 1.05 behind X = 0.1 to a junction J, a further X = 0.4 to a growing unity load at L."""
    return network(
        buses=[{"bus": "S"}, {"bus": "J"}, {"bus": "L"}],
        loads=[{"load": "D", "bus": "L", "p_mw": 10.0, "q_mvar": 0.0} | load],
        branches=[
            {"branch": "1", "from_bus": "S", "to_bus": "J", "r_pu": 0.0, "x_pu": 0.1},
            {"branch": "2", "from_bus": "J", "to_bus": "L", "r_pu": 0.0, "x_pu": 0.4},
        ],
        generators=[{"generator": "A", "bus": "S", "p_mw": 10.0, "v_set_pu": 1.05, "slack": True}],
    )


def test_an_svc_can_lower_the_nose() -> None:
    """B = 0.4 at the load: an SVC that holds 0.95 at the junction lowers the nose from 1.37813 to 1.34300.

    Without it P = E^2 / (2 X (1 - BX)); with it the junction is a source of 0.95 behind X = 0.4.
    """
    bank = Added("L", 40.0)
    plain = find(junction(), added=(bank,))
    held = find(junction(), added=(bank, Added("J", 300.0, "svc", absorb=300.0, v_ref=0.95)))
    assert plain.nose_mw / 100.0 == pytest.approx(1.05**2 / (1.0 - 0.4 * 0.5), rel=1e-9)
    assert held.nose_mw / 100.0 == pytest.approx(0.95**2 / (0.8 * (1.0 - 0.4 * 0.4)), rel=1e-9)
    assert (plain.nose_mw / 100.0, held.nose_mw / 100.0) == pytest.approx((1.37813, 1.34300), abs=7e-6)


def test_constant_impedance_never_turns() -> None:
    """Loads that are all constant impedance have no nose: kind none, at the loading up to which it was sought."""
    net = two_buses((0.5,), p=10.0, power_factor=0.95, z_share_pct=100.0)
    case = find(net)
    assert case.nose.kind == "none"
    assert case.margin_mw >= 20.0 * 10.0
    # V = E / |1 + Z Y| at that loading.
    y = case.nose_mw / 100.0 * complex(1.0, -math.tan(ANGLES[1]))
    assert case.v("L") == pytest.approx(1.0 / abs(1.0 + 0.5j * y), abs=1e-9)


@pytest.mark.parametrize("share", [0.01, 0.2, 0.5, 1.0])
def test_a_little_constant_power_turns(share: float) -> None:
    """A share a of constant power, the rest impedance: the nose is P = 1 / (2 X sqrt(a)) at V = sqrt(a / (1 + a)).

    With u = V^2 the load is sqrt(u - u^2) / (X (a + (1 - a) u)), largest at u = a / (1 + a).
    """
    case = find(two_buses((0.5,), p=100.0, z_share_pct=100.0 * (1.0 - share)))
    assert case.nose.kind == "fold"
    assert case.nose_mw / 100.0 == pytest.approx(1.0 / math.sqrt(share), rel=1e-9)
    assert case.v("L") == pytest.approx(math.sqrt(share / (1.0 + share)), abs=1e-6)


def test_leading_and_lagging_loads() -> None:
    """A more inductive load has a smaller nose at a lower voltage, a capacitive one a larger at a higher."""
    noses = []
    for angle in ANGLES:
        net = two_buses((0.5,), p=30.0)
        loads = replace(net.loads, q_mvar=30.0 * math.tan(angle) + 0.0 * net.loads.q_mvar)
        case = find(replace(net, loads=loads))
        noses.append((case.nose_mw, case.v("L")))
    assert noses == sorted(noses)
