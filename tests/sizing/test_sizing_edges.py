"""The ends of sizing: nothing to build, nothing to build from, ties, free equipment, limits that just hold, no time."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import pytest
from sizing_studies import BANK, EVENTS, SVC, study_of, valley

from compsize.api import margins, size
from compsize.margin.assess import prepare
from compsize.plan.records import Plan, SizeResult
from compsize.report.write import write_report
from compsize.sizing.judge import Judge
from compsize.sizing.master import Cover, Master
from compsize.sizing.noses import Noses
from compsize.sizing.problem import build_problem
from compsize.sizing.walk import Walk, plans_before
from compsize.study.records import Candidate, Equipment, Event, Limits, Requirement, Study
from compsize.verify.plan import verify_plan

NEED = [Requirement("outages", 75.0, None)]
TWO = (Candidate("2", BANK, 4, 100.0), Candidate("4", BANK, 4, 120.0))


def rows_of(result: SizeResult) -> list[tuple[str, str, int]]:
    assert result.plan is not None
    return [(row.site, row.equipment, row.steps) for row in result.plan.rows]


def test_nothing_to_build_at_every_layer(tmp_path: Path) -> None:
    """The empty plan passes through problem, master, judge, walk, result, verification and report at a cost of 0."""
    study = study_of(valley(), TWO, [Requirement("outages", 60.0, None)])
    bench = prepare(study)
    problem = build_problem(bench.choices, study.limits)
    assert problem.cost((0, 0)) == 0.0
    assert problem.plan((0, 0)) == Plan()
    assert problem.broken((0, 0)) == ()
    assert Master(problem).solve() == ((0, 0), 0.0)
    judge = Judge(Noses(bench))
    assert judge.first_failures((0, 0), 9) == []
    assert plans_before(problem, (0, 0), 1000) == []
    walked = Walk(problem, judge, 1).run([], (0, 0), lambda: False)
    assert (walked.plans, walked.finished, walked.better) == (0, True, None)
    result = size(study, workers=1)
    assert (result.status, result.cost, result.cost_bound, result.gap_pct) == ("optimal", 0.0, 0.0, 0.0)
    assert result.plan == Plan()
    assert result.to_frame().empty
    assert result.proof.kind == "full"
    assert result.proof.cheaper_plans == 0
    assert result.verification is not None
    assert result.verification.passed
    assert verify_plan(study, Plan(), result.cases_after, {event.name: 60.0 for event in EVENTS}).passed
    write_report(result, tmp_path / "out")
    assert (tmp_path / "out" / "report.html").exists()


def test_no_candidates() -> None:
    """Without a candidate the answer is the empty plan where it is enough, and unreachable where it is not."""
    met = size(study_of(valley(), (), [Requirement("outages", 60.0, None)]), workers=1)
    assert (met.status, met.cost) == ("optimal", 0.0)
    unmet = size(study_of(valley(), (), NEED), workers=1)
    assert unmet.status == "unreachable"
    assert unmet.plan is None
    assert unmet.proof.cheaper_plans == 1
    assert unmet.cases_after == unmet.cases_before


def test_one_candidate() -> None:
    """One site of four steps takes as many as it needs."""
    result = size(study_of(valley(), TWO[:1], NEED), workers=1)
    assert rows_of(result) == [("2", "bank", 2)]
    assert result.status == "optimal"


def test_no_requirement_on_any_case() -> None:
    """A requirement on the intact network alone leaves the outages without one, and the plan empty."""
    result = size(study_of(valley(), TWO, [Requirement("intact", 100.0, None)]), workers=1)
    assert (result.status, result.cost) == ("optimal", 0.0)
    assert all(case.required_mw is None for case in result.cases_after if case.case != "intact")


def test_a_candidate_that_does_nothing() -> None:
    """A bank at the bus that the slack holds changes no margin: it is never bought, and alone it reaches nothing."""
    idle = Candidate("S", replace(BANK, cost_fixed=0.0, cost_per_step=1.0), 4, 0.0)
    result = size(study_of(valley(), (idle, *TWO), NEED), workers=1)
    assert rows_of(result) == [("2", "bank", 2)]
    alone = size(study_of(valley(), (idle,), NEED), workers=1)
    assert alone.status == "unreachable"
    before = {case.case: case.margin_mw for case in alone.cases_before}
    assert all(case.margin_mw == pytest.approx(before[case.case], rel=1e-7) for case in alone.cases_after)


def test_identical_candidates() -> None:
    """Of two equal equipments at a site, the earlier row is chosen, whichever it is."""
    one, other = replace(BANK, equipment="one"), replace(BANK, equipment="other")
    for first, second in ((one, other), (other, one)):
        rows = (Candidate("2", first, 4, 100.0), Candidate("2", second, 4, 100.0))
        result = size(study_of(valley(), rows, NEED), workers=1)
        assert rows_of(result) == [("2", first.equipment, 2)]


def test_equal_cost_takes_fewer_sites_then_fewer_steps() -> None:
    """Among plans of one cost that with fewer sites comes first, then that with fewer steps."""
    free = Equipment("free", "bank", 20.0, 0.0, 300.0)
    rows: tuple[Candidate, ...] = (Candidate("3", free, 1), Candidate("2", free, 1), Candidate("4", free, 2))
    result = size(study_of(valley(), rows, [Requirement("outages", 76.0, None)]), workers=1)
    assert rows_of(result) == [("4", "free", 2)]
    half = Equipment("half", "bank", 10.0, 0.0, 150.0)
    rows = (Candidate("4", half, 4), Candidate("4", free, 2))
    result = size(study_of(valley(), rows, [Requirement("outages", 80.0, None)]), workers=1)
    assert rows_of(result) == [("4", "free", 2)]


def test_free_equipment() -> None:
    """Equipment that costs nothing makes a plan of cost 0 that is not empty, with the fewest sites and steps."""
    free = Equipment("free", "bank", 20.0, 0.0, 0.0)
    result = size(study_of(valley(), (Candidate("2", free, 4), Candidate("4", BANK, 4, 120.0)), NEED), workers=1)
    assert (result.status, result.cost, result.cost_bound, result.gap_pct) == ("optimal", 0.0, 0.0, 0.0)
    assert rows_of(result) == [("2", "free", 2)]
    assert result.verification is not None
    assert result.verification.failures == ()


@pytest.mark.parametrize(("budget", "status"), [(800.0, "optimal"), (799.99, "unreachable"), (0.0, "unreachable")])
def test_budget(budget: float, status: str) -> None:
    """The least cost is 800: a budget of that is enough, of a cent less is not."""
    result = size(study_of(valley(), TWO, NEED, limits=Limits(budget=budget)), workers=1)
    assert result.status == status
    assert result.cost == (800.0 if status == "optimal" else None)


def test_no_sites_allowed() -> None:
    """With max_sites = 0 only the empty plan is left."""
    assert size(study_of(valley(), TWO, NEED, limits=Limits(max_sites=0)), workers=1).status == "unreachable"


def test_share_of_fast_equipment() -> None:
    """Where half of the added Mvar must be fast, an SVC is bought although banks would cost less."""
    rows = (*TWO, Candidate("4", SVC, 2, 120.0))
    plain = size(study_of(valley(), rows, NEED), workers=1)
    fast = size(study_of(valley(), rows, NEED, limits=Limits(min_fast_share_pct=50.0)), workers=1)
    assert all(kind == "bank" for _, kind, _ in rows_of(plain))
    added = dict.fromkeys(("bank", "svc"), 0.0)
    for _, equipment, steps in rows_of(fast):
        added[equipment] += steps * (BANK if equipment == "bank" else SVC).step_mvar
    assert added["svc"] >= added["bank"]
    assert (fast.cost or 0.0) > (plain.cost or 0.0)
    assert fast.verification is not None
    assert fast.verification.failures == ()


def test_no_time() -> None:
    """A time limit of a microsecond ends without a plan or with one that is verified, and never claims a proof."""
    result = size(study_of(valley(), TWO, NEED), workers=1, time_limit=1e-6)
    assert result.status in ("limit", "feasible")
    assert "time limit" in result.sentence
    assert result.proof.kind != "full"
    assert result.cost_bound is not None
    assert result.cost_bound <= 800.0
    if result.status == "limit":
        assert result.plan is None
        assert result.cases_after == result.cases_before
    else:
        assert result.verification is not None
        assert result.verification.passed


def test_a_case_that_cannot_be_evaluated_is_not_met() -> None:
    """An outage that takes the slack's part away is a row with its status, and no plan meets it."""
    alone = Event("source cut off", "line", tuple(("branch", name) for name in ("S-A 1", "S-A 2", "S-U")))
    study = study_of(valley(), TWO, NEED, events=(*EVENTS, alone))
    (row,) = [case for case in margins(study, workers=1).cases if case.case == "source cut off"]
    assert row.margin_mw is None
    assert not row.met
    assert row.status == "not evaluable: the lost part holds the slack unit"
    result = size(study, workers=1)
    assert result.status == "unreachable"
    assert "source cut off" in result.sentence


def test_loss_of_a_step_of_an_existing_bank() -> None:
    """Where an existing bank gets no new step the result passes its own verification."""
    rows = (Candidate("4", BANK, 4, 120.0, existing_steps=2), Candidate("2", BANK, 4, 100.0))
    study = study_of(valley(), rows, [Requirement("outages", 70.0, None)], bank_outage="step")
    result = size(study, workers=1)
    assert result.status == "optimal"
    assert result.verification is not None
    assert result.verification.failures == ()


def test_a_master_problem_without_a_plan() -> None:
    """Covers that exclude every plan leave the master nothing; one that excludes none leaves it the empty plan."""
    study: Study = study_of(valley(), TWO, NEED)
    problem = build_problem(prepare(study).choices, study.limits)
    master = Master(problem)
    master.add(Cover((1, 0)))
    assert master.solve() == ((0, 1), 520.0)
    master.add(Cover((4, 4)))
    assert master.solve() is None
