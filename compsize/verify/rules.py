"""What a plan must keep apart from physics: candidates, cost, budget, sites, exclusive groups, fast share."""

from __future__ import annotations

from compsize.plan.records import Plan
from compsize.study.records import Study


def cost_of(study: Study, plan: Plan) -> float:
    """Cost of a plan by the study's own figures.

    The site cost once per site with new steps, the fixed cost once per site and equipment with new steps (for an
    extension of existing steps only where it is said to pay it), and a cost per new step.
    """
    table = {(c.site, c.equipment.equipment): c for c in study.candidates}
    total = 0.0
    sites: dict[str, float] = {}
    for row in plan.rows:
        c = table[row.site, row.equipment]
        total += c.equipment.cost_per_step * row.steps
        if c.existing_steps == 0 or c.equipment.extension_pays_fixed:
            total += c.equipment.cost_fixed
        sites[row.site] = c.site_cost
    return total + sum(sites.values())


def broken_rules(study: Study, plan: Plan) -> list[str]:
    """In words, every rule of the study that the plan's rows break."""
    table = {(c.site, c.equipment.equipment): c for c in study.candidates}
    broken = []
    groups: dict[str, list[str]] = {}
    for row in plan.rows:
        c = table[row.site, row.equipment]
        if row.steps + c.existing_steps > c.max_steps:
            broken.append(f"{row.equipment} at {row.site} has more than max_steps = {c.max_steps} steps")
        if row.steps < 1:
            broken.append(f"{row.equipment} at {row.site} has {row.steps} steps")
        if c.exclusive_group:
            groups.setdefault(c.exclusive_group, []).append(f"{row.equipment} at {row.site}")
    broken += [f"exclusive group {name} is used by {', '.join(rows)}" for name, rows in groups.items() if len(rows) > 1]
    limits = study.limits
    cost = cost_of(study, plan)
    if limits.budget is not None and cost > limits.budget * (1.0 + 1e-12):
        broken.append(f"the cost {cost:g} is above the budget {limits.budget:g}")
    if limits.max_sites is not None and len(plan.sites) > limits.max_sites:
        broken.append(f"{len(plan.sites)} sites are more than max_sites = {limits.max_sites}")
    added = {row: table[row.site, row.equipment].equipment.step_mvar * row.steps for row in plan.rows}
    fast = sum(mvar for row, mvar in added.items() if table[row.site, row.equipment].equipment.kind != "bank")
    least = limits.min_fast_share_pct / 100.0 * sum(added.values())
    if fast < least - 1e-9 * max(least, 1.0):
        broken.append(f"{fast:g} Mvar are SVC or STATCOM, and min_fast_share_pct asks for {least:g} Mvar")
    return broken
