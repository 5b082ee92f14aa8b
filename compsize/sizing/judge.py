"""Whether a plan meets every case, and covers from the cases it fails."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass

from compsize.margin.cases import BANK_OUTAGE, CaseSpec, required_mw, steps_lost
from compsize.sizing.master import Cover
from compsize.sizing.noses import Noses, Steps
from compsize.sizing.voltage import VoltageJudge


@dataclass(frozen=True)
class Check:
    """One case of a plan: the case number and state whose nose decides it, and the need [MW].

    ``bank`` is the choice whose outage it is, -1 for a listed case.
    """

    case: int
    state: Steps
    need: float
    allowed: float
    bank: int = -1


VOLTAGE = -1
"""Case number of the voltage conditions."""


class Judge:
    """Turns plans into checks and remembers which cases kill most plans."""

    def __init__(self, noses: Noses) -> None:
        self.noses = noses
        bench = noses.bench
        self.study = bench.study
        self.choices = bench.choices
        self.kills: dict[tuple[int, int], int] = {}
        intact = noses.targets[0]
        self.bank_need: list[float | None] = []
        for k, choice in enumerate(bench.choices):
            spec = CaseSpec(f"bank:{choice.name}", BANK_OUTAGE, (), k)
            need = None
            if self.study.contingencies.bank_outage != "none":
                need = required_mw(self.study, bench.grid, spec, intact.model)
            self.bank_need.append(need)
        self.bank_allowed = intact.allowed
        self.voltage = VoltageJudge(bench)

    def checks(self, plan: Steps) -> Iterator[Check]:
        """The cases of a plan, those that killed most first."""
        found = [
            Check(c, plan, target.need, target.allowed)
            for c, target in enumerate(self.noses.targets)
            if target.need is not None
        ]
        for k, need in enumerate(self.bank_need):
            if need is not None and plan[k] > 0:
                lost = steps_lost(self.study, self.choices[k], plan[k])
                state = (*plan[:k], plan[k] - lost, *plan[k + 1 :])
                found.append(Check(0, state, need, self.bank_allowed, k))
        found.sort(key=lambda c: -self.kills.get((c.case, c.bank), 0))
        if self.voltage.asks:
            # After the noses: a plan with enough margin is needed before voltages are worth solving.
            found.append(Check(VOLTAGE, plan, 0.0, 0.0))
        return iter(found)

    def case_name(self, check: Check) -> str:
        """The name of the case as the tables show it."""
        if check.bank >= 0:
            return f"bank:{self.choices[check.bank].name}"
        if check.case == VOLTAGE:
            return "the voltage conditions"
        return self.noses.targets[check.case].spec.name

    def describe(self, check: Check) -> str:
        """How a plan fails the check, in words."""
        if check.case == VOLTAGE:
            return str(self.voltage.fault(check.state))
        short = self.shortfall(check) + check.allowed
        return f"{self.case_name(check)} falls {short:.4g} MW short of {check.need:g} MW"

    def passes(self, check: Check) -> bool:
        if check.case == VOLTAGE:
            return self.voltage.fault(check.state) is None
        value, _ = self.noses.climbed(check.case, check.state, check.need - check.allowed)
        return value >= check.need - check.allowed

    def first_failures(self, plan: Steps, most: int) -> list[Check]:
        """Up to ``most`` failed cases of a plan; empty: it meets all."""
        failed = []
        for check in self.checks(plan):
            if not self.passes(check):
                key = (check.case, check.bank)
                self.kills[key] = self.kills.get(key, 0) + 1
                failed.append(check)
                if len(failed) >= most:
                    break
        return failed

    def thresholds(self) -> dict[int, tuple[float, ...]]:
        """Margins [MW] per case number below which a requirement is missed (several for the intact network)."""
        found: dict[int, set[float]] = {}
        for c, target in enumerate(self.noses.targets):
            if target.need is not None:
                found.setdefault(c, set()).add(target.need - target.allowed)
        for need in self.bank_need:
            if need is not None:
                found.setdefault(0, set()).add(need - self.bank_allowed)
        return {c: tuple(sorted(values)) for c, values in found.items()}

    def confirm(self, plan: Steps) -> bool:
        """Whether a plan meets everything with every deciding nose traced from the operating point."""
        for check in self.checks(plan):
            if check.case == VOLTAGE:
                continue
            _, state = self.noses.climbed(check.case, check.state, check.need - check.allowed)
            if not self.noses.confirm(check.case, state) and not self.passes(check):
                return False
        return True

    def shortfall(self, check: Check) -> float:
        """By how much a case is missed [MW]; of the voltage conditions, by how much the nearest state misses [pu]."""
        if check.case == VOLTAGE:
            fault = self.voltage.fault(check.state)
            return 0.0 if fault is None else fault.excess
        value, _ = self.noses.climbed(check.case, check.state, check.need - check.allowed)
        return math.inf if math.isnan(value) else max(0.0, check.need - check.allowed - value)

    def raised(self, check: Check, plan: Steps, most: Steps, order: list[int]) -> Cover:
        """Raise a failing plan, choice by choice, as far as the case still fails: a cover.

        Assumes that the margin does not rise and fall again inside the box it closes.
        """
        at = list(plan)
        lost = tuple(a - b for a, b in zip(plan, check.state, strict=True))
        for k in order:
            low, high = at[k], most[k]
            if k == check.bank and self.choices[k].candidate.equipment.kind != "bank":
                high = low
            while low < high:
                # Highest first, then halving.
                middle = high if high == most[k] and low == at[k] else (low + high + 1) // 2
                trial = tuple(middle if j == k else n for j, n in enumerate(at))
                state = tuple(n - m for n, m in zip(trial, lost, strict=True))
                if self.passes(Check(check.case, state, check.need, check.allowed, check.bank)):
                    if middle == low + 1:
                        break
                    high = middle - 1
                else:
                    low = middle
            at[k] = low
        return Cover(tuple(at), check.bank)
