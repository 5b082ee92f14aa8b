"""The full proof: every plan that comes before the answer fails a case whose nose is located.

Plans are walked in order of preference, cheapest first: all plans below one cost no more, so they are done
before it, and the first that meets everything is the answer. A plan fails a
case when the noses of *all* states of switched steps it allows fall short; of these, all but the plan's own
were evaluated when the smaller plans were walked, or are evaluated then.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass

from compsize.sizing.judge import VOLTAGE, Judge
from compsize.sizing.problem import COST_TOLERANCE, Problem, Steps

RULE, FAILS, VOLTAGE_FAILS, OPEN, MEETS = "breaks a rule", "fails", "fails by voltage", "open", "meets"
CHUNK = 64


@dataclass(frozen=True)
class Walked:
    """Outcome: ``better`` is a plan before the answer that meets everything, if one turned up; ``open_plans``
    are plans that could be neither excluded nor accepted (an unresolved nose)."""

    plans: int
    excluded: int
    by_rule: int
    by_voltage: int
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
    at = list(problem.least)

    def grow(k: int) -> bool:
        if k == count:
            plan = tuple(at)
            if answer is None or problem.better(plan, answer):
                found.append(plan)
            return len(found) <= cap
        for n in range(problem.least[k], problem.most[k] + 1):
            at[k] = n
            if problem.cost((*at[: k + 1], *problem.least[k + 1 :])) > top:
                break
            if not grow(k + 1):
                return False
        at[k] = problem.least[k]
        return True

    return found if grow(0) else None


def count_before(problem: Problem, answer: Steps, cap: int) -> int:
    """How many plans come before ``answer``, at most ``cap`` + 1."""
    plans = plans_before(problem, answer, cap)
    return cap + 1 if plans is None else len(plans)


class Walk:
    """Walks plans by rank; several threads share a stretch of them."""

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
        finished = 0
        excluded = by_rule = by_voltage = 0
        unsure: list[Steps] = []
        ranked = sorted(plans, key=self.problem.rank)
        with ThreadPoolExecutor(max_workers=max(1, self.workers)) as pool:
            for chunk in _chunks(ranked, CHUNK * max(1, self.workers)):
                if stop():
                    return Walked(finished, excluded, by_rule, by_voltage, None, tuple(unsure), False)
                if self.workers > 1:
                    parts = list(pool.map(self._verdicts, _chunks(chunk, max(1, CHUNK // 4))))
                    verdicts = [verdict for part in parts for verdict in part]
                else:
                    verdicts = self._verdicts(chunk)
                for plan, verdict in zip(chunk, verdicts, strict=True):
                    excluded += verdict == FAILS
                    by_rule += verdict == RULE
                    by_voltage += verdict == VOLTAGE_FAILS
                    if verdict == OPEN:
                        unsure.append(plan)
                    finished += 1
                    if verdict == MEETS:
                        return Walked(finished, excluded, by_rule, by_voltage, plan, tuple(unsure), False)
                if done is not None:
                    done(finished, len(ranked))
        return Walked(finished, excluded, by_rule, by_voltage, None, tuple(unsure), True)

    def confirm(self, share: int) -> tuple[int, int]:
        """Trace every ``share``-th nose that fell short of a requirement; how many, and how many verdicts changed.

        Only a margin that comes to lie on the other side of its requirement changes a verdict.
        """
        noses = self.judge.noses
        needs = self.judge.thresholds()
        short = sorted(
            key for key, margin in noses.margins.items() if any(margin < need for need in needs.get(key[0], ()))
        )

        def stands(key: tuple[int, Steps]) -> bool:
            before = noses.margins[key]
            noses.confirm(*key)
            after = noses.margins[key]
            return all((before < need) == (after < need) for need in needs[key[0]])

        chosen = short[::share]
        with ThreadPoolExecutor(max_workers=max(1, self.workers)) as pool:
            kept = list(pool.map(stands, chosen))
        return len(chosen), kept.count(False)

    def _verdicts(self, plans: list[Steps]) -> list[str]:
        return [self._verdict(plan) for plan in plans]

    def _verdict(self, plan: Steps) -> str:
        if self.problem.broken(plan):
            return RULE
        noses = self.judge.noses
        checks = list(self.judge.checks(plan))
        first = [
            self.killer[lower]
            for k, n in enumerate(plan)
            if n > 0 and (lower := (*plan[:k], n - 1, *plan[k + 1 :])) in self.killer
        ]
        order = {key: -first.count(key) for key in first}
        checks.sort(key=lambda c: (c.case == VOLTAGE, order.get((c.case, c.bank), 0)))
        unsure = False
        for check in checks:
            if check.case == VOLTAGE:
                if not unsure and not self.judge.passes(check):
                    return VOLTAGE_FAILS
                continue
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
                return FAILS
        return OPEN if unsure else MEETS


def _chunks(items: list[Steps], size: int) -> Iterator[list[Steps]]:
    for start in range(0, len(items), size):
        yield items[start : start + size]
