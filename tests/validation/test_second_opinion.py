"""Noses against two other methods: a general nonlinear programme, and the conditions of a nose with 50 digits."""

from __future__ import annotations

from dataclasses import replace

import pytest
from general_nlp import solve
from mpmath import mp, mpf, workdps
from second_opinion import NOT_LOCATED, OUTAGES, SHARP, SharpCase, of_engine, of_sharp, pairs
from sharp import Chain, fold
from verify_networks import read

NLP_TOLERANCE, SHARP_TOLERANCE = 1e-8, 1e-10


@pytest.mark.parametrize("name", sorted(OUTAGES))
def test_general_programme(name: str) -> None:
    """Intact and for three outages, with and without limits: loading within 1e-8 of the base, voltages to 1e-3."""
    count = 0
    for pair in pairs(name, OUTAGES[name]):
        assert pair.theirs.solved, pair
        assert pair.loading == pytest.approx(pair.theirs.loading, abs=NLP_TOLERANCE), pair
        assert (pair.ours.nose_kind == "limit") is (len(pair.theirs.corner) > 0), pair
        assert pair.ours.lowest_v_pu == pytest.approx(pair.theirs.v.min(), abs=1e-3)
        count += 1
    assert count == 8


@pytest.mark.xfail(strict=True, reason="no nose is located without line 2 of 14 buses and without limits")
def test_a_nose_that_both_locate() -> None:
    """14 buses without branch 2 and without limits: the nose of the general programme, 663.825 MW above the base."""
    name, lost = NOT_LOCATED
    pair = next(pair for pair in pairs(name, (lost,)) if pair.lost == lost)
    assert pair.theirs.loading * pair.ours.base_mw == pytest.approx(663.825, abs=1e-3)
    assert pair.loading == pytest.approx(pair.theirs.loading, abs=NLP_TOLERANCE)


def test_general_programme_at_a_limit() -> None:
    """118 buses with limits: both say that the nose is where the unit named 5 reaches its limit, and agree on it."""
    *_, pair = pairs("ieee118")
    assert pair.limits
    assert pair.ours.nose_kind == "limit"
    assert pair.theirs.corner == ("5",)
    assert pair.ours.status == "limit of 5"
    assert pair.loading == pytest.approx(pair.theirs.loading, abs=NLP_TOLERANCE)


def test_units_at_their_limits() -> None:
    """14 buses with limits: the general programme ends with the same units at their limits."""
    *_, pair = pairs("ieee14")
    assert {name.partition(":")[0] for name in pair.ours.limited_devices} == set(pair.theirs.at_limit)


def test_general_programme_notices_a_change() -> None:
    """A tenth more reactance in one branch moves its answer by far more than the tolerance of the comparison."""
    net = read("ieee14")
    x = net.branches.x_pu.copy()
    x[0] *= 1.1
    there = solve(replace(net, branches=replace(net.branches, x_pu=x)), False).loading
    assert abs(there - solve(net, False).loading) > 1e3 * NLP_TOLERANCE


@pytest.mark.parametrize("item", SHARP, ids=lambda item: item.name)
def test_fifty_digits(item: SharpCase) -> None:
    """F = 0 with det J = 0, or with both equations of a device at its limit: the same load, voltage and kind."""
    ours = of_engine(item)
    theirs = of_sharp(item, ours)
    assert ours.nose.kind == ("limit" if item.kind == "limit" else "fold")
    assert ours.nose_mw / 100.0 == pytest.approx(float(theirs.p), rel=SHARP_TOLERANCE)
    assert ours.v(f"B{item.chain.n}") == pytest.approx(float(theirs.v), abs=1e-8)


def test_fifty_digits_are_the_closed_form() -> None:
    """Z = 0.1 + j0.5, Q/P = 0.25: P = cos phi / (2 |Z| (1 + cos(theta - phi))) to 48 digits from a rough start."""
    found = fold(Chain(e=1.0, z=(complex(0.1, 0.5),), y=(0.0,), ratio=0.25), (-0.5, 0.55, 0.7))
    with workdps(60):
        phi = mp.atan(mpf("0.25"))
        apart = mp.atan2(mpf("0.5"), mpf("0.1")) - phi
        size = mp.sqrt(mpf("0.1") ** 2 + mpf("0.5") ** 2)
        p = mp.cos(phi) / (2 * size * (1 + mp.cos(apart)))
        assert abs(found.p - p) < mpf(10) ** -48
        assert abs(found.v - 1 / (2 * mp.cos(apart / 2))) < mpf(10) ** -48
