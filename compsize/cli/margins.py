"""``compsize margins``: the nose of every case without new equipment."""

from __future__ import annotations

from pathlib import Path

import click

from compsize.cli.codes import DONE, UNMET
from compsize.cli.options import Shared, out_option, shared_options, study_argument
from compsize.cli.progress import progress

__all__ = ["command"]


@click.command("margins", short_help="Margin of every case without new equipment.")
@study_argument
@out_option
@click.option("--fail-unmet", is_flag=True, help="Exit with code 3 where a case misses its requirement.")
@shared_options
def command(study: Path, out: Path, fail_unmet: bool, shared: Shared) -> int:
    """Compute nose and margin of every case of STUDY without new equipment, and write them to DIR."""
    from compsize.cli.run import announce_compilation, hand_over
    from compsize.report.store import check_folder
    from compsize.study.read_study import read_study

    found = read_study(study)
    check_folder(out, shared.overwrite)
    announce_compilation(shared)
    import compsize.api

    with progress(shared.quiet) as line:
        result = compsize.api.margins(found, workers=shared.workers, progress=line, time_limit=shared.time_limit)
    hand_over(result, out, shared, "margins")
    return UNMET if fail_unmet and not result.met else DONE
