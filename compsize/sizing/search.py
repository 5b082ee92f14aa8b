"""Finding a good plan fast, and a first bound: greedy, then covers and a master problem.

Implicit hitting set: the master gives the cheapest plan that no cover excludes; a case it fails is raised
to covers; when its plan meets everything, no plan is cheaper as long as every cover's box holds no plan
that meets its case (the assumption; Codato and Fischetti 2006 for the cuts, Tuy 2000 for monotone problems).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field

from compsize.sizing.judge import Check, Judge
from compsize.sizing.master import Master
from compsize.sizing.problem import Problem, Steps

RAISINGS = 4
FAILURES = 3


@dataclass
class Found:
    """What the search knows so far."""

    plan: Steps | None = None
    bound: float = 0.0
    """Cost below which no plan exists if the covers hold."""
    exhausted: bool = False
    """The covers leave no plan at all."""
    history: list[tuple[int, float | None, float]] = field(default_factory=list)
    """Noses so far, cost of the best plan, bound: a point whenever one of the two moved."""


class Search:
    """Greedy start and cover loop over one problem."""

    def __init__(self, problem: Problem, judge: Judge) -> None:
        self.problem = problem
        self.judge = judge
        self.master = Master(problem)
        self.found = Found()

    def accept(self, plan: Steps) -> None:
        """Take a plan that meets everything as the best known, if it is."""
        if self.found.plan is None or self.problem.better(plan, self.found.plan):
            self.found.plan = plan
            self._note()

    def _note(self) -> None:
        cost = None if self.found.plan is None else self.problem.cost(self.found.plan)
        self.found.history.append((self.judge.noses.count, cost, self.found.bound))

    def greedy(self, stop: Callable[[], bool]) -> Steps | None:
        """Add the step that mends most of the worst case per cost until all is met, then take off the idle."""
        problem, judge = self.problem, self.judge
        plan: Steps = problem.least
        while not stop():
            failures = judge.first_failures(plan, 1)
            if not failures:
                break
            check = failures[0]
            here = judge.shortfall(check)
            best: tuple[float, Steps] | None = None
            for k, most in enumerate(problem.most):
                for more in (1, 2):
                    if plan[k] + more > most:
                        continue
                    trial = (*plan[:k], plan[k] + more, *plan[k + 1 :])
                    if any("exclude" in rule for rule in problem.broken(trial)):
                        continue
                    state = tuple(s + (more if j == k else 0) for j, s in enumerate(check.state))
                    there = judge.shortfall(Check(check.case, state, check.need, check.allowed, check.bank))
                    gain = min(here, 1e12) - min(there, 1e12)
                    price = max(problem.cost(trial) - problem.cost(plan), 1e-9)
                    if gain > 1e-9 and (best is None or gain / price > best[0]):
                        best = (gain / price, trial)
            if best is None:
                return None
            plan = best[1]
        else:
            return None
        return self._trimmed(plan, stop)

    def _trimmed(self, plan: Steps, stop: Callable[[], bool]) -> Steps | None:
        problem, judge = self.problem, self.judge
        moved = True
        while moved and not stop():
            moved = False
            savings = sorted(
                range(len(plan)),
                key=lambda k: problem.cost((*plan[:k], max(plan[k] - 1, 0), *plan[k + 1 :])),
            )
            for k in savings:
                if plan[k] == problem.least[k]:
                    continue
                trial = (*plan[:k], plan[k] - 1, *plan[k + 1 :])
                if not judge.first_failures(trial, 1):
                    plan, moved = trial, True
                    break
        return None if problem.broken(plan) or stop() else plan

    def step(self) -> bool:
        """One master solve and its covers; True when the search is over (see ``found``)."""
        problem, judge = self.problem, self.judge
        solved = self.master.solve()
        if solved is None:
            self.found.exhausted = True
            return True
        plan, cost = solved
        if cost > self.found.bound:
            self.found.bound = cost
            self._note()
        if self.found.plan is not None and not problem.better(plan, self.found.plan):
            return True
        failures = judge.first_failures(plan, FAILURES)
        if not failures:
            self.accept(plan)
            return True
        for check in failures:
            for order in self._orders(check):
                self.master.add(judge.raised(check, plan, problem.most, order))
        return False

    def _orders(self, check: Check) -> list[list[int]]:
        """Several orders of raising, so that the covers differ: as listed, reversed, cheap first, dear first."""
        count = len(self.problem.most)
        unit = [self.problem.step_cost[k] / max(self.problem.choices[k].step_pu, 1e-12) for k in range(count)]
        cheap = sorted(range(count), key=lambda k: unit[k])
        spread = sorted(range(count), key=lambda k: (k * 7 + check.case * 3 + len(self.master.covers)) % max(count, 1))
        return [list(range(count)), list(range(count - 1, -1, -1)), cheap, spread][:RAISINGS]
