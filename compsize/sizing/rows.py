"""A chosen plan in rows: every case with it, and the plans next to it."""

from __future__ import annotations

from compsize.margin.assess import Bench
from compsize.margin.cases import CaseSpec, bank_cases, case_margin, steps_lost
from compsize.margin.pool import run_all
from compsize.plan.records import CaseMargin, RunnerUp
from compsize.sizing.judge import Judge
from compsize.sizing.problem import Problem, Steps

Row = tuple[CaseSpec, int, Steps, float | None, float]
"""Case, its number, the steps that are on, what it needs [MW], and the shortfall that still counts as met."""


def rows_after(bench: Bench, judge: Judge, steps: Steps, workers: int) -> tuple[CaseMargin, ...]:
    """Every case with ``steps`` installed, traced from the operating point."""
    noses = judge.noses
    specs: list[Row] = [(t.spec, c, steps, t.need, t.allowed) for c, t in enumerate(noses.targets)]
    for spec in bank_cases(bench.study, bench.choices, steps):
        check = next((x for x in judge.checks(steps) if x.bank == spec.choice), None)
        if check is not None:
            specs.append((spec, 0, check.state, check.need, check.allowed))
        else:
            lost = steps_lost(bench.study, bench.choices[spec.choice], steps[spec.choice])
            state = tuple(n - (lost if k == spec.choice else 0) for k, n in enumerate(steps))
            specs.append((spec, 0, state, None, noses.targets[0].allowed))

    def one(item: Row) -> CaseMargin:
        spec, case, state, need, allowed = item
        target = noses.targets[case]
        if not target.model.evaluable:
            return case_margin(bench.grid, spec, target.model, None, need)
        wanted = float("-inf") if need is None else need - allowed
        margin, nose, model = noses.trace(case, state)
        at = state
        if not margin >= wanted:
            _, at = noses.climbed(case, state, wanted)
            if at != state:
                _, nose, model = noses.trace(case, at)
        off = " ".join(
            f"{choice.name}:{a - b}" for choice, a, b in zip(bench.choices, state, at, strict=True) if a != b
        )
        return case_margin(bench.grid, spec, model, nose, need, off)

    return tuple(run_all(one, specs, workers))


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
                note = judge.describe(check)
            found.append(RunnerUp(problem.plan(steps), problem.cost(steps), not failures, note))
    found.sort(key=lambda r: r.cost)
    return tuple([r for r in found if r.meets][:3] + [r for r in found if not r.meets][:3])
