"""The full proof: every plan that comes before the answer fails a case whose nose is located.

Plans are walked by their number of steps, so that all plans below one are done before it. A plan fails a
case when the noses of *all* states of switched steps it allows fall short; of these, all but the plan's own
were evaluated when the smaller plans were walked, or are evaluated then.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass

from compsize.sizing.judge import Judge
from compsize.sizing.problem import COST_TOLERANCE, Problem, Steps


@dataclass(frozen=True)
class Walked:
    """Outcome: ``better`` is a plan before the answer that meets everything, if one turned up; ``open_plans``
    are plans that could be neither excluded nor accepted (an unresolved nose)."""

    plans: int
    excluded: int
    by_rule: int
    better: Steps | None
    open_plans: tuple[Steps, ...]
    finished: bool


def plans_before(problem: Problem, answer: Steps | None, cap: int) -> list[Steps] | None:
    """All plans within the candidates that come before ``answer`` (all plans, without one); None if over ``cap``.

    Plans that break a rule of the study are among them: their noses serve larger plans.
    """
    top = math.inf if answer is None else problem.cost(answer) * (1 + COST_TOLERANCE) + COST_TOLERANCE
    count = len(problem.most)
    found: list[Steps] = []
    at = [0] * count

    def grow(k: int) -> bool:
        if k == count:
            plan = tuple(at)
            if answer is None or problem.better(plan, answer):
                found.append(plan)
            return len(found) <= cap
        for n in range(problem.most[k] + 1):
            at[k] = n
            if problem.cost(at[: k + 1] + [0] * (count - k - 1)) > top:
                break
            if not grow(k + 1):
                return False
        at[k] = 0
        return True

    return found if grow(0) else None


def count_before(problem: Problem, answer: Steps, cap: int) -> int:
    """How many plans come before ``answer``, at most ``cap`` + 1."""
    plans = plans_before(problem, answer, cap)
    return cap + 1 if plans is None else len(plans)


class Walk:
    """Walks plans level by level; several threads share a level."""

    def __init__(self, problem: Problem, judge: Judge, workers: int) -> None:
        self.problem = problem
        self.judge = judge
        self.workers = workers
        self.killer: dict[Steps, tuple[int, int]] = {}

    def run(
        self,
        plans: list[Steps],
        answer: Steps | None,
        stop: Callable[[], bool],
        done: Callable[[int, int], None] | None = None,
    ) -> Walked:
        """Walk ``plans``; ends early when ``stop`` says so or a better plan turns up."""
        levels: dict[int, list[Steps]] = {}
        for plan in plans:
            levels.setdefault(sum(plan), []).append(plan)
        finished = 0
        excluded = by_rule = 0
        unsure: list[Steps] = []
        with ThreadPoolExecutor(max_workers=max(1, self.workers)) as pool:
            for level in sorted(levels):
                for chunk in _chunks(levels[level], 64 * max(1, self.workers)):
                    if stop():
                        return Walked(finished, excluded, by_rule, None, tuple(unsure), False)
                    verdicts = list(pool.map(self._verdict, chunk)) if self.workers > 1 else [self._verdict(p) for p in chunk]
                    passed = [plan for plan, verdict in zip(chunk, verdicts, strict=True) if verdict == "meets"]
                    excluded += verdicts.count("fails")
                    by_rule += verdicts.count("rule")
                    unsure.extend(plan for plan, verdict in zip(chunk, verdicts, strict=True) if verdict == "open")
                    finished += len(chunk)
                    if done is not None:
                        done(finished, len(plans))
                    if passed:
                        best = passed[0]
                        for plan in passed[1:]:
                            if self.problem.better(plan, best):
                                best = plan
                        return Walked(finished, excluded, by_rule, best, tuple(unsure), False)
        return Walked(finished, excluded, by_rule, None, tuple(unsure), True)

    def _verdict(self, plan: Steps) -> str:
        if self.problem.broken(plan):
            return "rule"
        noses = self.judge.noses
        checks = list(self.judge.checks(plan))
        first = [
            self.killer[lower]
            for k, n in enumerate(plan)
            if n > 0 and (lower := (*plan[:k], n - 1, *plan[k + 1 :])) in self.killer
        ]
        order = {key: -first.count(key) for key in first}
        checks.sort(key=lambda c: order.get((c.case, c.bank), 0))
        unsure = False
        for check in checks:
            own = noses.margin(check.case, check.state)
            if own >= check.need - check.allowed:
                continue
            if math.isnan(own):
                unsure = True
                continue
            best = noses.best(check.case, check.state)
            if math.isnan(best):
                unsure = True
            elif best < check.need - check.allowed:
                self.killer[plan] = (check.case, check.bank)
                return "fails"
        return "open" if unsure else "meets"


def _chunks(items: list[Steps], size: int) -> Iterator[list[Steps]]:
    for start in range(0, len(items), size):
        yield items[start : start + size]
