"""``compsize size``: the least-cost plan of a study, or the judgement of a given one."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Literal

import click

from compsize.cli.codes import DONE, INTERNAL, STOPPED, UNMET
from compsize.cli.options import Shared, out_option, shared_options, study_argument
from compsize.cli.progress import progress
from compsize.errors import Fault, InputError

if TYPE_CHECKING:
    from compsize.plan.records import SizeResult

__all__ = ["command", "exit_code"]

Means = Literal["auto", "full", "covers"]


@click.command("size", short_help="The least-cost plan, with proof.")
@study_argument
@out_option
@click.option(
    "--plan",
    "plan_file",
    type=click.Path(path_type=Path),
    metavar="PLAN.CSV",
    help="Judge the plan of this file (site, equipment, steps) instead of searching for one.",
)
@click.option(
    "--proof",
    type=click.Choice(["auto", "full", "covers"]),
    default="auto",
    show_default=True,
    help="What the bound on the cost shall rest on.",
)
@shared_options
def command(study: Path, out: Path, plan_file: Path | None, proof: Means, shared: Shared) -> int:
    """Find the least-cost plan of STUDY, prove that nothing cheaper works, and write it all to DIR."""
    from compsize.cli.plan_file import read_plan
    from compsize.cli.run import announce_compilation, hand_over
    from compsize.report.store import check_folder
    from compsize.study.read_study import read_study

    found = read_study(study)
    if not found.candidates:
        remedy = "Add [candidates], or compute the margins alone by `compsize margins`."
        raise InputError([Fault("study.toml", "no candidates are named, so there is nothing to build from.", remedy)])
    plan = None if plan_file is None else read_plan(plan_file, found)
    check_folder(out, shared.overwrite)
    announce_compilation(shared)
    import compsize.api

    with progress(shared.quiet) as line:
        result = compsize.api.size(
            found, workers=shared.workers, time_limit=shared.time_limit, proof=proof, plan=plan, progress=line
        )
    hand_over(result, out, shared, "size")
    return exit_code(result, judged=plan is not None)


def exit_code(result: SizeResult, judged: bool) -> int:
    """The exit code of a result; ``judged``: the plan was given, so that no proof of least cost is owed.

    A plan that the search holds good and the verification does not is a fault of the program.
    """
    if result.status in ("optimal", "feasible") and result.verification is not None and not result.verification.passed:
        return INTERNAL
    if result.status == "unreachable":
        return UNMET
    if result.status == "optimal" or (judged and result.status == "feasible"):
        return DONE
    return STOPPED
