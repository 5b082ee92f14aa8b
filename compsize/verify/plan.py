"""The second opinion on a plan: every case from its operating point, and one step fewer of every row."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np

from compsize.errors import UsageError
from compsize.plan.records import CaseMargin, Plan, StepCheck, Verification
from compsize.study.records import Study
from compsize.verify.cases import Cases, Row, parse_off, without
from compsize.verify.model import Model, NotEvaluable
from compsize.verify.path import Nose, holds, trace
from compsize.verify.rules import broken_rules, cost_of
from compsize.verify.voltage import check_voltages

__all__ = ["verify_plan"]

MARGIN_TOLERANCE = 1e-6
"""A margin may miss its requirement by this part of the base."""
AGREEMENT = 1e-6
"""Largest relative difference of two noses that agree."""


@dataclass(frozen=True)
class _Finding:
    """What was found of one case."""

    worst_mva: float
    failures: tuple[str, ...] = ()


def verify_plan(
    study: Study,
    plan: Plan,
    cases: Sequence[CaseMargin],
    required: Mapping[str, float],
    *,
    traced: int = 12,
    least: bool = True,
) -> Verification:
    """Check a plan and the margins reported for it by code that shares nothing with the search.

    ``cases`` are the reported margins of the plan, ``required`` the MW that a case must have (a case not in it has
    no requirement). Noses are compared with an exact trace for all cases of networks below 60 buses, otherwise for
    the intact case, those with least to spare and an even spread of the rest, ``traced`` in all. Voltage conditions,
    cost and limits of the study are checked as well. ``least``: the plan is held to be the cheapest, so that a step
    that breaks nothing when taken off is a failure too. Failures are told in words; nothing is raised for them.
    """
    try:
        after = Cases(study, plan)
        before = Cases(study, Plan())
    except UsageError as error:
        return Verification(False, 0, 0.0, f"The plan could not be checked: {error}.", (str(error),))
    failures = [*_rules(study, plan), *_listing(after, cases, required)]
    known = [case for case in cases if case.case in after.names]
    compared = _sample(study, known, required, traced)
    worst = 0.0
    noses = 0
    for case in known:
        found = _check_case(after, case, required.get(case.case), case.case in compared)
        failures += found.failures
        worst = max(worst, found.worst_mva)
        noses += case.case in compared
    voltages = check_voltages(study, after, before)
    failures += [
        f"{v.name}: {v.case}{' at ' + v.bus if v.bus else ''}: {v.value:.6g} {v.unit}, limit {v.limit:g}"
        + (f" ({v.note})" if v.note else "")
        for v in voltages
        if not v.met
    ]
    steps = tuple(_one_fewer(study, plan, known, required, row=(r.site, r.equipment)) for r in plan.rows)
    idle = [f"one step fewer of {s.equipment} at {s.site}: {s.breaks}" for s in steps if s.breaks.startswith(_NOTHING)]
    failures += idle if least else []
    if failures:
        sentence = f"{len(failures)} of the checks of {len(known)} cases failed."
    else:
        sentence = (
            f"All {len(known)} cases were solved again from their operating points by separate code and keep their "
            f"margins; {noses} noses were traced and agree within {AGREEMENT:g}; one step fewer of any row "
            "breaks a requirement or saves nothing."
        )
        if not plan.rows or idle:
            sentence = sentence.split("; one step")[0] + "."
    return Verification(not failures, len(known), worst, sentence, tuple(failures), steps)


_NOTHING = "nothing"


def _rules(study: Study, plan: Plan) -> list[str]:
    """Rules of the study that the plan breaks, and a cost that is not what its rows add up to."""
    broken = broken_rules(study, plan)
    cost = cost_of(study, plan)
    if abs(cost - plan.cost) > 1e-9 * max(abs(cost), 1.0):
        broken.append(f"the plan costs {cost:.12g} by the study's figures, not {plan.cost:.12g}")
    return broken


def _listing(after: Cases, cases: Sequence[CaseMargin], required: Mapping[str, float]) -> list[str]:
    """Cases that are missing, twice there, or unknown."""
    reported = [case.case for case in cases]
    wrong = [f"{name}: the case is missing" for name in after.names if name not in reported]
    wrong += [f"{name}: the study has no such case" for name in dict.fromkeys(reported) if name not in after.names]
    wrong += [f"{name}: the case is listed twice" for name in dict.fromkeys(reported) if reported.count(name) > 1]
    wrong += [f"{name}: a margin is required of an unknown case" for name in required if name not in after.names]
    return wrong


def _spare(case: CaseMargin, required: Mapping[str, float]) -> float:
    """MW by which a reported margin exceeds its requirement."""
    if case.margin_mw is None:
        return -np.inf
    return case.margin_mw - required.get(case.case, 0.0)


def _sample(study: Study, cases: Sequence[CaseMargin], required: Mapping[str, float], traced: int) -> set[str]:
    """Names of the cases whose noses are compared."""
    if len(study.network.buses.bus) < 60:
        return {case.case for case in cases}
    order = sorted(cases, key=lambda case: _spare(case, required))
    tight, rest = order[: traced // 2], order[traced // 2 :]
    count = min(len(rest), max(traced - len(tight) - 1, 0))
    spread = [rest[k] for k in np.unique(np.linspace(0, len(rest) - 1, count).astype(int))] if count else []
    return {"intact", *(case.case for case in (*tight, *spread))}


def _check_case(after: Cases, case: CaseMargin, required: float | None, compare: bool) -> _Finding:
    """Margin of one case against its requirement, and its nose against the reported one."""
    try:
        off = parse_off(case.steps_off, [item.row for item in after.installed])
    except UsageError as error:
        return _Finding(0.0, (f"{case.case}: {error}",))
    wrong = _wrong_steps(after, off)
    if wrong:
        return _Finding(0.0, (f"{case.case}: {wrong}",))
    model = after.model(case.case, off)
    if isinstance(model, NotEvaluable):
        reported = case.margin_mw is None and not case.met
        return _Finding(0.0, () if reported and required is None else (f"{case.case}: not evaluable: {model.reason}",))
    failures: list[str] = []
    worst = 0.0
    if abs(case.base_mw - model.base_mw) > 1e-9 * max(abs(model.base_mw), 1.0):
        failures.append(f"{case.case}: the base is {_mw(model.base_mw)} MW, not {_mw(case.base_mw)} MW")
    if required is not None:
        least = required - MARGIN_TOLERANCE * abs(model.base_mw)
        held = holds(model, least)
        worst = held.worst_mva
        if not held.held:
            best = _best_margin(after, case.case)
            if not best >= least:
                failures.append(f"{case.case}: margin {_mw(held.reached_mw)} MW, required {_mw(required)} MW")
            elif not case.met:
                failures.append(f"{case.case}: reported as not met, but its margin is {_mw(best)} MW")
        elif not case.met:
            failures.append(f"{case.case}: reported as not met, but it holds {_mw(required)} MW")
    if compare:
        nose = trace(model)
        worst = max(worst, nose.worst_mva)
        failures += _disagreement(case, nose, model)
    return _Finding(worst, tuple(failures))


def _wrong_steps(after: Cases, off: Mapping[Row, int]) -> str:
    """What is wrong with the steps reported as off, in words."""
    table = {item.row: item for item in after.installed}
    for row, count in off.items():
        item = table.get(row)
        if item is None or not item.may_be_off or count > item.new:
            return f"{count} steps of {row[1]} at {row[0]} cannot be off"
    return ""


def _disagreement(case: CaseMargin, nose: Nose, model: Model) -> list[str]:
    """How a reported nose differs from the traced one."""
    if nose.kind == "unresolved":
        return [] if case.margin_mw is None else [f"{case.case}: the nose could not be traced: {nose.reason}"]
    if case.margin_mw is None:
        return [f"{case.case}: no nose is reported, but one lies at {_mw(nose.t_mw)} MW"]
    if nose.kind != case.nose_kind:
        return [f"{case.case}: the nose is of kind {nose.kind}, not {case.nose_kind}"]
    size = max(abs(model.base_mw), abs(model.base_mw + nose.t_mw))
    if nose.kind != "none" and abs(nose.t_mw - case.margin_mw) > AGREEMENT * size:
        return [f"{case.case}: the margin is {_mw(nose.t_mw)} MW, not {_mw(case.margin_mw)} MW"]
    return []


def _best_margin(cases: Cases, name: str) -> float:
    """Best margin over the switched steps, climbing from all on by one step at a time; NaN where none is found."""
    off: dict[Row, int] = {}

    def margin(steps: Mapping[Row, int]) -> float:
        model = cases.model(name, steps)
        return float("nan") if isinstance(model, NotEvaluable) else trace(model).t_mw

    best = margin(off)
    while True:
        trials = [
            {**off, item.row: off.get(item.row, 0) + 1} for item in cases.switched() if off.get(item.row, 0) < item.new
        ]
        values = [margin(trial) for trial in trials]
        top = int(np.argmax([-np.inf if np.isnan(v) else v for v in values])) if values else -1
        if top < 0 or np.isnan(values[top]) or values[top] <= best:
            return best
        best, off = values[top], trials[top]


def _one_fewer(
    study: Study, plan: Plan, cases: Sequence[CaseMargin], required: Mapping[str, float], *, row: Row
) -> StepCheck:
    """One step fewer of a row: the first constraint that it breaks, the cases with least to spare first."""
    site, equipment = row
    less = without(plan, site, equipment)
    steps = sum(r.steps for r in less.rows if (r.site, r.equipment) == row)
    cost = cost_of(study, less)
    check = StepCheck(site, equipment, steps, cost, "")
    if cost >= cost_of(study, plan) - 1e-9 * max(abs(cost), 1.0):
        return replace(check, breaks=f"saves nothing: it costs {cost:g}")
    rules = broken_rules(study, less)
    if rules:
        return replace(check, breaks=rules[0])
    left = Cases(study, less)
    own = f"bank:{site}:{equipment}"
    order = sorted(cases, key=lambda case: (case.case != own, _spare(case, required)))
    for case in order:
        if case.case not in left.names or case.case not in required:
            continue
        model = left.model(case.case)
        if isinstance(model, NotEvaluable):
            return replace(check, breaks=f"{case.case} is not evaluable: {model.reason}")
        least = required[case.case] - MARGIN_TOLERANCE * abs(model.base_mw)
        if holds(model, least).held:
            continue
        best = _best_margin(left, case.case)
        if not best >= least:
            words = f"margin {_mw(best)} MW, required {_mw(required[case.case])} MW"
            return replace(check, breaks=f"{case.case}: {words}")
    for v in check_voltages(study, left, Cases(study, Plan())):
        if not v.met:
            return replace(check, breaks=f"{v.name} in {v.case}: {v.value:.6g} {v.unit}, limit {v.limit:g}")
    return replace(check, breaks=f"{_NOTHING}: every requirement is still met at a cost of {cost:g}")


def _mw(value: float) -> str:
    return "none" if np.isnan(value) else f"{value:.6f}"
