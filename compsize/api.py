"""The Python surface: read a study, ask a question, write the answer down."""

from __future__ import annotations

import math
import time
from collections.abc import Callable, Sequence
from importlib.metadata import version

from compsize.errors import UsageError
from compsize.margin.assess import Bench, assess, prepare
from compsize.margin.curve import nose_curve
from compsize.margin.pool import default_workers
from compsize.network.cases import build_case
from compsize.network.plans import additions
from compsize.plan.records import (
    CaseMargin,
    Counts,
    MarginsResult,
    NoseCurve,
    Plan,
    SizeResult,
    Verification,
    VoltageCheck,
)
from compsize.report.basis import basis_of
from compsize.sizing.given import GivenPlan, judged
from compsize.sizing.rows import rows_after, runner_up
from compsize.sizing.solve import Clock, Solved, sizing_of
from compsize.study.records import Study
from compsize.verify.cases import Cases
from compsize.verify.plan import verify_plan
from compsize.verify.voltage import check_voltages

Progress = Callable[[str, int, int | None], None]
"""Told what is going on: a stage in words, how much is done, and of how much (None: not known)."""


PROOFS = ("auto", "full", "covers")


def _case_progress(progress: Progress | None, stage: str) -> Callable[[int, int], None] | None:
    if progress is None:
        return None
    return lambda done, total: progress(stage, done, total)


def study_notes(study: Study, bench: Bench) -> tuple[str, ...]:
    """What a reader of any table of this study must know beside it."""
    notes = []
    if study.contingencies.left_out:
        left = study.contingencies.left_out
        shown = ", ".join(left[:10]) + (f" and {len(left) - 10} more" if len(left) > 10 else "")
        notes.append(f"Single branches left out because their loss splits the network: {shown}.")
    if bench.base is None:
        notes.append("The intact network has no solution at base load; check the data and the load level.")
    return tuple(notes)


def margins(
    study: Study,
    *,
    workers: int | None = None,
    time_limit: float | None = None,
    progress: Progress | None = None,
) -> MarginsResult:
    """Nose and margin of the intact network and of every listed outage, without new equipment.

    Args:
        study: a checked study, from :func:`compsize.read_study`.
        workers: threads; None uses the processors at hand. The answer does not depend on it.
        time_limit: seconds; cases not begun by then are rows that say so. None: no limit.
        progress: called as cases finish.

    Returns:
        One row per case; a case that cannot be evaluated is a row with its status.
    """
    bench = prepare(study)
    tell = _case_progress(progress, "cases")
    rows, noses, factorisations = assess(bench, workers or default_workers(), tell, Clock(time_limit).over)
    return MarginsResult(
        title=study.title,
        cases=rows,
        counts=Counts(noses=noses, factorisations=factorisations, noses_traced=noses),
        study_hash=study.hash,
        version=version("compsize"),
        basis=basis_of(study),
        notes=study_notes(study, bench),
    )


def size(
    study: Study,
    *,
    workers: int | None = None,
    time_limit: float | None = None,
    proof: str = "auto",
    plan: GivenPlan | None = None,
    progress: Progress | None = None,
) -> SizeResult:
    """The least-cost plan that keeps every required margin, with the proof that nothing is cheaper.

    Args:
        study: a checked study with candidates.
        workers: threads; None uses the processors at hand. The answer does not depend on it.
        time_limit: seconds for the search and the proof; None: no limit.
        proof: what the bound shall rest on: ``auto``, ``full``, ``covers``.
        plan: rows (site, equipment, new steps) of a plan to judge; the result then shows this plan, with what it
            breaks (status ``unreachable``) or how far above the least cost it is.
        progress: called as the work goes on.

    Returns:
        A result with the same fields whatever the outcome; ``status`` says which it is.

    Raises:
        UsageError: ``plan`` names what is no candidate, or too many steps; an unknown ``proof``.
    """
    if proof not in PROOFS:
        raise UsageError(f"unknown proof {proof!r}; valid are {', '.join(PROOFS)}")
    started = time.monotonic()
    bench = prepare(study)
    threads = workers or default_workers()
    clock = Clock(time_limit)
    solved = sizing_of(bench, threads, time_limit, progress, proof).run()
    if plan is not None:
        solved = judged(bench, solved, plan, threads, clock, progress)
    zero = tuple(0 for _ in bench.choices)
    before = rows_after(bench, solved.judge, zero, threads)
    after = before if solved.shown == zero else rows_after(bench, solved.judge, solved.shown, threads)
    chosen = None if solved.steps is None else solved.problem.plan(solved.steps)
    cost = None if solved.steps is None else solved.problem.cost(solved.steps)
    verification = None
    voltages: tuple[VoltageCheck, ...] = ()
    if chosen is not None:
        voltages = check_voltages(study, Cases(study, chosen), Cases(study, Plan()))
        if progress is not None:
            progress("independent verification", 0, None)
        verification = _verified(study, chosen, after, solved.status == "optimal")
    curves = _curves(bench, solved, before, after)
    gap = None
    if cost is not None and solved.bound is not None:
        gap = 0.0 if cost <= solved.bound else 100.0 * (cost - solved.bound) / cost
    runners = runner_up(solved.problem, solved.steps, solved.judge) if solved.steps is not None else ()
    noses = solved.noses
    return SizeResult(
        title=study.title,
        status=solved.status,
        sentence=solved.sentence,
        plan=chosen,
        cost=cost,
        cost_bound=solved.bound,
        gap_pct=gap,
        proof=solved.proof,
        cases_before=before,
        cases_after=after,
        voltages=voltages,
        runners_up=runners,
        verification=verification,
        curves=curves,
        counts=Counts(
            noses=noses.count,
            factorisations=noses.factorisations,
            master_solves=solved.masters,
            plans_walked=solved.walked,
            noses_traced=noses.traced,
        ),
        study_hash=study.hash,
        version=version("compsize"),
        basis=basis_of(study),
        notes=study_notes(study, bench),
        seconds=time.monotonic() - started,
        report=(
            ("project", study.report.project),
            ("author", study.report.author),
            ("currency", study.report.currency),
            ("price_year", study.report.price_year),
            ("notes", study.report.notes),
        ),
    )


def _verified(study: Study, plan: Plan, after: Sequence[CaseMargin], least: bool) -> Verification:
    required = {row.case: row.required_mw for row in after if row.required_mw is not None}
    return verify_plan(study, plan, after, required, least=least)


def _curves(
    bench: Bench, solved: Solved, before: Sequence[CaseMargin], after: Sequence[CaseMargin], most: int = 6
) -> tuple[NoseCurve, ...]:
    """Curves before and after of the cases with least to spare, before the plan and with it."""

    def spare(row: CaseMargin) -> float:
        if row.margin_mw is None:
            return math.inf
        return row.margin_mw - (row.required_mw or 0.0)

    known = {row.case: row for row in before}
    order = sorted((r for r in after if r.margin_mw is not None and r.case in known), key=lambda r: (spare(r), r.case))
    worst_before = min(known.values(), key=spare).case
    chosen = list(dict.fromkeys([*(r.case for r in order[: most - 1]), worst_before]))
    if "intact" not in chosen:
        chosen.append("intact")
    specs = {t.spec.name: t.spec for t in solved.noses.targets}
    later = {row.case: row for row in after}
    zero = tuple(0 for _ in bench.choices)
    found = []
    for name in chosen:
        if name not in specs or name not in later:
            continue
        bus = later[name].weakest_bus or known[name].weakest_bus
        if not bus:
            continue
        for word, row, steps in (("before", known[name], zero), ("after", later[name], solved.shown)):
            if word == "after" and steps == zero:
                continue
            model = build_case(bench.grid, specs[name].elements, additions(bench.choices, steps))
            curve = nose_curve(bench, model, row, word, bus)
            if curve is not None:
                found.append(curve)
    return tuple(found)
