"""The whole sizing run: a good plan, a bound, and the proof."""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import dataclass

from compsize.margin.assess import Bench
from compsize.margin.pool import run_all
from compsize.plan.records import Proof, ProofPart, Status
from compsize.sizing.judge import VOLTAGE, Judge
from compsize.sizing.noses import Noses, Steps
from compsize.sizing.problem import Problem, build_problem
from compsize.sizing.search import Search
from compsize.sizing.walk import Walk, Walked, count_before, plans_before

WALK_CAP = 400_000
FEW_PLANS = 3_000
# Up to so many evaluated noses every one that falls short is traced again; of more, one in ten.
TRACE_ALL = 5_000
TRACE_SHARE = 10
Tell = Callable[[str, int, int | None], None]

NOTHING_TO_BUILD = "Every case already keeps its margin; nothing needs to be built."
NOTHING_CHEAPER = "Every case already keeps its margin, and no plan costs less than building nothing."
LEAST_COST = "The plan meets every case at least cost; every cheaper plan was shown to fail."
NO_PLAN = "No plan of these candidates meets the requirement."
UNFINISHED = "The bound rests on covers; the plans before the answer are too many to walk, or the walk was cut short."
COVER_ASSUMPTION = "the margin of a case does not rise and fall again inside a box of plans that a cover closes"
WALK_ASSUMPTION = "none beyond the located noses"
VOLTAGE_ASSUMPTION = "none beyond the solved states: every state of switched steps breaks a voltage condition"
RULE_ASSUMPTION = "none: they break a rule of the study"


@dataclass(frozen=True, eq=False)
class Solved:
    """Outcome of the search in steps; :mod:`compsize.sizing.rows` turns it into tables."""

    status: Status
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


class Sizing:
    """One run over one problem: the cases as they are, a good plan, covers where many plans are cheaper, the walk."""

    def __init__(
        self, problem: Problem, judge: Judge, workers: int, clock: Clock, say: Tell | None = None, means: str = "auto"
    ) -> None:
        self.problem = problem
        self.judge = judge
        self.noses = judge.noses
        self.workers = workers
        self.clock = clock
        self.say: Tell = say or (lambda stage, done, total: None)
        self.means = means
        self.search = Search(problem, judge)
        self.walked = 0
        self.traced = 0
        self.flips = 0

    def _solved(
        self, status: Status, sentence: str, steps: Steps | None, shown: Steps, bound: float | None, proof: Proof
    ) -> Solved:
        return Solved(
            status=status,
            sentence=sentence,
            steps=steps,
            shown=shown,
            bound=bound,
            proof=proof,
            problem=self.problem,
            noses=self.noses,
            judge=self.judge,
            masters=self.search.master.solves,
            walked=self.walked,
            history=tuple(self.search.found.history),
        )

    def run(self) -> Solved:
        """The least-cost plan with its proof, or the reason why there is none."""
        problem, judge, found = self.problem, self.judge, self.search.found
        start = problem.least
        self._cases_as_they_are(start)
        impossible = [t.spec.name for t in self.noses.targets if t.need is not None and not t.model.evaluable]
        if impossible:
            sentence = f"{', '.join(impossible[:5])} cannot be evaluated, which counts as not met by any plan."
            return self._solved("unreachable", sentence, None, start, None, Proof("full", sentence, 0))
        if not problem.broken(start) and not judge.first_failures(start, 1):
            self.search.accept(start)
            found.bound = problem.cost(start)
            return self._solved(
                "optimal", NOTHING_TO_BUILD, start, start, found.bound, Proof("full", NOTHING_CHEAPER, 0)
            )
        greedy = self.search.greedy(self.clock.over)
        if greedy is not None:
            self.search.accept(greedy)
        # Few cheaper plans are walked at once: the walk finds the answer and is the proof.
        few = greedy is not None and count_before(problem, greedy, FEW_PLANS) <= FEW_PLANS and self.means != "covers"
        done = few
        while not done and not self.clock.over():
            done = self.search.step()
            self.say("search for the cheapest plan", self.search.master.solves, None)
        if not done:
            return self._stopped()
        return self._prove()

    def _cases_as_they_are(self, start: Steps) -> None:
        stage = "cases without new equipment"
        noses, judge = self.noses, self.judge
        todo = [c for c, t in enumerate(noses.targets) if t.model.evaluable]
        self.say(stage, 0, len(todo))
        run_all(lambda c: noses.margin(c, start), todo, self.workers, lambda k: self.say(stage, k, len(todo)))
        known = [check for check in judge.checks(start) if check.case != VOLTAGE]
        for check in sorted(known, key=lambda c: noses.margin(c.case, c.state) - c.need):
            judge.kills[check.case, check.bank] = len(noses.targets) - len(judge.kills)

    def _covers(self, sentence: str, count: int | None = None) -> Proof:
        part = ProofPart("covers", len(self.search.master.covers), COVER_ASSUMPTION)
        return Proof("covers", sentence, count, (part,))

    def _stopped(self) -> Solved:
        found = self.search.found
        proof = self._covers("Stopped by the time limit; the bound rests on covers.")
        if found.plan is None:
            sentence = "Stopped by the time limit before a plan was found."
            return self._solved("limit", sentence, None, self.problem.least, found.bound, proof)
        sentence = "Stopped by the time limit: the plan meets everything, but a cheaper one may exist."
        return self._solved("feasible", sentence, found.plan, found.plan, found.bound, proof)

    def _prove(self) -> Solved:
        """Walk every plan before the answer; a better one found on the way becomes the answer."""
        problem, found = self.problem, self.search.found
        walk = Walk(problem, self.judge, self.workers)
        count: int | None = None
        cap = WALK_CAP if self.means != "covers" else -1
        while (plans := plans_before(problem, found.plan, cap)) is not None:
            outcome = walk.run(plans, found.plan, self.clock.over, lambda k, n: self.say("proof: cheaper plans", k, n))
            self.walked = max(self.walked, outcome.plans)
            count = len(plans)
            if outcome.better is not None:
                self.search.accept(outcome.better)
                continue
            if not outcome.finished:
                break
            if found.plan is not None and not self.judge.confirm(found.plan):
                # The answer's own noses did not stand: it is no answer, and nothing is left of the walk but its noses.
                self.flips += 1
                found.plan = None
                again = self.search.greedy(self.clock.over)
                if again is not None:
                    self.search.accept(again)
                continue
            if not self._stands(walk):
                continue
            if outcome.open_plans:
                break
            return self._proved(outcome, len(plans))
        rest = self._covers(UNFINISHED, count)
        if found.plan is None:
            if self.clock.over():
                sentence = "Stopped by the time limit before a plan was found."
                return self._solved("limit", sentence, None, problem.least, found.bound, rest)
            sentence = "No plan was found, and the covers leave none."
            return self._solved("unreachable", sentence, None, self._reach(), None, rest)
        sentence = "The plan meets every case; the proof that nothing is cheaper is incomplete."
        return self._solved(
            "feasible", sentence, found.plan, found.plan, min(found.bound, problem.cost(found.plan)), rest
        )

    def _stands(self, walk: Walk) -> bool:
        """Trace the noses the proof rests on: all, or a tenth where there are many, and all if one of them changes."""
        share = 1 if self.noses.count <= TRACE_ALL else TRACE_SHARE
        self.say("proof: noses traced again", 0, None)
        traced, changed = walk.confirm(share)
        if changed and share > 1:
            traced, changed = walk.confirm(1)
        self.traced = traced
        self.flips += changed
        return changed == 0

    def _proved(self, outcome: Walked, count: int) -> Solved:
        parts: tuple[ProofPart, ...] = (
            ProofPart("walk", outcome.excluded, WALK_ASSUMPTION),
            ProofPart("rules", outcome.by_rule, RULE_ASSUMPTION),
        )
        if self.judge.voltage.asks:
            parts = (*parts, ProofPart("voltages", outcome.by_voltage, VOLTAGE_ASSUMPTION))
        answer = self.search.found.plan
        if answer is None:
            sentence = f"All {count} plans of the candidates were walked: each fails a case or breaks a rule."
            proof = Proof("full", sentence, count, parts, self.traced, self.flips)
            return self._solved("unreachable", NO_PLAN, None, self._reach(), None, proof)
        sentence = (
            f"All {count} plans that come before this one (cheaper, or equal in cost with fewer sites or steps) were "
            "walked; each fails a case whose nose was located, or breaks a voltage condition or a rule of the study."
        )
        proof = Proof("full", sentence, count, parts, self.traced, self.flips)
        return self._solved("optimal", LEAST_COST, answer, answer, self.problem.cost(answer), proof)

    def _reach(self) -> Steps:
        """The plan with the smallest worst shortfall that a climb from nothing finds, within the rules."""
        problem, judge = self.problem, self.judge
        plan = problem.least

        def worst(at: Steps) -> float:
            return max((judge.shortfall(check) for check in judge.checks(at)), default=0.0)

        value = worst(plan)
        while True:
            best: tuple[float, Steps] | None = None
            for k, most in enumerate(problem.most):
                for more in (1, most - plan[k]):
                    if more < 1 or plan[k] + more > most or self.clock.over():
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


def sizing_of(
    bench: Bench, workers: int, time_limit: float | None, tell: Tell | None = None, means: str = "auto"
) -> Sizing:
    """A run on the problem of a prepared study."""
    problem = build_problem(bench.choices, bench.study.limits)
    return Sizing(problem, Judge(Noses(bench)), workers, Clock(time_limit), tell, means)
