"""Nose curves for pictures: they pass the operating point, turn at the nose, and come back on the lower branch."""

from __future__ import annotations

import itertools
import math

import pytest
from margin_studies import single, study_of
from verify_networks import everything, read, two_buses

from compsize.margin.assess import assess, evaluate, prepare
from compsize.margin.curve import nose_curve
from compsize.plan.records import NoseCurve
from compsize.study.records import NetworkTables, Requirement, Study


def curve_of(study: Study, case: int = 0, bus: str = "L") -> NoseCurve:
    bench = prepare(study)
    rows, _, _ = assess(bench, 1)
    model, _ = evaluate(bench, bench.specs[case], ())
    found = nose_curve(bench, model, rows[case], "before", bus)
    assert found is not None
    return found


def voltage(p: float, lower: bool, x: float = 0.5) -> float:
    """Voltage of two buses at unity power factor: V^2 = (1 -+ sqrt(1 - 4 P^2 X^2)) / 2."""
    root = math.sqrt(max(0.0, 1.0 - (2.0 * p * x) ** 2))
    return math.sqrt(0.5 * (1.0 - root if lower else 1.0 + root))


def test_curve_of_two_buses() -> None:
    """Every point of the curve lies on the closed form: the upper branch to the nose, the lower one beyond it."""
    net = two_buses((0.5,), p=40.0)
    curve = curve_of(study_of(net, (), None, [Requirement("intact", 10.0, None)]))
    assert curve.operating_mw == pytest.approx(40.0)
    assert curve.operating_v_pu == pytest.approx(voltage(0.4, False), abs=1e-9)
    assert curve.required_mw == pytest.approx(10.0)
    assert curve.load_mw[curve.nose_index] == pytest.approx(100.0, rel=1e-8)
    assert curve.load_mw[curve.nose_index] == max(curve.load_mw)
    assert min(curve.load_mw[: curve.nose_index]) < 10.0
    assert len(curve.load_mw) > curve.nose_index + 5
    for k, (p, v) in enumerate(zip(curve.load_mw, curve.v_pu, strict=True)):
        assert v == pytest.approx(voltage(p / 100.0, k > curve.nose_index), abs=2e-5), k


def test_curve_of_a_case_without_a_base() -> None:
    """With one line out 120 MW has no solution: the curve lies left of it, and there is no operating voltage."""
    net = two_buses((0.5, 0.5), p=120.0)
    curve = curve_of(study_of(net, [single("branch", "line1")]), case=1)
    assert curve.operating_v_pu is None
    assert curve.operating_mw == pytest.approx(120.0)
    assert max(curve.load_mw) == pytest.approx(100.0, rel=1e-8)


@pytest.mark.parametrize("name", ["ieee14", "ieee30"])
def test_curves_rise_to_the_nose_of_their_row(name: str) -> None:
    """The loading rises up to the nose, which is that of the row, and falls beyond it; voltages stay positive."""
    net: NetworkTables = read(name)
    study = study_of(net, [single("branch", "10")], everything(net))
    bench = prepare(study)
    rows, _, _ = assess(bench, 1)
    for case in (0, 1):
        bus = rows[case].weakest_bus
        model, _ = evaluate(bench, bench.specs[case], ())
        curve = nose_curve(bench, model, rows[case], "before", bus)
        assert curve is not None
        assert curve.load_mw[curve.nose_index] == pytest.approx(rows[case].nose_mw, rel=1e-8)
        assert curve.v_pu[curve.nose_index] == pytest.approx(rows[case].weakest_v_pu, abs=1e-4)
        upper = curve.load_mw[: curve.nose_index + 1]
        assert all(b >= a - 1e-6 for a, b in itertools.pairwise(upper))
        assert all(load <= upper[-1] + 1e-6 for load in curve.load_mw)
        assert min(curve.v_pu) > 0.05
        assert curve.nose_kind == rows[case].nose_kind


def test_no_curve_without_a_nose() -> None:
    """Loads of constant impedance have a curve without a turn: it ends where the search for a nose ended."""
    curve = curve_of(study_of(two_buses((0.5,), p=10.0, z_share_pct=100.0)))
    assert curve.nose_kind == "none"
    assert curve.nose_index == len(curve.load_mw) - 1
