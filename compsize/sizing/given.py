"""A given plan: what it breaks, what its cheapest repair costs, how far above the least cost it is."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

from compsize.errors import UsageError
from compsize.margin.assess import Bench
from compsize.network.plans import Choice
from compsize.sizing.judge import Judge
from compsize.sizing.problem import COST_TOLERANCE, Problem, Steps
from compsize.sizing.solve import Clock, Sizing, Solved, Tell

GivenPlan = Sequence[tuple[str, str, int]]


def steps_of(choices: Sequence[Choice], plan: GivenPlan) -> Steps:
    """New steps per choice of a plan given as (site, equipment, steps).

    Raises:
        UsageError: a row that is no candidate, or more steps than a candidate allows.
    """
    steps = [0] * len(choices)
    for site, equipment, count in plan:
        for k, choice in enumerate(choices):
            if (choice.candidate.site, choice.candidate.equipment.equipment) == (site, equipment):
                steps[k] += count
                if not 0 <= steps[k] <= choice.most_new:
                    raise UsageError(
                        f"{site}, {equipment}: {steps[k]} new steps where 0 to {choice.most_new} are possible"
                    )
                break
        else:
            raise UsageError(f"{site}, {equipment} is not among the candidates of the study")
    return tuple(steps)


def faults_of(problem: Problem, judge: Judge, steps: Steps) -> list[str]:
    """Everything a plan breaks, in words: rules of the study, then cases with their shortfall."""
    found = list(problem.broken(steps))
    for check in judge.first_failures(steps, 1_000_000):
        found.append(judge.describe(check))
    return found


def judged(bench: Bench, best: Solved, plan: GivenPlan, workers: int, clock: Clock, tell: Tell | None) -> Solved:
    """The verdict on ``plan``, beside the least-cost answer ``best`` of the same study."""
    problem, judge = best.problem, best.judge
    steps = steps_of(bench.choices, plan)
    cost = problem.cost(steps)
    faults = faults_of(problem, judge, steps)
    if faults:
        repair = Sizing(replace(problem, least=steps), judge, workers, clock, tell).run()
        words = "; ".join(faults[:6]) + (f"; and {len(faults) - 6} more" if len(faults) > 6 else "")
        sentence = f"The given plan breaks {len(faults)} condition{'s' if len(faults) > 1 else ''}: {words}."
        if repair.steps is not None:
            extra = repair.problem.cost(repair.steps) - cost
            added = ", ".join(
                f"{n - m} x {choice.name}"
                for choice, n, m in zip(bench.choices, repair.steps, steps, strict=True)
                if n > m
            )
            sure = "cheapest" if repair.status == "optimal" else "best known"
            sentence += f" The {sure} repair that keeps its steps adds {added} for {extra:g}."
        else:
            sentence += " No repair that keeps its steps was found."
        return replace(best, status="unreachable", sentence=sentence, steps=steps, shown=steps)
    if best.bound is None:
        return replace(best, status="feasible", sentence="The given plan meets everything.", steps=steps, shown=steps)
    over = cost - best.bound
    if over <= COST_TOLERANCE * max(1.0, cost):
        sentence = "The given plan meets everything, and none is cheaper."
        return replace(best, sentence=sentence, steps=steps, shown=steps)
    share = 100.0 * over / best.bound if best.bound > 0.0 else float("inf")
    least = "the least cost" if best.status == "optimal" else "the proved bound"
    sentence = f"The given plan meets everything; it costs {over:g} more than {least} {best.bound:g}"
    sentence += f" ({share:.1f} %)." if best.bound > 0.0 else "."
    return replace(best, status="feasible", sentence=sentence, steps=steps, shown=steps)
