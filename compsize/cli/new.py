"""``compsize new``: a starter study."""

from __future__ import annotations

from pathlib import Path

import click

from compsize.cli.codes import DONE
from compsize.cli.options import Shared, shared_options
from compsize.cli.say import answer, answer_json

__all__ = ["command"]


@click.command("new", short_help="Write a starter study.")
@click.argument("folder", type=click.Path(path_type=Path))
@shared_options
def command(folder: Path, shared: Shared) -> int:
    """Write a starter study into FOLDER, which must be new or empty: a small network, every key explained."""
    from compsize.study.new import write_starter

    place = write_starter(folder)
    files = sorted(path.relative_to(place).as_posix() for path in place.rglob("*") if path.is_file())
    if shared.json:
        answer_json({"folder": str(place), "files": files})
    else:
        answer(f"{place}: a starter study of {len(files)} files. Read study.toml, then:\n  compsize check {place}")
    return DONE
