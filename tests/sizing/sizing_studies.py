"""Studies to size in tests: a valley of eight buses, and an enumeration of plans by the second opinion."""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

from verify_networks import network

from compsize.plan.records import Plan, PlanRow
from compsize.study.records import (
    Candidate,
    Contingencies,
    Equipment,
    Event,
    Growth,
    Limits,
    NetworkTables,
    ReportText,
    Requirement,
    Study,
    VoltageLimits,
)
from compsize.verify.cases import Cases
from compsize.verify.model import Model
from compsize.verify.path import trace

Steps = tuple[int, ...]

BANK = Equipment("bank", "bank", 20.0, 100.0, 300.0)
SMALL = Equipment("small", "bank", 8.0, 60.0, 140.0)
SVC = Equipment("svc", "svc", 40.0, 900.0, 700.0, q_absorb_mvar=10.0, slope_pct=2.0)


def valley() -> NetworkTables:
    """Eight buses: a source and a unit with limits feed four loads of a valley over a meshed network."""
    lines = [
        ("S-A 1", "S", "A", 0.02, 0.16),
        ("S-A 2", "S", "A", 0.02, 0.16),
        ("S-U", "S", "U", 0.02, 0.14),
        ("U-A", "U", "A", 0.015, 0.12),
        ("A-1", "A", "1", 0.02, 0.09),
        ("1-2", "1", "2", 0.03, 0.10),
        ("2-U", "2", "U", 0.04, 0.18),
        ("A-3", "A", "3", 0.02, 0.10),
        ("3-4", "3", "4", 0.03, 0.11),
        ("4-2", "4", "2", 0.04, 0.15),
        ("A-B", "A", "B", 0.0, 0.08),
        ("B-4", "B", "4", 0.02, 0.09),
    ]
    return network(
        buses=[{"bus": bus} for bus in ("S", "U", "A", "B", "1", "2", "3", "4")],
        branches=[
            {"branch": name, "from_bus": f, "to_bus": t, "r_pu": r, "x_pu": x, "b_pu": 0.03}
            | ({"tap": 0.97, "b_pu": 0.0} if name == "A-B" else {})
            for name, f, t, r, x in lines
        ],
        loads=[
            {"load": "one", "bus": "1", "p_mw": 75.0, "q_mvar": 25.0, "z_share_pct": 30.0},
            {"load": "two", "bus": "2", "p_mw": 70.0, "q_mvar": 24.0},
            {"load": "three", "bus": "3", "p_mw": 60.0, "q_mvar": 20.0, "i_share_pct": 40.0},
            {"load": "four", "bus": "4", "p_mw": 90.0, "q_mvar": 32.0},
        ],
        generators=[
            {"generator": "GS", "bus": "S", "p_mw": 210.0, "v_set_pu": 1.04, "slack": True},
            {"generator": "GU", "bus": "U", "p_mw": 95.0, "v_set_pu": 1.02, "q_min_mvar": -20.0, "q_max_mvar": 30.0},
        ],
        shunts=[{"shunt": "C", "bus": "B", "b_mvar": 8.0}],
    )


EVENTS = (
    Event("S-A", "line", (("branch", "S-A 1"),)),
    Event("U", "unit", (("generator", "GU"),)),
    Event("A-B", "line", (("branch", "A-B"),)),
    Event("2-U", "line", (("branch", "2-U"),)),
    Event("A-3 and C", "double", (("branch", "A-3"), ("shunt", "C"))),
)


def growth_of(net: NetworkTables, loads: Sequence[str] = (), **options: Any) -> Growth:
    """Growth of the named loads (all, if none are named) at their own power factor."""
    rows = [k for k, name in enumerate(net.loads.load) if not loads or name in loads]
    return Growth(
        loads=tuple(net.loads.load[k] for k in rows),
        dp_mw=tuple(float(net.loads.p_mw[k]) for k in rows),
        dq_mvar=tuple(float(net.loads.q_mvar[k]) for k in rows),
        base_mw=float(sum(net.loads.p_mw[k] for k in rows)),
        description="",
        power_factor="as base",
        **options,
    )


def study_of(
    net: NetworkTables,
    candidates: Sequence[Candidate],
    requirements: Sequence[Requirement],
    *,
    events: tuple[Event, ...] = EVENTS,
    growing: Sequence[str] = (),
    limits: Limits | None = None,
    bank_outage: Any = "none",
) -> Study:
    """A study without a folder."""
    return Study(
        folder=Path(),
        title="",
        network=net,
        growth=growth_of(net, growing),
        requirements=tuple(requirements),
        contingencies=Contingencies(events, (), bank_outage),
        voltage=VoltageLimits(),
        candidates=tuple(candidates),
        limits=limits or Limits(),
        stages=None,
        report=ReportText(),
        hash="",
    )


def plan_of(study: Study, steps: Sequence[int]) -> Plan:
    """So many new steps per candidate row, in candidate order."""
    rows = []
    sites: dict[str, float] = {}
    for candidate, n in zip(study.candidates, steps, strict=True):
        if n:
            e = candidate.equipment
            fixed = e.cost_fixed if candidate.existing_steps == 0 or e.extension_pays_fixed else 0.0
            cost = fixed + n * e.cost_per_step
            rows.append(PlanRow(candidate.site, e.equipment, e.kind, n, e.step_mvar, n * e.step_mvar, cost))
            sites[candidate.site] = candidate.site_cost
    return Plan(tuple(rows), tuple(sites.items()))


@dataclass
class Enumeration:
    """Every plan of a study in order of cost, judged by the traces of the second opinion alone.

    Noses are remembered by what is in service, so that studies that differ in requirements alone can share them.
    """

    known: dict[tuple[str, Steps], float] = field(default_factory=dict)

    def margin(self, study: Study, case: str, state: Steps) -> float:
        """Margin [MW] of a listed case with so many new steps in service, all of them on."""
        key = (case, state)
        if key not in self.known:
            on = Plan(tuple(row for row in plan_of(study, tuple(max(n, 0) for n in state)).rows))
            model = Cases(study, on).model(case)
            assert isinstance(model, Model)
            nose = trace(model)
            assert nose.kind in ("fold", "limit"), (case, state, nose.kind)
            self.known[key] = nose.t_mw
        return self.known[key]

    def best(self, study: Study, case: str, state: Steps) -> float:
        """Best margin over the switched steps that may be on."""
        ranges = [
            range(n + 1) if c.equipment.kind == "bank" and c.equipment.switched else (n,)
            for c, n in zip(study.candidates, state, strict=True)
        ]
        return max(self.margin(study, case, on) for on in itertools.product(*ranges))

    def meets(self, study: Study, steps: Steps) -> bool:
        """Whether a plan keeps every required margin."""
        base = study.growth.base_mw
        for case, state, need in self._checks(study, steps):
            # The margin with all on is tried before all others: where it is enough, it is the shorter way.
            least = need - 1e-6 * base
            if self.margin(study, case, state) < least and self.best(study, case, state) < least:
                return False
        return True

    def _checks(self, study: Study, steps: Steps) -> Iterator[tuple[str, Steps, float]]:
        cases = [(event.name, event.klass) for event in reversed(study.contingencies.events)]
        for case, klass in [*cases, ("intact", "intact")]:
            need = _need(study, klass)
            if need is not None:
                yield case, steps, need
        need = _need(study, "bank_outage")
        if need is None or study.contingencies.bank_outage == "none":
            return
        for k, (candidate, n) in enumerate(zip(study.candidates, steps, strict=True)):
            if n:
                lost = n if candidate.equipment.kind != "bank" or study.contingencies.bank_outage == "site" else 1
                yield "intact", (*steps[:k], n - lost, *steps[k + 1 :]), need

    def cheapest(self, study: Study) -> tuple[float, Steps] | None:
        """The least cost of a plan that meets everything and keeps the rules, and the first such plan; or None."""
        ranges = [range(c.max_steps - c.existing_steps + 1) for c in study.candidates]
        plans = [(plan_of(study, steps).cost, sum(steps), steps) for steps in itertools.product(*ranges)]
        for cost, _, steps in sorted(plans):
            if allowed(study, steps, cost) and self.meets(study, steps):
                return cost, steps
        return None


def _need(study: Study, klass: str) -> float | None:
    """MW that a class of cases must keep, of the growing load (no load of these studies is ever lost)."""
    needs = []
    for r in study.requirements:
        if r.cases == klass or (r.cases == "outages" and klass != "intact"):
            assert r.of == "growing"
            needs += [x for x in (r.margin_mw, (r.margin_pct or 0.0) / 100.0 * study.growth.base_mw) if x is not None]
    return max(needs) if needs else None


def allowed(study: Study, steps: Steps, cost: float) -> bool:
    """Whether a plan keeps the limits and exclusive groups of its study."""
    used = [c for c, n in zip(study.candidates, steps, strict=True) if n]
    groups = [c.exclusive_group for c in used if c.exclusive_group]
    sites = {c.site for c in used}
    limits = study.limits
    return (
        len(groups) == len(set(groups))
        and (limits.max_sites is None or len(sites) <= limits.max_sites)
        and (limits.budget is None or cost <= limits.budget * (1.0 + 1e-12))
    )


def with_requirements(study: Study, *requirements: Requirement, **changes: Any) -> Study:
    """The study with other requirements (and other fields)."""
    return replace(study, requirements=requirements, **changes)


def is_close(one: float, other: float) -> bool:
    """Equal costs."""
    return math.isclose(one, other, rel_tol=1e-9, abs_tol=1e-9)
