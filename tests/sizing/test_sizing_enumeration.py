"""The least cost against every plan judged one by one, by noses that share no code with the search."""

from __future__ import annotations

from dataclasses import replace

import pytest
from sizing_studies import BANK, EVENTS, SMALL, SVC, Enumeration, is_close, plan_of, study_of, valley

from compsize.api import margins, size
from compsize.plan.records import SizeResult
from compsize.study.records import Candidate, Limits, Requirement, Study

SITES = ("2", "3", "4", "B")
FOUR_SITES = tuple(Candidate(site, BANK, 4, 100.0 + 10.0 * k) for k, site in enumerate(SITES))
SHARED = Enumeration()
"""Noses of the four sites; studies that differ in what they require share them."""

CHEAP_SITES = (
    Candidate("2", SMALL, 4, 10.0),
    Candidate("4", SMALL, 4, 20.0),
    Candidate("B", BANK, 4, 400.0),
    Candidate("3", BANK, 4, 450.0),
)
SHARED_CHEAP = Enumeration()


def outages(mw: float) -> Requirement:
    return Requirement("outages", mw, None)


def steps_of(study: Study, result: SizeResult) -> tuple[int, ...]:
    """New steps per candidate row of the plan of a result."""
    assert result.plan is not None
    rows = {(row.site, row.equipment): row.steps for row in result.plan.rows}
    return tuple(rows.get((c.site, c.equipment.equipment), 0) for c in study.candidates)


def check(study: Study, enumeration: Enumeration, bare: bool = False) -> SizeResult:
    """Size a study and compare it with the enumeration; ``bare``: nothing to build may be the answer."""
    result = size(study, workers=2)
    found = enumeration.cheapest(study)
    assert found is not None
    cost, steps = found
    assert result.status == "optimal", result.sentence
    assert result.cost is not None
    assert is_close(result.cost, cost), (result.plan, steps)
    assert result.cost_bound is not None
    assert is_close(result.cost_bound, cost)
    assert result.gap_pct == 0.0
    assert enumeration.meets(study, steps_of(study, result))
    assert all(case.met for case in result.cases_after)
    assert result.verification is not None
    assert result.verification.failures == ()
    assert bare or cost > 0.0
    return result


@pytest.mark.parametrize(
    "requirements",
    [
        (outages(75.0),),
        (outages(85.0), Requirement("intact", 205.0, None)),
        (Requirement("line", 95.0, None), Requirement("double", 80.0, None)),
        (Requirement("unit", None, 57.0), Requirement("double", None, 28.0)),
        (outages(100.0),),
        (Requirement("line", 110.0, None), Requirement("intact", None, 70.0)),
        (Requirement("outages", 60.0, 35.0), Requirement("double", 30.0, 10.0)),
    ],
)
def test_four_sites_of_four_steps(requirements: tuple[Requirement, ...]) -> None:
    """Five outages, four sites, four steps each: the plan costs what the best of all 625 plans costs."""
    check(study_of(valley(), FOUR_SITES, requirements), SHARED)


def test_already_met() -> None:
    """Where every case has its margin already the plan is empty and costs nothing."""
    result = check(study_of(valley(), FOUR_SITES, [outages(60.0)]), SHARED, bare=True)
    assert result.cost == 0.0
    assert result.plan is not None
    assert result.plan.rows == ()
    assert result.cases_after == result.cases_before


def test_unreachable() -> None:
    """Two sites cannot bring 200 MW: none of all 25 plans does, and the result shows the best that one reaches."""
    study = study_of(valley(), FOUR_SITES[1:3], [outages(200.0)], events=EVENTS[::4])
    enumeration = Enumeration()
    assert enumeration.cheapest(study) is None
    result = size(study, workers=2)
    assert result.status == "unreachable"
    assert result.plan is None
    assert result.cost is None
    assert result.proof.kind == "full"
    assert result.proof.cheaper_plans == 25
    plans = [(a, b) for a in range(5) for b in range(5)]
    best = max(min(enumeration.best(study, event.name, plan) for event in EVENTS[::4]) for plan in plans)
    reached = min(case.margin_mw or 0.0 for case in result.cases_after if case.case != "intact")
    assert reached == pytest.approx(best, rel=1e-7)
    assert not all(case.met for case in result.cases_after)


@pytest.mark.parametrize(("bank_outage", "mw"), [("step", 198.0), ("site", 188.0)])
def test_loss_of_what_is_added(bank_outage: str, mw: float) -> None:
    """With the loss of a step, or of all that is new at a site, as a case the best plan is found, and costs more."""
    requirements = [outages(80.0), Requirement("bank_outage", mw, None)]
    study = study_of(valley(), FOUR_SITES, requirements, bank_outage=bank_outage)
    result = check(study, SHARED)
    assert any(case.case.startswith("bank:") for case in result.cases_after)
    without = SHARED.cheapest(replace(study, contingencies=replace(study.contingencies, bank_outage="none")))
    assert without is not None
    assert result.cost is not None
    assert result.cost > without[0]


def test_most_sites_and_exclusive_groups() -> None:
    """Two sites are best; with one site allowed, and with these two excluding each other, the best of what is left."""
    both = check(study_of(valley(), CHEAP_SITES, [outages(82.0)]), SHARED_CHEAP)
    assert both.plan is not None
    assert both.plan.sites == ("2", "4")
    one = check(study_of(valley(), CHEAP_SITES, [outages(82.0)], limits=Limits(max_sites=1)), SHARED_CHEAP)
    assert one.plan is not None
    assert len(one.plan.sites) == 1
    rows = [replace(c, exclusive_group="one of two") if c.site in ("2", "4") else c for c in CHEAP_SITES]
    other = check(study_of(valley(), rows, [outages(82.0)]), SHARED_CHEAP)
    assert other.plan is not None
    assert not {"2", "4"} <= set(other.plan.sites)
    assert both.cost is not None
    assert one.cost is not None
    assert other.cost is not None
    assert both.cost < other.cost < one.cost


def test_bank_and_svc_at_a_site() -> None:
    """Banks of two sizes and an SVC at two sites, the loss of each counted: the best of all plans."""
    rows = [
        Candidate("4", BANK, 2, 120.0),
        Candidate("4", SVC, 1, 120.0),
        Candidate("2", SMALL, 3, 100.0),
        Candidate("2", SVC, 1, 100.0),
    ]
    needs = {"line": 96.0, "double": 90.0, "unit": 160.0}
    requirements = [Requirement(klass, mw, None) for klass, mw in needs.items()]
    check(study_of(valley(), rows, requirements, bank_outage="step"), Enumeration())


def test_svc_is_bought_where_it_is_worth_it() -> None:
    """Where banks alone cannot, the SVC is part of the best plan and of the found one."""
    rows = [Candidate("4", BANK, 2, 120.0), Candidate("4", SVC, 2, 120.0), Candidate("2", SMALL, 2, 100.0)]
    study = study_of(valley(), rows, [outages(93.0)])
    result = check(study, Enumeration())
    assert steps_of(study, result)[1] > 0


def test_existing_steps() -> None:
    """Existing steps serve from the start, cost nothing and count inside the most; an extension pays no bay."""
    rows = [
        Candidate("4", BANK, 4, 120.0, existing_steps=2),
        Candidate("2", SMALL, 4, 100.0),
        Candidate("3", BANK, 3, 0.0, existing_steps=1),
    ]
    study = study_of(valley(), rows, [outages(105.0)])
    enumeration = Enumeration()
    result = check(study, enumeration)
    before = {case.case: case.margin_mw for case in result.cases_before}
    for event in EVENTS:
        assert before[event.name] == pytest.approx(enumeration.margin(study, event.name, (0, 0, 0)), rel=1e-7)
    assert all(n <= c.max_steps - c.existing_steps for n, c in zip(steps_of(study, result), rows, strict=True))


def test_margins_are_those_of_the_second_opinion() -> None:
    """The margins without new equipment agree with the second opinion's traces to 1e-7."""
    study = study_of(valley(), FOUR_SITES, [outages(75.0)])
    for case in margins(study, workers=2).cases:
        assert case.margin_mw == pytest.approx(SHARED.margin(study, case.case, (0, 0, 0, 0)), rel=1e-7)


def test_the_enumeration_can_fail() -> None:
    """The comparison notices a plan one step too small, and a cost that is not the least."""
    study = study_of(valley(), FOUR_SITES, [outages(85.0)])
    found = SHARED.cheapest(study)
    assert found is not None
    cost, steps = found
    k = next(k for k, n in enumerate(steps) if n)
    fewer = (*steps[:k], steps[k] - 1, *steps[k + 1 :])
    assert not SHARED.meets(study, fewer)
    assert not is_close(plan_of(study, fewer).cost, cost)
