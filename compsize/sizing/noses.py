"""Every evaluated nose, remembered; new ones from a near one where there is one.

A *state* is the tuple of new steps that are on, one number per choice (negative: existing steps lost).
"""

from __future__ import annotations

import math
import threading
from collections import OrderedDict
from dataclasses import dataclass

from compsize.margin.assess import Bench
from compsize.margin.cases import CaseSpec, required_mw, tolerance_mw
from compsize.network.cases import Addition, CaseModel, vary
from compsize.nose.engine import Nose

Steps = tuple[int, ...]
NEAR_BYTES = 400_000_000


@dataclass(frozen=True, eq=False)
class Target:
    """A case of the study with what it must keep. ``need`` [MW] is None without a requirement."""

    spec: CaseSpec
    need: float | None
    allowed: float
    """Largest shortfall that still counts as met [MW]."""
    model: CaseModel

    def meets(self, margin: float) -> bool:
        """NaN (unresolved) never meets a requirement."""
        return self.need is None or margin >= self.need - self.allowed


class Noses:
    """Noses by case number and state. Case 0 is the intact network; safe for several threads."""

    def __init__(self, bench: Bench) -> None:
        self.bench = bench
        self.switched = tuple(c.switched for c in bench.choices)
        self._zero = (0,) * len(bench.choices)
        self.targets: list[Target] = []
        for spec in bench.specs:
            model = bench.model(spec, self._zero)
            need = required_mw(bench.study, bench.grid, spec, model)
            self.targets.append(Target(spec, need, tolerance_mw(model), model))
        self.margins: dict[tuple[int, Steps], float] = {}
        self._models: dict[tuple[int, Steps], CaseModel] = {}
        self._near: OrderedDict[tuple[int, Steps], Nose] = OrderedDict()
        self._room = max(200, NEAR_BYTES // (60 * bench.grid.count + 2000))
        self._lock = threading.Lock()
        self._best: dict[tuple[int, Steps], float] = {}
        self._sure: set[tuple[int, Steps]] = set()
        self.count = 0
        self.factorisations = 0
        self.traced = 0

    def model(self, case: int, state: Steps) -> CaseModel:
        """The case with the steps of ``state`` on."""
        fixed = tuple(
            0 if choice.candidate.equipment.kind == "bank" else n
            for choice, n in zip(self.bench.choices, state, strict=True)
        )
        spec = self.targets[case].spec
        base = self._models.get((case, fixed))
        if base is None:
            base = self._models[case, fixed] = self.bench.model(spec, fixed)
        if fixed == state:
            return base
        shunts = [
            Addition(choice.bus, b_pu=n * choice.step_pu)
            for choice, n, same in zip(self.bench.choices, state, fixed, strict=True)
            if n != same
        ]
        found = vary(self.bench.grid, base, (), shunts)
        return found if found is not None else self.bench.model(spec, state)

    def margin(self, case: int, state: Steps) -> float:
        """Margin [MW] of the case with all steps of ``state`` on; NaN where no nose could be located."""
        key = (case, state)
        known = self.margins.get(key)
        if known is not None:
            return known
        return self._evaluate(case, state)

    def _evaluate(self, case: int, state: Steps) -> float:
        target = self.targets[case]
        if not target.model.evaluable:
            self.margins[case, state] = math.nan
            return math.nan
        model = self.model(case, state)
        nose: Nose | None = None
        for near in self._neighbours(case, state):
            nose = self.bench.engine.nose_near(model, near)
            if nose is not None:
                break
        if nose is None:
            nose = self.bench.engine.nose(model, self.bench.base)
        if nose.traced:
            with self._lock:
                self._sure.add((case, state))
        return self._remember(case, state, nose)

    def _remember(self, case: int, state: Steps, nose: Nose) -> float:
        margin = nose.loading * self.targets[case].model.mw_per_loading if nose.kind else math.nan
        with self._lock:
            self.count += 1
            self.factorisations += nose.factorisations
            self.traced += nose.traced
            self.margins[case, state] = margin
            if nose.kind:
                self._near[case, state] = nose
                if len(self._near) > self._room:
                    self._near.popitem(last=False)
        return margin

    def trace(self, case: int, state: Steps) -> tuple[float, Nose, CaseModel]:
        """The same from the operating point; corrects what is remembered."""
        model = self.model(case, state)
        nose = self.bench.engine.nose(model, self.bench.base)
        return self._remember(case, state, nose), nose, model

    def confirm(self, case: int, state: Steps) -> bool:
        """Trace a nose from the operating point unless that was done; whether the remembered margin stands (to 1e-7).

        What was remembered is corrected; best margins built on it are forgotten.
        """
        known = self.margins.get((case, state))
        if (case, state) in self._sure:
            return True
        margin, _, _ = self.trace(case, state)
        with self._lock:
            self._sure.add((case, state))
        scale = 1.0 + abs(self.targets[case].model.mw_per_loading)
        same = known is not None and (abs(margin - known) <= 1e-7 * scale or (math.isnan(margin) and math.isnan(known)))
        if not same:
            with self._lock:
                self._best = {key: value for key, value in self._best.items() if key[0] != case}
        return same

    def _neighbours(self, case: int, state: Steps) -> list[Nose]:
        found = []
        for change in (-1, 1):
            for k in range(len(state)):
                other = (*state[:k], state[k] + change, *state[k + 1 :])
                nose = self._near.get((case, other))
                if nose is not None:
                    found.append(nose)
                    if len(found) == 2:
                        return found
        return found

    def below(self, state: Steps) -> list[Steps]:
        """States with one switched step fewer."""
        return [(*state[:k], n - 1, *state[k + 1 :]) for k, n in enumerate(state) if n > 0 and self.switched[k]]

    def best(self, case: int, state: Steps) -> float:
        """Best margin over all states of switched steps up to ``state``; NaN if any of them is unresolved.

        This is the margin of a plan as the requirement means it: banks may close as the load grows.
        """
        known = self._best.get((case, state))
        if known is not None:
            return known
        stack = [state]
        while stack:
            at = stack[-1]
            if (case, at) in self._best:
                stack.pop()
                continue
            lower = self.below(at)
            missing = [s for s in lower if (case, s) not in self._best]
            if missing:
                stack.extend(missing)
                continue
            values = [self.margin(case, at), *(self._best[case, s] for s in lower)]
            self._best[case, at] = max(values) if not any(math.isnan(x) for x in values) else math.nan
            stack.pop()
        return self._best[case, state]

    def climbed(self, case: int, state: Steps, need: float) -> tuple[float, Steps]:
        """A state of switched steps up to ``state`` that reaches ``need``, or the best that stepping down finds.

        All steps on is nearly always best; where it is not (over-compensation), single steps are taken off
        while that helps. A lower bound of :meth:`best`, found with few noses.
        """
        at, value = state, self.margin(case, state)
        while not value >= need:
            best_value, best_state = value, None
            for lower in self.below(at):
                other = self.margin(case, lower)
                if math.isnan(best_value) or other > best_value + 1e-9 * abs(best_value):
                    best_value, best_state = other, lower
            if best_state is None:
                return value, at
            at, value = best_state, best_value
        return value, at
