"""The Python surface: read a study, ask a question, write the answer down."""

from __future__ import annotations

from collections.abc import Callable
from importlib.metadata import version

from compsize.margin.assess import Bench, assess, prepare
from compsize.margin.pool import default_workers
from compsize.plan.records import Counts, MarginsResult
from compsize.report.basis import basis_of
from compsize.study.records import Study

Progress = Callable[[str, int, int | None], None]
"""Told what is going on: a stage in words, how much is done, and of how much (None: not known)."""


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


def margins(study: Study, *, workers: int | None = None, progress: Progress | None = None) -> MarginsResult:
    """Nose and margin of the intact network and of every listed outage, without new equipment.

    Args:
        study: a checked study, from :func:`compsize.read_study`.
        workers: threads; None uses the processors at hand. The answer does not depend on it.
        progress: called as cases finish.

    Returns:
        One row per case; a case that cannot be evaluated is a row with its status.
    """
    bench = prepare(study)
    rows, noses, factorisations = assess(bench, workers or default_workers(), _case_progress(progress, "cases"))
    return MarginsResult(
        title=study.title,
        cases=rows,
        counts=Counts(noses=noses, factorisations=factorisations, noses_traced=noses),
        study_hash=study.hash,
        version=version("compsize"),
        basis=basis_of(study),
        notes=study_notes(study, bench),
    )
