"""The whole sizing run: prepare, search, prove, and hand over names and MW."""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import dataclass

from compsize.margin.assess import Bench
from compsize.margin.cases import CaseSpec, bank_cases, case_margin
from compsize.margin.pool import run_all
from compsize.nose.engine import Nose
from compsize.plan.records import CaseMargin, Proof, ProofPart, RunnerUp
from compsize.sizing.judge import Judge
from compsize.sizing.noses import Noses, Steps
from compsize.sizing.problem import Problem, build_problem
from compsize.sizing.search import Search
from compsize.sizing.walk import Walk, count_before, plans_before

WALK_CAP = 400_000
FEW_PLANS = 3_000
Tell = Callable[[str, int, int | None], None]


@dataclass(frozen=True, eq=False)
class Solved:
    """Outcome of the search in steps; ``reports.py`` turns it into a result."""

    status: str
    sentence: str
    steps: Steps | None
    """The chosen plan; None without one."""
    shown: Steps
    """The plan whose margins are shown: the chosen one, else the best reachable."""
    bound: float | None
    proof: Proof
    problem: Problem
    noses: Noses
    judge: Judge
    masters: int
    walked: int
    history: tuple[tuple[int, float | None, float], ...]


class Clock:
    """Time left of a limit; monotonic, and the only clock below the interface."""

    def __init__(self, seconds: float | None) -> None:
        self._end = None if seconds is None else time.monotonic() + seconds

    def over(self) -> bool:
        return self._end is not None and time.monotonic() >= self._end


def solve(bench: Bench, workers: int, time_limit: float | None, tell: Tell | None = None, proof: str = "auto") -> Solved:
    """Least-cost plan of a study with its proof, or the reason why there is none."""
    clock = Clock(time_limit)
    problem = build_problem(bench.choices, bench.study.limits)
    noses = Noses(bench)
    judge = Judge(noses)
    zero: Steps = tuple(0 for _ in problem.most)
    say: Tell = tell or (lambda stage, done, total: None)

    say("cases without new equipment", 0, len(noses.targets))
    todo = [c for c, t in enumerate(noses.targets) if t.model.evaluable]
    run_all(lambda c: noses.margin(c, zero), todo, workers, lambda k: say("cases without new equipment", k, len(todo)))
    for check in sorted(judge.checks(zero), key=lambda c: noses.margin(c.case, c.state) - c.need):
        judge.kills[check.case, check.bank] = len(noses.targets) - len(judge.kills)
    impossible = [t.spec.name for t in noses.targets if t.need is not None and not t.model.evaluable]
    if impossible:
        names = ", ".join(impossible[:5])
        return Solved(
            "unreachable",
            f"No plan can meet the requirement: {names} cannot be evaluated, which counts as not met.",
            None, zero, None, Proof("full", "A case that cannot be evaluated is not met by any plan.", 0),
            problem, noses, judge, 0, 0, (),
        )  # fmt: skip

    search = Search(problem, judge)
    if not judge.first_failures(zero, 1) and not problem.broken(zero):
        search.accept(zero)
        search.found.bound = 0.0
        proof_zero = Proof("full", "Nothing needs to be built: every case already keeps its margin, and no plan costs less than nothing.", 0)
        return Solved("optimal", "Every case already keeps its margin; nothing needs to be built.", zero, zero, 0.0,
                      proof_zero, problem, noses, judge, 0, 0, tuple(search.found.history))  # fmt: skip
    greedy = search.greedy(clock.over)
    if greedy is not None:
        search.accept(greedy)
    # Few cheaper plans are walked at once: the walk finds the answer and is the proof.
    over = greedy is not None and count_before(problem, greedy, FEW_PLANS) <= FEW_PLANS and proof != "covers"
    while not over and not clock.over():
        over = search.step()
        say("search for the cheapest plan", search.master.solves, None)
    if not over:
        return _stopped(search, problem, noses, judge, zero)
    return _prove(search, problem, noses, judge, workers, clock, say, proof)


def _stopped(search: Search, problem: Problem, noses: Noses, judge: Judge, zero: Steps) -> Solved:
    found = search.found
    part = ProofPart("covers", len(search.master.covers), COVER_ASSUMPTION)
    proof = Proof("covers", "Stopped by the time limit; the bound rests on covers.", None, (part,))
    if found.plan is None:
        return Solved("limit", "Stopped by the time limit before a plan was found.", None, zero, found.bound, proof,
                      problem, noses, judge, search.master.solves, 0, tuple(found.history))  # fmt: skip
    return Solved("feasible", "Stopped by the time limit: the plan meets everything, but a cheaper one may exist.",
                  found.plan, found.plan, found.bound, proof, problem, noses, judge, search.master.solves, 0,
                  tuple(found.history))  # fmt: skip


COVER_ASSUMPTION = "the margin of a case does not rise and fall again inside a box of plans that a cover closes"
WALK_ASSUMPTION = "none beyond the located noses"
RULE_ASSUMPTION = "none: they break a rule of the study"


def _prove(
    search: Search,
    problem: Problem,
    noses: Noses,
    judge: Judge,
    workers: int,
    clock: Clock,
    say: Tell,
    proof: str,
) -> Solved:
    """Walk every plan before the answer; a better one found on the way becomes the answer."""
    found = search.found
    walk = Walk(problem, judge, workers)
    walked = 0
    while True:
        answer = found.plan
        cap = WALK_CAP if proof != "covers" else -1
        plans = plans_before(problem, answer, cap)
        if plans is None:
            count = None if cap < 0 or answer is None else count_before(problem, answer, cap)
            break
        outcome = walk.run(plans, answer, clock.over, lambda k, n: say("proof: cheaper plans", k, n))
        walked = max(walked, outcome.plans)
        if outcome.better is not None:
            search.accept(outcome.better)
            if not outcome.open_plans:
                continue
        if not outcome.finished or outcome.open_plans:
            count = len(plans)
            break
        parts = (
            ProofPart("walk", outcome.excluded, WALK_ASSUMPTION),
            ProofPart("rules", outcome.by_rule, RULE_ASSUMPTION),
        )
        if answer is None:
            sentence = f"All {len(plans)} plans that the candidates allow were walked; each fails a case or breaks a rule of the study."
            return Solved("unreachable", "No plan of these candidates meets the requirement.", None, _reach(judge, problem, clock),
                          None, Proof("full", sentence, len(plans), parts), problem, noses, judge,
                          search.master.solves, walked, tuple(found.history))  # fmt: skip
        cost = problem.cost(answer)
        sentence = (
            f"All {len(plans)} plans that come before this one (cheaper, or equal in cost with fewer sites or steps) were "
            "walked; each fails a case whose nose was located, or breaks a rule of the study."
        )
        return Solved("optimal", "The plan meets every case at least cost; every cheaper plan was shown to fail.", answer,
                      answer, cost, Proof("full", sentence, len(plans), parts), problem, noses, judge,
                      search.master.solves, walked, tuple(found.history))  # fmt: skip
    part = ProofPart("covers", len(search.master.covers), COVER_ASSUMPTION)
    rest = Proof("covers", "The bound rests on covers; the plans before the answer are too many to walk, or the walk was cut short.", count, (part,))
    if found.plan is None:
        return Solved("unreachable", "No plan was found, and the covers leave none.", None, _reach(judge, problem, clock), None, rest,
                      problem, noses, judge, search.master.solves, walked, tuple(found.history))  # fmt: skip
    return Solved("feasible", "The plan meets every case; the proof that nothing is cheaper is incomplete.", found.plan,
                  found.plan, found.bound, rest, problem, noses, judge, search.master.solves, walked,
                  tuple(found.history))  # fmt: skip


def _reach(judge: Judge, problem: Problem, clock: Clock) -> Steps:
    """The plan with the best reachable worst shortfall that a climb from nothing finds, within the rules."""
    plan: Steps = tuple(0 for _ in problem.most)

    def worst(at: Steps) -> float:
        return max((judge.shortfall(check) for check in judge.checks(at)), default=0.0)

    value = worst(plan)
    while True:
        best: tuple[float, Steps] | None = None
        for k, most in enumerate(problem.most):
            for more in (1, most - plan[k]):
                if more < 1 or plan[k] + more > most or clock.over():
                    continue
                trial = (*plan[:k], plan[k] + more, *plan[k + 1 :])
                if problem.broken(trial):
                    continue
                there = worst(trial)
                if there < value - 1e-9 and (best is None or there < best[0]):
                    best = (there, trial)
        if best is None:
            return plan
        value, plan = best


def rows_after(bench: Bench, solved: Solved, steps: Steps, workers: int) -> tuple[tuple[CaseMargin, ...], dict[str, Nose]]:
    """Every case with ``steps`` installed, traced from the operating point; and the noses by case."""
    noses, judge = solved.noses, solved.judge
    specs: list[tuple[CaseSpec, int, Steps, float | None, float]] = [
        (t.spec, c, steps, t.need, t.allowed) for c, t in enumerate(noses.targets)
    ]
    for spec in bank_cases(bench.study, bench.choices, steps):
        check = next((x for x in judge.checks(steps) if x.bank == spec.choice), None)
        if check is not None:
            specs.append((spec, 0, check.state, check.need, check.allowed))
        else:
            from compsize.margin.cases import steps_lost

            lost = steps_lost(bench.study, bench.choices[spec.choice], steps[spec.choice])
            state = tuple(n - (lost if k == spec.choice else 0) for k, n in enumerate(steps))
            specs.append((spec, 0, state, None, noses.targets[0].allowed))

    def one(item: tuple[CaseSpec, int, Steps, float | None, float]) -> tuple[CaseMargin, str, Nose | None]:
        spec, case, state, need, allowed = item
        target = noses.targets[case]
        if not target.model.evaluable:
            return case_margin(bench.grid, spec, target.model, None, need), spec.name, None
        wanted = float("-inf") if need is None else need - allowed
        margin, nose, model = noses.trace(case, state)
        at = state
        if not margin >= wanted:
            _, at = noses.climbed(case, state, wanted)
            if at != state:
                _, nose, model = noses.trace(case, at)
        off = " ".join(
            f"{choice.name}:{a - b}"
            for choice, a, b in zip(bench.choices, state, at, strict=True)
            if a != b
        )
        return case_margin(bench.grid, spec, model, nose, need, off), spec.name, nose

    outcomes = run_all(one, specs, workers)
    return tuple(row for row, _, _ in outcomes), {name: nose for _, name, nose in outcomes if nose is not None}


def runner_up(problem: Problem, plan: Steps, judge: Judge) -> tuple[RunnerUp, ...]:
    """Plans with one step moved or taken off the answer, cheapest first, and what each breaks."""
    found: list[RunnerUp] = []
    for k, n in enumerate(plan):
        if n == 0:
            continue
        for j in range(len(plan)):
            if j == k or plan[j] >= problem.most[j]:
                continue
            trial = list(plan)
            trial[k] -= 1
            trial[j] += 1
            steps = tuple(trial)
            if problem.broken(steps):
                continue
            failures = judge.first_failures(steps, 1)
            note = "meets every case, dearer"
            if failures:
                check = failures[0]
                name = judge.noses.targets[check.case].spec.name if check.bank < 0 else f"bank:{judge.choices[check.bank].name}"
                note = f"{name} falls {judge.shortfall(check) + check.allowed:.2f} MW short"
            found.append(RunnerUp(problem.plan(steps), problem.cost(steps), not failures, note))
    found.sort(key=lambda r: r.cost)
    return tuple([r for r in found if r.meets][:3] + [r for r in found if not r.meets][:3])
