"""The master problem: the cheapest plan that no cover excludes.

A cover says that a plan must have more steps than it lists somewhere (or not use a choice). Unary step
variables z[k, s] (choice k has at least s new steps) and site variables; a mixed-integer linear programme
solved by HiGHS.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.optimize import Bounds, LinearConstraint, milp
from scipy.sparse import csr_matrix

from compsize.errors import InternalError
from compsize.sizing.problem import COST_TOLERANCE, Problem, Steps


@dataclass(frozen=True)
class Cover:
    """Some choice must have more new steps than ``steps`` says, or ``unused`` (if >= 0) none at all."""

    steps: Steps
    unused: int = -1


class Master:
    """Grows covers; :meth:`solve` gives the cheapest allowed plan, None when there is none."""

    def __init__(self, problem: Problem) -> None:
        self.problem = problem
        self.covers: list[Cover] = []
        self.solves = 0
        self._offset: list[int] = []
        count = 0
        for most in problem.most:
            self._offset.append(count)
            count += most
        self._steps = count
        self._sites = count
        self._size = count + len(problem.sites)
        self._rows: list[tuple[dict[int, float], float, float]] = []
        self._least = np.zeros(self._size)
        for k, n in enumerate(problem.least):
            self._least[self._offset[k] : self._offset[k] + n] = 1.0
        self._build()

    def _z(self, choice: int, step: int) -> int:
        return self._offset[choice] + step - 1

    def _build(self) -> None:
        p = self.problem
        for k, most in enumerate(p.most):
            for s in range(2, most + 1):
                self._rows.append(({self._z(k, s - 1): 1.0, self._z(k, s): -1.0}, 0.0, np.inf))
            if most:
                self._rows.append(({self._sites + p.site_of[k]: 1.0, self._z(k, 1): -1.0}, 0.0, np.inf))
        if p.limits.max_sites is not None:
            row = {self._sites + s: 1.0 for s in range(len(p.sites))}
            self._rows.append((row, -np.inf, float(p.limits.max_sites)))
        for group in p.groups:
            row = {self._z(k, 1): 1.0 for k in group if p.most[k]}
            self._rows.append((row, -np.inf, 1.0))
        share = p.limits.min_fast_share_pct / 100.0
        if share > 0.0:
            row = {}
            for k, choice in enumerate(p.choices):
                equipment = choice.candidate.equipment
                weight = equipment.step_mvar * ((0.0 if equipment.kind == "bank" else 1.0) - share)
                for s in range(1, p.most[k] + 1):
                    row[self._z(k, s)] = weight
            self._rows.append((row, -1e-9, np.inf))
        if p.limits.budget is not None:
            cost = self._costs()
            row = {j: float(c) for j, c in enumerate(cost) if c != 0.0}
            self._rows.append((row, -np.inf, p.limits.budget * (1.0 + COST_TOLERANCE)))

    def _costs(self) -> np.ndarray:
        p = self.problem
        cost = np.zeros(self._size)
        for k, most in enumerate(p.most):
            for s in range(1, most + 1):
                cost[self._z(k, s)] = p.step_cost[k] + (p.first_cost[k] if s == 1 else 0.0)
        cost[self._sites :] = p.site_cost
        return cost

    def add(self, cover: Cover) -> None:
        self.covers.append(cover)
        row: dict[int, float] = {}
        bound = 1.0
        for k, n in enumerate(cover.steps):
            if n < self.problem.most[k]:
                row[self._z(k, n + 1)] = 1.0
        if cover.unused >= 0:
            key = self._z(cover.unused, 1)
            # "or not used": + (1 - z), which cancels a z already there.
            row[key] = row.get(key, 0.0) - 1.0
            bound -= 1.0
        self._rows.append((row, bound, np.inf))

    def solve(self) -> tuple[Steps, float] | None:
        """The cheapest plan and its cost, which bounds every allowed plan from below; None: no plan is left."""
        self.solves += 1
        p = self.problem
        if any(not row and low > 0.0 for row, low, _ in self._rows):
            return None
        cost = self._costs()
        scale = max(float(np.abs(cost).max(initial=0.0)), 1e-12)
        # Ties: fewer sites, then fewer steps, earlier candidates first; far below any cost difference.
        order = np.arange(self._steps) / max(self._steps, 1)
        nudge = np.concatenate([1e-8 * (1.0 + 1e-3 * order), np.full(len(p.sites), 1e-6)])
        data, rows, cols, low, high = [], [], [], [], []
        for r, (row, lo, hi) in enumerate(self._rows):
            for j, x in row.items():
                rows.append(r)
                cols.append(j)
                data.append(x)
            low.append(lo)
            high.append(hi)
        if self._size == 0:
            return ((), 0.0) if all(lo <= 0.0 for lo in low) else None
        matrix = csr_matrix((data, (rows, cols)), shape=(len(self._rows), self._size))
        outcome = milp(
            cost / scale + nudge,
            constraints=LinearConstraint(matrix, low, high) if self._rows else None,
            integrality=np.ones(self._size, dtype=np.int64),
            bounds=Bounds(self._least, 1.0),
            options={"mip_rel_gap": 0.0},
        )
        if outcome.status == 2:
            return None
        if outcome.status != 0 or outcome.x is None:
            raise InternalError(f"the master problem ended with: {outcome.message}")
        z = np.round(outcome.x)
        steps = tuple(int(z[self._offset[k] : self._offset[k] + most].sum()) for k, most in enumerate(p.most))
        broken = p.broken(steps)
        if broken or not self.allows(steps):
            raise InternalError(f"the master problem returned a plan that breaks its own rules: {broken}")
        return steps, p.cost(steps)

    def allows(self, steps: Steps) -> bool:
        """Whether no cover excludes ``steps``."""
        return all(
            any(n > m for n, m in zip(steps, cover.steps, strict=True))
            or (cover.unused >= 0 and steps[cover.unused] == 0)
            for cover in self.covers
        )
