"""Whole plans: what the second opinion passes and what it must not pass."""

from __future__ import annotations

import math
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest
from verify_networks import everything, read, two_buses

from compsize.errors import UsageError
from compsize.plan.records import CaseMargin, Plan, PlanRow
from compsize.study.records import (
    Candidate,
    Contingencies,
    Equipment,
    Event,
    Limits,
    ReportText,
    Requirement,
    Study,
    VoltageLimits,
)
from compsize.verify.cases import Cases, parse_off
from compsize.verify.model import Model
from compsize.verify.path import trace
from compsize.verify.plan import verify_plan
from compsize.verify.voltage import check_voltages

STEP = Equipment("C10", "bank", 10.0, 500.0, 100.0)


def make(
    network: Any = None, events: tuple[Event, ...] | None = None, sites: tuple[str, ...] = ("L",), **options: Any
) -> Study:
    """The two-bus sizing study: two lines of X = 0.5, 80 MW at 0.95 lagging, steps of 10 Mvar, one line may be lost."""
    net = two_buses((0.5, 0.5), p=80.0, power_factor=0.95) if network is None else network
    events = (Event("one line", "", (("branch", "line1"),)),) if events is None else events
    equipment = options.pop("equipment", STEP)
    candidate = options.pop("candidate", {})
    return Study(
        folder=Path(),
        title="",
        network=net,
        growth=everything(net),
        requirements=(Requirement("outages", None, 5.0),),
        contingencies=Contingencies(events, (), options.pop("bank_outage", "none")),
        voltage=options.pop("voltage", VoltageLimits()),
        candidates=tuple(Candidate(site, equipment, 8, 1000.0, **candidate) for site in sites),
        limits=options.pop("limits", Limits()),
        stages=None,
        report=ReportText(),
        hash="",
    )


def plan_of(study: Study, **steps: int) -> Plan:
    """So many steps of the study's equipment at each site."""
    e = study.candidates[0].equipment
    rows = tuple(
        PlanRow(site, e.equipment, e.kind, n, e.step_mvar, n * e.step_mvar, e.cost_fixed + n * e.cost_per_step)
        for site, n in steps.items()
        if n
    )
    return Plan(rows, tuple((row.site, 1000.0) for row in rows))


def row(case: str, margin_mw: float, required: float | None = 4.0, base: float = 80.0, **changes: Any) -> CaseMargin:
    """A reported margin."""
    met = required is None or margin_mw >= required
    made = CaseMargin(
        case,
        "",
        base,
        base + margin_mw,
        margin_mw,
        100.0 * margin_mw / base,
        required,
        met,
        "fold",
        "L",
        0.7,
        "L",
        0.7,
        (),
        "",
        "ok",
    )
    return replace(made, **changes)


def nose(x: float, mvar: float) -> float:
    """Margin [MW] over 80 MW at 0.95 lagging by the closed form."""
    b = mvar / 100.0
    return 100.0 * 0.95 / (2.0 * x * (1.0 - b * x) * (1.0 + math.sqrt(1.0 - 0.95**2))) - 80.0


def reported(steps: int, x: float = 0.5) -> list[CaseMargin]:
    return [row("intact", nose(x / 2, 10.0 * steps), None), row("one line", nose(x, 10.0 * steps))]


NEED = {"one line": 4.0}


def test_three_steps_pass_and_two_would_not() -> None:
    """The sizing study needs three steps for 5 %; one step fewer leaves 0.5483 % and is named as what breaks."""
    study = make()
    found = verify_plan(study, plan_of(study, L=3), reported(3), NEED)
    assert found.failures == ()
    assert found.passed
    assert found.cases == 2
    assert found.worst_residual_mva < 1e-6
    (fewer,) = found.one_step_fewer
    assert (fewer.steps, fewer.cost) == (2, 1000.0 + 500.0 + 200.0)
    assert fewer.breaks.startswith("one line: margin 0.438")


def test_two_steps_fail() -> None:
    """A plan one step short is not passed, and the case is named with its margin."""
    study = make()
    found = verify_plan(study, plan_of(study, L=2), reported(2), NEED)
    assert not found.passed
    assert any(f.startswith("one line: margin 0.438") for f in found.failures)


def test_a_step_too_many_is_told() -> None:
    """Four steps meet the requirement, but so do three: one step fewer breaks nothing, which is a failure."""
    study = make()
    found = verify_plan(study, plan_of(study, L=4), reported(4), NEED)
    assert not found.passed
    assert found.one_step_fewer[0].breaks.startswith("nothing")


def test_free_steps_save_nothing() -> None:
    """Where a step costs nothing, one fewer saves nothing, and that is no failure."""
    study = make(equipment=replace(STEP, cost_per_step=0.0))
    found = verify_plan(study, plan_of(study, L=4), reported(4), NEED)
    assert found.passed
    assert found.one_step_fewer[0].breaks.startswith("saves nothing")


def test_wrong_reports_are_found() -> None:
    """A margin, kind, base or verdict that is not so, a case left out, twice there or unknown: each is a failure."""
    study = make()
    plan = plan_of(study, L=3)
    intact, outage = reported(3)
    for cases, words in (
        ([intact, replace(outage, margin_mw=outage.margin_mw + 1e-3)], "the margin is"),
        ([intact, replace(outage, nose_kind="limit")], "kind fold, not limit"),
        ([intact, replace(outage, base_mw=81.0)], "the base is"),
        ([intact, replace(outage, met=False)], "reported as not met"),
        ([intact, replace(outage, steps_off="L:C10:1")], "the margin is 0.438"),
        ([intact, replace(outage, steps_off="L:C10:9")], "cannot be off"),
        ([intact, replace(outage, steps_off="L")], "does not read"),
        ([intact], "one line: the case is missing"),
        ([intact, outage, outage], "listed twice"),
        ([intact, outage, replace(outage, case="two lines")], "no such case"),
    ):
        found = verify_plan(study, plan, cases, NEED)
        assert not found.passed
        assert any(words in failure for failure in found.failures), (words, found.failures)


def test_the_empty_plan_is_checked_too() -> None:
    """Nothing to build is a plan: it passes where the network meets everything already, and fails where not."""
    study = make()
    cases = [row("intact", nose(0.25, 0.0), None), row("one line", nose(0.5, 0.0), None)]
    assert verify_plan(study, Plan(), cases, {}).passed
    assert not verify_plan(study, Plan(), cases, {"one line": 0.0}).passed


def test_rules_of_the_study_are_checked() -> None:
    """Budget, sites, steps, fast share, groups and the plan's own cost are held against the study's figures."""
    study = make(limits=Limits(budget=1799.0, max_sites=0, min_fast_share_pct=10.0))
    found = verify_plan(study, plan_of(study, L=3), reported(3), NEED)
    for words in ("above the budget", "more than max_sites", "min_fast_share_pct"):
        assert any(words in failure for failure in found.failures)
    plan = plan_of(make(), L=3)
    cheap = replace(plan, rows=(replace(plan.rows[0], cost=1.0),))
    assert any("by the study's figures" in f for f in verify_plan(make(), cheap, reported(3), NEED).failures)
    assert any("max_steps" in f for f in verify_plan(make(), plan_of(make(), L=9), reported(9), NEED).failures)
    assert "no candidate" in verify_plan(make(), plan_of(make(), X=1), reported(1), NEED).failures[0]


def test_floor_after_the_outage_needs_a_fourth_step() -> None:
    """With a 0.90 pu floor three steps leave 0.863515 pu after the outage, four are enough."""
    study = make(voltage=VoltageLimits(post_outage_min_pu=0.9, given=True))
    found = verify_plan(study, plan_of(study, L=3), reported(3), NEED)
    assert not found.passed
    assert any("post_outage_min_pu: one line at L: 0.863515 pu" in failure for failure in found.failures)
    found = verify_plan(study, plan_of(study, L=4), reported(4), NEED)
    assert found.passed
    assert found.one_step_fewer[0].breaks.startswith("post_outage_min_pu in one line: 0.863515 pu")


def test_light_load_lets_switched_banks_off_but_not_fixed_ones() -> None:
    """At no load four steps give 1.111111 pu: a switched bank is off then, a fixed one breaks the ceiling."""
    limits = VoltageLimits(light_load_pct=0.0, given=True)
    study = make(voltage=limits)
    assert verify_plan(study, plan_of(study, L=3), reported(3), NEED).passed
    study = make(voltage=limits, equipment=replace(STEP, switched=False))
    plan = plan_of(study, L=4)
    (light,) = [c for c in check_voltages(study, Cases(study, plan), Cases(study, Plan())) if "light" in c.name]
    assert not light.met
    assert light.value == pytest.approx(1.0 / 0.9, abs=1e-6)


def test_switching_a_step_is_held_against_its_limits() -> None:
    """The change by one step, intact and with a line out, is that of the two-bus voltages with and without it."""

    def voltage(x: float, b: float) -> float:
        p, q = 0.8, 0.8 * math.sqrt(1.0 / 0.95**2 - 1.0)
        e, x = 1.0 / (1.0 - b * x), x / (1.0 - b * x)
        half = e**2 / 2.0 - q * x
        return math.sqrt(half + math.sqrt(half**2 - x**2 * (p**2 + q**2)))

    intact = 100.0 * (voltage(0.25, 0.4) / voltage(0.25, 0.3) - 1.0)
    outage = 100.0 * (voltage(0.5, 0.4) / voltage(0.5, 0.3) - 1.0)
    assert intact < 3.2 < outage
    for limit, met in ((3.2, True), (intact - 0.001, False)):
        # A floor that only four steps keep leaves no other state to escape to.
        limits = VoltageLimits(switching_step_max_pct=limit, switching_step_outage_max_pct=15.0, post_outage_min_pu=0.9)
        study = make(voltage=replace(limits, given=True))
        plan = plan_of(study, L=4)
        checks = {c.name: c for c in check_voltages(study, Cases(study, plan), Cases(study, Plan()))}
        assert checks["switching_step_max_pct"].value == pytest.approx(intact, abs=1e-6)
        assert checks["switching_step_max_pct"].met is met
        assert checks["switching_step_outage_max_pct"].value == pytest.approx(outage, abs=1e-6)
        assert checks["switching_step_outage_max_pct"].met


def test_existing_violations_are_reported_or_enforced() -> None:
    """A voltage below the band without the plan, and no lower with it, counts as met only where that is said."""
    limits = VoltageLimits(intact_min_pu=1.04, intact_max_pu=1.1, given=True)
    for mode, met in (("report", True), ("enforce", False)):
        study = make(voltage=replace(limits, existing_violations=mode))
        plan = plan_of(study, L=3)
        low, _ = check_voltages(study, Cases(study, plan), Cases(study, Plan()))
        assert low.name == "intact_min_pu"
        assert low.value < 1.04
        assert low.met is met


def test_buses_that_are_not_monitored_do_not_count() -> None:
    """The same low voltage at a bus that is not monitored breaks nothing."""
    limits = VoltageLimits(intact_min_pu=1.04, intact_max_pu=1.1, existing_violations="enforce", given=True)
    study = make(voltage=limits)
    buses = replace(study.network.buses, monitored=study.network.buses.monitored & False)
    study = replace(study, network=replace(study.network, buses=buses))
    assert all(c.met for c in check_voltages(study, Cases(study, plan_of(study, L=3)), Cases(study, Plan())))


def test_loss_of_new_equipment_is_a_case() -> None:
    """An outage takes one step of a bank, all that is new where that is asked for, and the whole of an svc."""
    for equipment, outage, mvar in (
        (STEP, "step", 20.0),
        (STEP, "site", 0.0),
        (replace(STEP, kind="svc", v_ref_pu=1.0), "step", 0.0),
    ):
        study = make(equipment=equipment, bank_outage=outage)
        cases = Cases(study, plan_of(study, L=3))
        assert cases.names == ("intact", "one line", "bank:L:C10")
        model = cases.model("bank:L:C10")
        assert isinstance(model, Model)
        assert trace(model).t_mw == pytest.approx(nose(0.25, mvar), rel=1e-8)


def test_existing_steps_stay_on_and_rated_voltage_counts() -> None:
    """Two existing steps help from the start; steps rated at 1.2 times the bus kv give 1 / 1.44 of their Mvar."""
    study = make(equipment=replace(STEP, kv=1.2), candidate={"existing_steps": 2})
    for new, mvar in ((0, 20.0 / 1.44), (3, 50.0 / 1.44)):
        model = Cases(study, plan_of(study, L=new)).model("one line")
        assert isinstance(model, Model)
        assert trace(model).t_mw == pytest.approx(nose(0.5, mvar), rel=1e-8)


def test_blank_reference_is_the_voltage_without_the_plan() -> None:
    """An SVC without v_ref holds the intact voltage of the network as it is, so it gives nothing at first."""
    study = make(equipment=replace(STEP, kind="svc"))
    bare = check_voltages(
        replace(study, voltage=VoltageLimits(intact_min_pu=0.5, intact_max_pu=2.0, given=True)),
        Cases(study, Plan()),
        Cases(study, Plan()),
    )[0].value
    model = Cases(study, plan_of(study, L=3)).model("intact")
    assert isinstance(model, Model)
    assert model.devices[-1].set_pu == pytest.approx(bare, abs=1e-9)


def test_steps_off_of_names_with_spaces_and_colons() -> None:
    """Names are looked for as they are, so a site ``N 1`` or an equipment ``bank 10:2`` is read right."""
    rows = [("N 1", "bank 10"), ("N 1", "bank 10:2"), ("L", "C10")]
    off = parse_off("N 1:bank 10:2:3 N 1:bank 10:2 L:C10:1", rows)
    assert off == {("N 1", "bank 10:2"): 3, ("N 1", "bank 10"): 2, ("L", "C10"): 1}
    assert parse_off("", rows) == {}
    for wrong in ("L:C10", "L:C10:one", "M:C10:1"):
        with pytest.raises(UsageError, match="does not read"):
            parse_off(wrong, rows)


def test_fourteen_buses_with_banks_at_two_sites() -> None:
    """A plan at two sites of 14 buses passes with the margins of a trace, and fails when one of them is asked more."""
    net = read("ieee14")
    events = tuple(Event(f"branch:{k}", "branch", (("branch", k),)) for k in ("2", "10", "15"))
    study = make(net, events, ("14", "9"), bank_outage="step")
    plan = plan_of(study, **{"14": 1, "9": 2})
    cases = Cases(study, plan)
    rows, need = [], {}
    for name in cases.names:
        model = cases.model(name)
        assert isinstance(model, Model)
        found = trace(model)
        rows.append(row(name, found.t_mw, found.t_mw - 0.01, model.base_mw, nose_kind=found.kind))
        need[name] = found.t_mw - 0.01
    result = verify_plan(study, plan, rows, need)
    assert result.failures == ()
    assert len(result.one_step_fewer) == 2
    need["branch:15"] += 0.02
    assert any(f.startswith("branch:15: margin") for f in verify_plan(study, plan, rows, need).failures)
