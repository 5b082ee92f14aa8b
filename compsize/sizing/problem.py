"""The sizing problem in numbers: choices, costs and the rules that a plan must keep whatever the network does."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from compsize.network.plans import Choice
from compsize.plan.records import Plan, PlanRow
from compsize.study.records import Limits

Steps = tuple[int, ...]
COST_TOLERANCE = 1e-9


@dataclass(frozen=True, eq=False)
class Problem:
    """Costs and rules over new steps per choice. Costs are in the study's currency."""

    choices: tuple[Choice, ...]
    limits: Limits
    most: Steps
    """Largest number of new steps per choice."""
    least: Steps
    """Smallest number of new steps per choice: 0, or what a given plan already has."""
    first_cost: tuple[float, ...]
    """Cost that comes with the first new step of a choice, without the site."""
    step_cost: tuple[float, ...]
    sites: tuple[str, ...]
    site_of: tuple[int, ...]
    site_cost: tuple[float, ...]
    groups: tuple[tuple[int, ...], ...]
    """Choices of which at most one may have new steps."""

    def cost(self, steps: Sequence[int]) -> float:
        total = 0.0
        used: set[int] = set()
        for k, n in enumerate(steps):
            if n > 0:
                total += self.first_cost[k] + self.step_cost[k] * n
                used.add(self.site_of[k])
        return total + sum(self.site_cost[s] for s in sorted(used))

    def site_count(self, steps: Sequence[int]) -> int:
        return len({self.site_of[k] for k, n in enumerate(steps) if n > 0})

    def rank(self, steps: Steps) -> tuple[float, int, int, Steps]:
        """Order of preference: cost, then sites, then steps, then earlier candidates first."""
        return (self.cost(steps), self.site_count(steps), sum(steps), tuple(-n for n in steps))

    def better(self, one: Steps, other: Steps) -> bool:
        """Whether ``one`` comes before ``other``; costs within 1e-9 of each other are equal."""
        a, b = self.rank(one), self.rank(other)
        if abs(a[0] - b[0]) > COST_TOLERANCE * max(1.0, abs(a[0]), abs(b[0])):
            return a[0] < b[0]
        return a[1:] < b[1:]

    def broken(self, steps: Sequence[int]) -> tuple[str, ...]:
        """Rules of ``[limits]`` and exclusive groups that ``steps`` breaks, in words."""
        found = []
        cost = self.cost(steps)
        budget = self.limits.budget
        if budget is not None and cost > budget * (1.0 + COST_TOLERANCE):
            found.append(f"cost {cost:g} is above the budget {budget:g}")
        if self.limits.max_sites is not None and self.site_count(steps) > self.limits.max_sites:
            found.append(f"{self.site_count(steps)} sites where {self.limits.max_sites} are allowed")
        for group in self.groups:
            used = [self.choices[k].name for k in group if steps[k] > 0]
            if len(used) > 1:
                found.append(f"{' and '.join(used)} exclude each other")
        share = self.limits.min_fast_share_pct
        if share > 0.0:
            fast, total = self.mvar(steps)
            if total > 0.0 and 100.0 * fast < share * total * (1.0 - COST_TOLERANCE):
                found.append(f"{100.0 * fast / total:.1f} % of the added Mvar is fast where {share:g} % is required")
        return tuple(found)

    def mvar(self, steps: Sequence[int]) -> tuple[float, float]:
        """Fast (SVC and STATCOM) and total new Mvar as listed, at rated voltage."""
        fast = total = 0.0
        for choice, n in zip(self.choices, steps, strict=True):
            equipment = choice.candidate.equipment
            total += n * equipment.step_mvar
            if equipment.kind != "bank":
                fast += n * equipment.step_mvar
        return fast, total

    def plan(self, steps: Sequence[int]) -> Plan:
        """The plan in names, MW and money."""
        rows = []
        for k, n in enumerate(steps):
            if n > 0:
                equipment = self.choices[k].candidate.equipment
                rows.append(
                    PlanRow(
                        site=self.choices[k].candidate.site,
                        equipment=equipment.equipment,
                        kind=equipment.kind,
                        steps=n,
                        step_mvar=equipment.step_mvar,
                        total_mvar=n * equipment.step_mvar,
                        cost=self.first_cost[k] + n * self.step_cost[k],
                    )
                )
        used = {self.site_of[k] for k, n in enumerate(steps) if n > 0}
        costs = tuple((self.sites[s], self.site_cost[s]) for s in range(len(self.sites)) if s in used)
        return Plan(tuple(rows), costs)


def build_problem(choices: tuple[Choice, ...], limits: Limits) -> Problem:
    """The problem of a study's candidates."""
    sites = tuple(dict.fromkeys(c.candidate.site for c in choices))
    groups: dict[str, list[int]] = {}
    for k, choice in enumerate(choices):
        if choice.candidate.exclusive_group:
            groups.setdefault(choice.candidate.exclusive_group, []).append(k)
    first = tuple(
        0.0 if c.existing > 0 and not c.candidate.equipment.extension_pays_fixed else c.candidate.equipment.cost_fixed
        for c in choices
    )
    return Problem(
        choices=choices,
        limits=limits,
        most=tuple(c.most_new for c in choices),
        least=tuple(0 for _ in choices),
        first_cost=first,
        step_cost=tuple(c.candidate.equipment.cost_per_step for c in choices),
        sites=sites,
        site_of=tuple(sites.index(c.candidate.site) for c in choices),
        site_cost=tuple(max(c.candidate.site_cost for c in choices if c.candidate.site == site) for site in sites),
        groups=tuple(tuple(g) for g in groups.values() if len(g) > 1),
    )
