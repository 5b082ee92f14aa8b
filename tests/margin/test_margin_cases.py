"""Cases as rows: what an outage takes away, who picks the load up, what is required, and what a row says."""

from __future__ import annotations

import math
from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from margin_studies import single, study_of
from verify_networks import everything, network, read, table, two_buses

from compsize.api import margins
from compsize.margin.assess import prepare
from compsize.margin.cases import bank_cases, steps_lost
from compsize.margin.pool import run_all
from compsize.plan.records import CaseMargin
from compsize.study.records import Candidate, Equipment, Event, Generators, Growth, NetworkTables, Requirement, Study
from compsize.verify.model import Model, build_model
from compsize.verify.path import trace


def rows(study: Study, workers: int = 1) -> dict[str, CaseMargin]:
    return {case.case: case for case in margins(study, workers=workers).cases}


def with_stub(load_mw: float = 5.0, unit: bool = False) -> NetworkTables:
    """Two buses and a stub T behind L with a load, and with a unit beside it if asked for."""
    units = [{"generator": "G", "bus": "S", "p_mw": 40.0, "v_set_pu": 1.0, "slack": True}]
    if unit:
        extra = {"generator": "H", "bus": "T", "p_mw": 5.0, "v_set_pu": 1.0, "q_min_mvar": 0.0, "q_max_mvar": 0.0}
        units.append(extra)
    return network(
        buses=[{"bus": "S"}, {"bus": "L"}, {"bus": "T"}],
        loads=[
            {"load": "D", "bus": "L", "p_mw": 40.0, "q_mvar": 0.0},
            {"load": "E", "bus": "T", "p_mw": load_mw, "q_mvar": 0.0},
        ],
        branches=[
            {"branch": "1", "from_bus": "S", "to_bus": "L", "r_pu": 0.0, "x_pu": 0.5},
            {"branch": "2", "from_bus": "L", "to_bus": "T", "r_pu": 0.0, "x_pu": 0.1},
        ],
        generators=units,
    )


@pytest.mark.parametrize("unit", [False, True])
def test_an_island_without_a_source_is_dropped(unit: bool) -> None:
    """The stub's MW leave the base, what is left has the nose of two buses, and the status names bus, MW and units."""
    case = rows(study_of(with_stub(unit=unit), [single("branch", "2")]))["branch:2"]
    assert case.base_mw == pytest.approx(40.0)
    assert case.nose_mw == pytest.approx(100.0, rel=1e-9)
    assert case.status == f"cut off and dropped: bus T with 5 MW of load{' and 1 unit' if unit else ''}"
    assert case.lowest_bus == "L"


def test_an_outage_that_takes_all_growth_away() -> None:
    """Where only the lost load grows, nothing is left to count: the row says so and is not met."""
    net = with_stub()
    growth = Growth(("E",), (1.0,), (0.0,), 5.0, "", "as base")
    case = rows(
        study_of(net, [single("branch", "2"), single("load", "E")], growth, [Requirement("outages", 1.0, None)])
    )
    for name in ("branch:2", "load:E"):
        assert case[name].margin_mw is None
        assert not case[name].met
        assert case[name].status == "not evaluable: no load that grows is left"
        assert case[name].nose_kind == ""


def test_a_part_that_holds_the_slack_is_not_evaluable() -> None:
    """Where the larger part loses the slack's part the row has no margin and says why; other rows stand."""
    events = [single("branch", "1"), single("branch", "2")]
    case = rows(study_of(with_stub(unit=True), events, None, [Requirement("outages", 1.0, None)]))
    assert case["branch:1"].status == "not evaluable: the lost part holds the slack unit"
    assert case["branch:1"].margin_mw is None
    assert not case["branch:1"].met
    assert case["branch:2"].met


def test_no_unit_left() -> None:
    """The loss of the only unit cannot be evaluated."""
    case = rows(study_of(two_buses(), [single("generator", "G")]))["generator:G"]
    assert case.status == "not evaluable: no unit is left in service"
    assert case.margin_mw is None


def test_a_lost_slack_passes_to_the_largest_unit() -> None:
    """With a second and a third unit at the source the largest takes over, and the nose is the same; both is none."""
    net = two_buses((0.5,), p=30.0)
    units = [
        {"generator": "G", "bus": "S", "p_mw": 10.0, "v_set_pu": 1.0, "slack": True},
        {"generator": "small", "bus": "S", "p_mw": 5.0, "v_set_pu": 1.0},
        {"generator": "large", "bus": "S", "p_mw": 15.0, "v_set_pu": 1.0, "q_min_mvar": -1.0, "q_max_mvar": 1.0},
    ]
    net = replace(net, generators=table(Generators, units))
    case = rows(study_of(net, [single("generator", "G")]))["generator:G"]
    assert case.status == "slack passed to large"
    assert case.nose_mw == pytest.approx(100.0, rel=1e-9)


PICKUP: list[tuple[str, dict[str, Any], float]] = [
    ("slack", {}, 0.0),
    ("proportional", {}, 4.0 / 10.0),
    ("headroom", {}, 6.0 / 30.0),
    ("table", {}, 0.3),
    ("proportional", {"pickup_limits": True}, math.nan),
    ("table", {"pickup_limits": True}, math.nan),
]


@pytest.mark.parametrize(("rule", "options", "share"), PICKUP)
def test_who_picks_up_the_load(rule: str, options: dict[str, Any], share: float) -> None:
    """A unit of 4 MW and no Mvar beside a load of 10 MW takes its share w of the growth D.

    The line's nose is at 100 MW, so 10 + D - 4 - w D = 100; with limits the unit stops at 10 MW and D = 100.
    """
    net = two_buses((0.5,), p=10.0)
    units = [
        {"generator": "G", "bus": "S", "p_mw": 6.0, "v_set_pu": 1.0, "slack": True, "p_max_mw": 30.0, "pickup": 0.7},
        {"generator": "H", "bus": "L", "p_mw": 4.0, "v_set_pu": 1.0, "q_min_mvar": 0.0, "q_max_mvar": 0.0}
        | {"p_max_mw": 10.0, "pickup": 0.3},
    ]
    net = replace(net, generators=table(Generators, units))
    (case,) = rows(study_of(net, (), everything(net, pickup=rule, **options))).values()
    expected = 100.0 if math.isnan(share) else 94.0 / (1.0 - share)
    assert case.margin_mw == pytest.approx(expected, rel=1e-9)


@pytest.mark.parametrize("rule", ["slack", "proportional", "headroom", "table"])
@pytest.mark.parametrize("limits", [False, True])
def test_pickup_agrees_with_the_second_opinion(rule: str, limits: bool) -> None:
    """On 30 buses, intact and with a unit lost, every rule gives the margins that separate code traces."""
    net = read("ieee30")
    units = net.generators
    room = np.array([20.0, 15.0, 10.0, 8.0, 6.0, 5.0])[: len(units.generator)]
    on = np.where(units.p_mw > 1.0, units.p_mw, 5.0)
    net = replace(net, generators=replace(units, p_mw=on, p_max_mw=on + room, pickup=room / room.sum()))
    growth = everything(net, pickup=rule, pickup_limits=limits)
    lost = (("generator", units.generator[1]),)
    found = rows(study_of(net, [Event("unit", "unit", lost)], growth))
    for name, elements in (("intact", ()), ("unit", lost)):
        model = build_model(net, growth, elements)
        assert isinstance(model, Model)
        nose = trace(model)
        assert found[name].margin_mw == pytest.approx(nose.t_mw, abs=1e-6), (name, rule)
        assert found[name].nose_kind == nose.kind


def area_study(requirements: list[Requirement]) -> Study:
    """Growth of E (5 MW) alone; E and D (40 MW, lost in the one outage) are in the area East, nothing is in West."""
    net = with_stub()
    buses = replace(net.buses, area=("West", "East", "East"))
    growth = Growth(("E",), (1.0,), (0.0,), 5.0, "", "as base")
    events = [Event("load", "light", (("load", "D"),))]
    return study_of(replace(net, buses=buses), events, growth, requirements)


@pytest.mark.parametrize(
    ("requirements", "intact", "outage"),
    [
        ([Requirement("outages", 3.0, None)], None, 3.0),
        ([Requirement("intact", 3.0, None)], 3.0, None),
        ([Requirement("intact", 3.0, 100.0)], 5.0, None),
        ([Requirement("intact", 6.0, 100.0)], 6.0, None),
        ([Requirement("outages", None, 10.0, "growing")], None, 0.5),
        ([Requirement("outages", None, 10.0, "total"), Requirement("intact", None, 10.0, "total")], 4.5, 0.5),
        ([Requirement("intact", None, 10.0, "area:East"), Requirement("light", None, 20.0, "area:East")], 4.5, 1.0),
        ([Requirement("intact", None, 10.0, "area:West")], 0.0, None),
        ([Requirement("outages", 2.0, None), Requirement("light", 1.0, None)], None, 2.0),
        ([Requirement("outages", 2.0, None), Requirement("light", 4.0, None)], None, 4.0),
    ],
)
def test_what_is_required(requirements: list[Requirement], intact: float | None, outage: float | None) -> None:
    """The largest of the entries that apply, in MW, of the MW of the case: an outage of load lowers its base."""
    found = rows(area_study(requirements))
    for name, need in (("intact", intact), ("load", outage)):
        assert found[name].required_mw == (None if need is None else pytest.approx(need))
        margin = found[name].margin_mw
        assert margin is not None
        assert found[name].met is (need is None or margin >= need - 1e-6 * found[name].base_mw)


@pytest.mark.parametrize("of", ["growing", "total"])
def test_lost_load_leaves_the_base(of: str) -> None:
    """An outage of a growing load lowers the MW today and the base of a percentage alike."""
    study = study_of(with_stub(), [single("load", "E")], None, [Requirement("outages", None, 10.0, of)])
    case = rows(study)["load:E"]
    assert case.base_mw == pytest.approx(40.0)
    assert case.required_mw == pytest.approx(4.0)
    assert case.nose_mw == pytest.approx(100.0, rel=1e-9)


def test_negative_load_does_not_count_in_a_base() -> None:
    """A negative load takes part in the growth, and only positive MW count in the base of a percentage."""
    net = with_stub(load_mw=-5.0)
    study = study_of(net, (), None, [Requirement("intact", None, 10.0, "growing")])
    (case,) = rows(study).values()
    assert case.base_mw == pytest.approx(35.0)
    assert case.required_mw == pytest.approx(4.0)


def test_a_new_load_of_nothing_today() -> None:
    """A load of 0 MW that grows: the base is 0, the margin is all of the nose, and there is no percentage."""
    net = with_stub(load_mw=0.0)
    growth = Growth(("E",), (30.0,), (0.0,), 0.0, "", "as base")
    (case,) = rows(study_of(net, (), growth)).values()
    assert case.base_mw == 0.0
    assert case.margin_mw == case.nose_mw
    assert case.margin_pct is None
    # The load of 40 MW stays half-way; the nose follows the second opinion.
    model = build_model(net, growth)
    assert isinstance(model, Model)
    assert case.margin_mw == pytest.approx(trace(model).t_mw, rel=1e-8)


def test_row_of_a_case() -> None:
    """Base, nose, margin and percentage of a row belong together; voltages are those at the nose."""
    net = two_buses((0.5, 0.5), p=80.0, power_factor=0.95)
    found = rows(study_of(net, [single("branch", "line1")], None, [Requirement("outages", None, 5.0)]))
    for case in found.values():
        assert case.nose_mw is not None
        assert case.margin_mw is not None
        assert case.nose_mw == pytest.approx(case.base_mw + case.margin_mw)
        assert case.margin_pct == pytest.approx(100.0 * case.margin_mw / case.base_mw)
        assert (case.weakest_bus, case.lowest_bus) == ("L", "L")
        assert case.weakest_v_pu == case.lowest_v_pu == pytest.approx(0.617272, abs=1e-6)
        assert case.limited_devices == ()
        assert case.steps_off == ""
    assert found["intact"].met
    assert not found["branch:line1"].met
    assert found["branch:line1"].status == "no solution at base load"


def test_weakest_bus_is_monitored() -> None:
    """The fastest falling bus is sought among monitored ones, the lowest voltage among all."""
    net = with_stub()
    net = replace(net, buses=replace(net.buses, monitored=np.array([True, True, False])))
    (case,) = rows(study_of(net)).values()
    assert case.weakest_bus == "L"
    assert case.lowest_bus == "T"
    assert case.lowest_v_pu is not None
    assert case.weakest_v_pu is not None
    assert case.lowest_v_pu < case.weakest_v_pu


def test_devices_at_their_limits() -> None:
    """The row names the units that are at a limit at the nose, and the one that makes a limit-induced nose."""
    net = read("ieee14")
    (case,) = rows(study_of(net)).values()
    model = build_model(net, everything(net))
    assert isinstance(model, Model)
    nose = trace(model)
    assert case.nose_kind == nose.kind
    assert {name.split(":")[0] for name in case.limited_devices} == set(nose.limited)
    assert nose.limited


def bank_study(outage: str, kind: Any = "bank", existing: int = 2) -> Study:
    equipment = Equipment("e", kind, 10.0, 1.0, 1.0, v_ref_pu=None if kind == "bank" else 1.0)
    candidates = [Candidate("L", equipment, 8, existing_steps=existing)]
    return study_of(two_buses((0.5,)), (), None, (), candidates, bank_outage=outage)


def test_steps_that_an_outage_loses() -> None:
    """One step of a bank, a whole SVC, or all that is new at a site; nothing where it is not asked for."""
    for outage, kind, lost in (("step", "bank", 1), ("step", "svc", 5), ("site", "bank", 3), ("site", "svc", 3)):
        study = bank_study(outage, kind)
        (choice,) = prepare(study).choices
        assert steps_lost(study, choice, 3) == lost, (outage, kind)
        (case,) = bank_cases(study, [choice], [3])
        assert case.name == "bank:L:e"
        assert case.klass == "bank_outage"
    assert bank_cases(bank_study("none"), prepare(bank_study("none")).choices, [3]) == ()
    none = bank_study("step", existing=0)
    assert bank_cases(none, prepare(none).choices, [0]) == ()


def test_order_of_rows_and_workers() -> None:
    """Rows come intact first, then in file order, the same with one thread and with three."""
    net = read("ieee30")
    events = [single("branch", name) for name in net.branches.branch[:15]]
    study = study_of(net, events)
    one, three = margins(study, workers=1), margins(study, workers=3)
    assert [case.case for case in one.cases] == ["intact", *(event.name for event in events)]
    assert one.cases == three.cases
    assert one.counts == three.counts


def test_progress_is_told() -> None:
    """Each finished case is told once, with the number of all."""
    told: list[tuple[str, int, int | None]] = []
    study = study_of(with_stub(), [single("branch", "2")])
    margins(study, workers=1, progress=lambda *words: told.append(words))
    assert told == [("cases", 1, 2), ("cases", 2, 2)]


def test_no_operating_point_is_noted() -> None:
    """Where the intact network has no solution at base load the result says so, and the margin is negative."""
    result = margins(study_of(two_buses((0.5,), p=120.0)), workers=1)
    (case,) = result.cases
    assert case.margin_mw == pytest.approx(-20.0, rel=1e-9)
    assert any("no solution at base load" in note for note in result.notes)


@pytest.mark.parametrize("workers", [1, 4])
def test_run_all_keeps_the_order(workers: int) -> None:
    """Outcomes come in the order of the items whatever the number of threads, and each finish is told."""
    told: list[int] = []
    assert run_all(lambda k: k * k, range(20), workers, told.append) == [k * k for k in range(20)]
    assert told == list(range(1, 21))
    assert run_all(lambda k: k, [], workers) == []


def test_run_all_passes_errors_on() -> None:
    """An error of a task reaches the caller."""

    def task(k: int) -> int:
        if k == 3:
            raise ValueError("three")
        return k

    for workers in (1, 2):
        with pytest.raises(ValueError, match="three"):
            run_all(task, range(5), workers)
