"""The Nordic voltage-stability test system: its published states, and its noses at both operating points."""

from __future__ import annotations

from functools import cache

import numpy as np
import pytest
from margin_studies import study_of
from nordic_system import (
    ABSENT,
    NORDIC,
    POINTS,
    PUBLISHED_LOSSES,
    PUBLISHED_SLACK,
    TAPS,
    central_growth,
    lines_400,
    noses,
    path_mw,
    published_fit,
    published_voltages,
    tables,
)

from compsize.api import margins
from compsize.margin.assess import prepare
from compsize.plan.records import CaseMargin

pytestmark = pytest.mark.skipif(not NORDIC.exists(), reason=ABSENT)

WORST = ("intact", "4011-4021", "4021-4042", "4032-4044", "4031-4041", "4042-4043")
"""The intact network, the four worst outages of A, and one that is near the edge in A."""
TAP_ENDS = "4061-4062"


@cache
def computed(point: str, taps: str) -> dict[str, CaseMargin]:
    return noses(point, taps)


def margin(point: str, taps: str, line: str) -> float:
    found = computed(point, taps)[line].margin_mw
    assert found is not None, computed(point, taps)[line].status
    return found


@pytest.mark.parametrize("point", POINTS)
def test_published_state_fits_the_tables(point: str) -> None:
    """At the published voltages every bus but the slack's balances within 0.1 MVA (PES-TR19)."""
    assert published_fit(point).worst_mva < 0.1


def test_published_slack() -> None:
    """The slack g20 of A gives 2137.4 + j377.4 MVA, and losses are 445.8 MW (PES-TR19), to the digits published."""
    fit = published_fit("A")
    assert fit.slack_mva.real == pytest.approx(PUBLISHED_SLACK.real, abs=0.1)
    assert fit.slack_mva.imag == pytest.approx(PUBLISHED_SLACK.imag, abs=0.1)
    assert fit.losses_mw == pytest.approx(PUBLISHED_LOSSES, abs=0.05)


@pytest.mark.parametrize("point", POINTS)
def test_operating_point_is_the_published_state(point: str) -> None:
    """The solved state at base load has the published voltages and angles, to the digits that matter."""
    net = tables(point)
    bench = prepare(study_of(net, (), central_growth(net, "locked")))
    assert bench.base is not None
    node = bench.grid.node
    v = bench.base.v[node] * np.exp(1j * bench.base.th[node])
    assert np.abs(v - published_voltages(point)).max() < 5e-4


def test_size_of_the_network() -> None:
    """33 lines of 400 kV; the 11 loads of the Central area are 6,190 MW in A (PES-TR19)."""
    net = tables("A")
    assert len(lines_400(net)) == 33
    growth = central_growth(net, "locked")
    assert len(growth.loads) == 11
    assert growth.base_mw == pytest.approx(6190.0, abs=0.1)


@pytest.mark.parametrize("taps", TAPS)
def test_every_case_has_a_nose(taps: str) -> None:
    """Intact and for the loss of each 400 kV line a nose is located at both points."""
    for point in POINTS:
        found = computed(point, taps)
        assert len(found) == 34
        assert [name for name, case in found.items() if case.margin_mw is None] == []


@pytest.mark.parametrize("taps", TAPS)
def test_b_is_the_secure_point(taps: str) -> None:
    """B holds every outage, A does not: for each of them, the worst of A included, B has the larger margin."""
    a, b = ({line: margin(point, taps, line) for line in computed(point, taps)} for point in POINTS)
    assert min(b.values()) > 0.0 > min(a.values())
    for line in sorted(a, key=lambda name: a[name]):
        assert b[line] > a[line], line
    assert a["intact"] > 0.0


@pytest.mark.parametrize("taps", TAPS)
@pytest.mark.parametrize("point", POINTS)
@pytest.mark.parametrize("line", WORST)
def test_independent_path(point: str, taps: str, line: str) -> None:
    """Kind and margin are those of a path follower that shares no code with the engine, to 1e-5 MW in 6,190."""
    kind, mw = path_mw(point, taps, line)
    assert computed(point, taps)[line].nose_kind == kind
    assert margin(point, taps, line) == pytest.approx(mw, abs=1e-5)


@pytest.mark.parametrize("point", POINTS)
def test_a_ratio_at_its_end_is_no_nose(point: str) -> None:
    """Without line 4061-4062 the ratio of transformer 61-4061 ends on the way; the path goes on to its nose."""
    _, mw = path_mw(point, "moving", TAP_ENDS)
    assert margin(point, "moving", TAP_ENDS) == pytest.approx(mw, abs=1e-5)


@pytest.mark.xfail(strict=True, reason="two tap changers that hold the same bus leave no nose")
@pytest.mark.parametrize("point", POINTS)
def test_tap_changers_side_by_side(point: str) -> None:
    """Two equal transformers side by side that hold the same bus are one of twice the rating."""
    net = tables(point)
    (intact,) = margins(study_of(net, (), central_growth(net, "moving")), workers=1).cases
    assert intact.margin_mw == pytest.approx(margin(point, "moving", "intact"), abs=1e-5)
