"""Check values as rows: quantity, source, expected, ours, difference. The page of validation is made of them."""

from __future__ import annotations

import math
import tempfile
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import test_margin_reference as reference
from margin_studies import study_of
from nose_cases import Added, Case, find
from second_opinion import OUTAGES, SHARP, of_engine, of_sharp, pairs
from test_nose_two_buses import junction, nose_of
from test_sizing_two_buses import two_buses as sizing_study
from verify_networks import everything, two_buses

from compsize.api import margins, size
from compsize.margin.assess import prepare
from compsize.network.cases import Addition, build_case
from compsize.network.grid import build_grid
from compsize.nose.engine import Engine
from compsize.study.records import NetworkTables

BOOK = "closed form (Van Cutsem and Vournas 1998, ch. 2)"
CLOSED = "closed form"


@dataclass(frozen=True)
class Check:
    """One value. ``tolerance`` bounds the difference."""

    quantity: str
    source: str
    expected: float
    ours: float
    tolerance: float

    @property
    def difference(self) -> float:
        """Relative to the expected value, absolute where that is below 1."""
        return abs(self.ours - self.expected) / max(1.0, abs(self.expected))


EXACT, DIGITS_6 = 1e-9, 1e-6
"""Powers at a nose; voltages there, which a fold leaves free to second order."""


def two_bus_checks() -> Iterator[Check]:
    """Two buses, E = 1: load and voltage at the nose."""
    angle = math.acos(0.95)
    for r, x, b, phi, words in (
        (0.0, 0.25, 0.0, angle, "X = 0.25, 0.95 lagging"),
        (0.0, 0.5, 0.0, angle, "X = 0.50, 0.95 lagging"),
        (0.0, 0.5, 0.4, angle, "X = 0.50, 0.95 lagging, B = 0.4"),
        (0.1, 0.5, 0.0, angle, "Z = 0.10 + j0.50, 0.95 lagging"),
        (0.1, 0.5, 0.4, angle, "Z = 0.10 + j0.50, 0.95 lagging, B = 0.4"),
        (0.0, 0.5, 0.0, 0.0, "X = 0.50, unity"),
        (0.0, 0.5, 0.0, -math.acos(0.98), "X = 0.50, 0.98 leading"),
    ):
        p, v = nose_of(complex(r, x), b, phi)
        net = two_buses((x,), r=r, p=30.0, q_mvar=30.0 * math.tan(phi))
        case = find(net, added=(Added("L", 100.0 * b),))
        yield Check(f"{words}: load [pu]", BOOK, p, case.nose_mw / 100.0, EXACT)
        yield Check(f"{words}: voltage [pu]", BOOK, v, case.v("L"), DIGITS_6)


def _with(kind: str, pu: float) -> Case:
    return find(two_buses(), added=(Added("L", 100.0 * pu, kind),))


def change_over() -> float:
    """The SVC [pu] from which on the engine calls the nose limit-induced, by bisection."""
    low, high = 0.4, 0.8
    for _ in range(24):
        middle = 0.5 * (low + high)
        low, high = (middle, high) if _with("svc", middle).nose.kind == "fold" else (low, middle)
    return 0.5 * (low + high)


def device_checks() -> Iterator[Check]:
    """SVC and STATCOM at the load, E = V_ref = 1, X = 0.5, unity power factor, no slope."""
    yield Check("SVC of 0.4 pu, fold: load [pu]", CLOSED, 1.25, _with("svc", 0.4).nose_mw / 100.0, EXACT)
    yield Check("SVC of 0.8 pu, limit-induced: load [pu]", CLOSED, 1.6, _with("svc", 0.8).nose_mw / 100.0, EXACT)
    yield Check("SVC where the nose becomes limit-induced [pu]", CLOSED, 2.0 - math.sqrt(2.0), change_over(), 2e-4)
    slope = (_with("svc", 0.8001).nose_mw - _with("svc", 0.7999).nose_mw) / 0.02
    yield Check("SVC of 0.8 pu: slope of the nose dP/dB", CLOSED, 0.75, slope, 1e-6)
    case = _with("statcom", 0.4)
    v = (0.6 + math.sqrt(0.04 + 8.0)) / 4.0
    p = v * math.sqrt(1.0 - (v - 0.2) ** 2) / 0.5
    yield Check("STATCOM of 0.4 pu: load [pu]", CLOSED, p, case.nose_mw / 100.0, EXACT)
    yield Check("STATCOM of 0.4 pu: voltage [pu]", CLOSED, v, case.v("L"), DIGITS_6)
    bank = Added("L", 40.0)
    plain = find(junction(), added=(bank,)).nose_mw / 100.0
    svc = Added("J", 300.0, "svc", absorb=300.0, v_ref=0.95)
    held = find(junction(), added=(bank, svc)).nose_mw / 100.0
    yield Check("a bank of 0.4 pu behind a junction: load [pu]", CLOSED, 1.05**2 / 0.8, plain, EXACT)
    yield Check("with an SVC that holds 0.95 at the junction: load [pu]", CLOSED, 0.95**2 / 0.672, held, EXACT)


def _voltage(net: NetworkTables, loading: float, banks: float) -> float:
    """Voltage [pu] of L at a loading, with ``banks`` [pu] there."""
    grid = build_grid(net, everything(net))
    bus = grid.bus_index["L"]
    engine = Engine(grid)
    model = build_case(grid, (), [Addition(bus, b_pu=banks)])
    point = engine.settle(model, engine.flat(model), loading)
    assert point is not None
    return float(point.v[grid.node[bus]])


def sizing_checks() -> Iterator[Check]:
    """80 MW at 0.95 lagging, X = 0.25 going to 0.50, steps of 10 Mvar."""
    sine = math.sqrt(1.0 - 0.95**2)
    with tempfile.TemporaryDirectory() as folder:
        for steps in range(6):
            nose = 95.0 / ((1.0 - 0.05 * steps) * (1.0 + sine))
            study = sizing_study(Path(folder) / f"existing{steps}", existing=steps)
            ours = margins(study, workers=1).cases[1].margin_pct
            assert ours is not None
            yield Check(f"margin with {steps} steps [%]", BOOK, 100.0 * (nose / 80.0 - 1.0), ours, 1e-7)
        for percent in (2.5, 5.0, 10.0):
            b = (1.0 - 95.0 / (1.0 + sine) / (80.0 * (1.0 + percent / 100.0))) / 0.5
            result = size(sizing_study(Path(folder) / f"for{percent}", percent), workers=1)
            assert result.plan is not None
            assert result.status == "optimal"
            ours = float(sum(row.steps for row in result.plan.rows))
            yield Check(f"least steps for {percent:g} %", BOOK, math.ceil(10.0 * b), ours, 0.0)
    # With u = V^2 and a = 1 - BX: a^2 u^2 + (2 Q X a - 1) u + X^2 (P^2 + Q^2) = 0.
    x, a, p, q = 0.5, 0.85, 0.8, 0.8 * sine / 0.95
    half = (1.0 - 2.0 * q * x * a) / 2.0
    v = math.sqrt((half + math.sqrt(half**2 - (a * x) ** 2 * (p**2 + q**2))) / a**2)
    net = two_buses((0.5,), p=80.0, power_factor=0.95)
    yield Check("voltage at 80 MW with one line out and 3 steps [pu]", CLOSED, v, _voltage(net, 0.0, 0.3), EXACT)
    net = two_buses((0.25,), p=80.0, power_factor=0.95)
    yield Check("voltage at no load with 4 steps [pu]", CLOSED, 1.0 / 0.9, _voltage(net, -1.0, 0.4), EXACT)


def published_checks() -> Iterator[Check]:
    """The IEEE 14-bus system as published: state, and nose with loads and generation scaled together."""
    net = reference.published_network()
    bench = prepare(study_of(net))
    assert bench.base is not None
    node = bench.grid.node
    v, angle = bench.base.v[node], np.rad2deg(bench.base.th[node])
    source = "published state (IEEE Common Data Format)"
    worst = int(np.argmax(np.abs(v - np.array(reference.PUBLISHED))))
    yield Check(
        f"voltage of bus {worst + 1}, the farthest from published [pu]",
        source,
        reference.PUBLISHED[worst],
        float(v[worst]),
        2e-3,
    )
    yield Check("angle of bus 14 [degrees]", source, -16.04, float(angle[13] - angle[0]), 2e-3)
    for limits, times, words, tolerance in (
        (False, 4.0602, "widely quoted, and two independent methods", 2e-5),
        (True, 1.77800, "two independent methods", 5e-6),
    ):
        (intact,) = margins(study_of(net, (), everything(net, generator_limits=limits)), workers=1).cases
        assert intact.nose_mw is not None
        name = f"nose {'with' if limits else 'without'} reactive limits, times base load"
        yield Check(name, words, times, intact.nose_mw / intact.base_mw, tolerance)


def sharp_checks() -> Iterator[Check]:
    """The conditions of a nose solved with 50 digits."""
    for item in SHARP:
        ours = of_engine(item)
        kind = "limit-induced" if item.kind == "limit" else "fold"
        found = float(of_sharp(item, ours).p)
        yield Check(f"{item.name}, {kind}: load [pu]", "50 digits", found, ours.nose_mw / 100.0, 1e-10)


def programme_checks() -> Iterator[Check]:
    """Noses by a general nonlinear programme."""
    for name in sorted(OUTAGES):
        for pair in pairs(name, OUTAGES[name]):
            words = f"{name}, {f'branch {pair.lost} out' if pair.lost else 'intact'}"
            words += f", {'with' if pair.limits else 'without'} limits: added / base load"
            yield Check(words, "general NLP", pair.theirs.loading, pair.loading, 1e-8)


@dataclass(frozen=True)
class ReferenceSummary:
    """How the noses of one network compare with the reference."""

    network: str
    limits: str
    noses: int
    kinds_right: int
    worst: float
    """Largest difference of added over base load, divided by 1 + that."""


def reference_summaries() -> Iterator[ReferenceSummary]:
    """Every nose of the reference, by network, with and without limits."""
    for network, limits in sorted({(row["network"], row["generator_limits"]) for row in reference.ROWS}):
        worst, right, count = 0.0, 0, 0
        for row, case in reference.found(network, limits):
            assert case.margin_mw is not None, row
            there = float(row["lambda_path"])
            worst = max(worst, abs(case.margin_mw / case.base_mw - there) / (1.0 + abs(there)))
            right += case.nose_kind == row["kind"]
            count += 1
        yield ReferenceSummary(network, limits, count, right, worst)
