"""``compsize report``: the report of a result folder, rendered again."""

from __future__ import annotations

from pathlib import Path

import click

from compsize.cli.codes import DONE
from compsize.cli.options import Shared, shared_options
from compsize.cli.say import answer, answer_json

__all__ = ["command"]


@click.command("report", short_help="Render the report of a result again.")
@click.argument("folder", metavar="DIR", type=click.Path(path_type=Path))
@shared_options
def command(folder: Path, shared: Shared) -> int:
    """Render the report of the result folder DIR again from its result.json. Nothing is computed."""
    from compsize.report.write import render

    page = render(folder)
    if shared.json:
        answer_json({"report": str(page)})
    else:
        answer(str(page))
    return DONE
