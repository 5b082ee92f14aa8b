"""What the commands that compute share: where the result goes, the notice of a first use, the printed answer."""

from __future__ import annotations

import os
from pathlib import Path
from typing import TYPE_CHECKING, Literal

from compsize.cli.options import Shared
from compsize.cli.say import answer, answer_json, tell
from compsize.errors import OutputError

if TYPE_CHECKING:
    from compsize.plan.records import MarginsResult, SizeResult

__all__ = ["announce_compilation", "hand_over"]


def announce_compilation(shared: Shared) -> None:
    """Say so once if the program has yet to compile its kernels on this machine."""
    from compsize.flow.jit import compiled_before

    if not shared.quiet and not compiled_before():
        tell("First use on this machine: compiling takes a minute or two, once.")


def hand_over(result: MarginsResult | SizeResult, out: Path, shared: Shared, kind: Literal["size", "margins"]) -> None:
    """Write the files of a result and print its answer; the answer is printed even where the disk refuses."""
    from compsize.report.result_json import to_json
    from compsize.report.write import write_report

    refused: OutputError | None = None
    try:
        write_report(result, out, shared.overwrite)
    except OutputError as fault:
        refused = fault
    if shared.json:
        answer_json(to_json(result, kind))
    else:
        files = "" if refused else f"\n\nWritten to {os.path.join(out, '')}: {', '.join(sorted(os.listdir(out)))}"
        answer(_text(result) + files)
    if refused is not None:
        raise refused


def _text(result: MarginsResult | SizeResult) -> str:
    from compsize.cli.text import answer_lines, block_of, figure_lines, note_lines, table_lines
    from compsize.report.blocks import Figures, Table
    from compsize.report.content import page_of

    page = page_of(result)
    plan, figures = block_of(page, "plan", Table, "plan"), block_of(page, "figures", Figures)
    margins = block_of(page, "margins", Table, "margins")
    parts = (
        answer_lines(page),
        [] if plan is None else table_lines(plan, most=len(plan.rows)),
        [] if figures is None else figure_lines(figures),
        [] if margins is None else table_lines(margins, without=("class", "base_mw")),
        note_lines(page),
    )
    return "\n\n".join("\n".join(part) for part in parts if part)
