"""All files of a result, and its page rendered again from ``result.json``."""

from __future__ import annotations

from pathlib import Path

from compsize.errors import Fault, InputError
from compsize.plan.records import MarginsResult, Plan, SizeResult
from compsize.report.content import page_of
from compsize.report.csvs import margins_csv, plan_csv
from compsize.report.result_json import from_json, to_json
from compsize.report.store import RESULT_FILE, check_folder, write_file, write_folder

__all__ = ["render", "result_files", "write_report"]


def result_files(result: SizeResult | MarginsResult) -> dict[str, str]:
    """Name to text of every file of the result's command."""
    if isinstance(result, SizeResult):
        files = {
            RESULT_FILE: to_json(result, "size"),
            "plan.csv": plan_csv((result.plan or Plan()).rows),
            "margins_before.csv": margins_csv(result.cases_before),
            "margins_after.csv": margins_csv(result.cases_after),
        }
    else:
        files = {RESULT_FILE: to_json(result, "margins"), "margins.csv": margins_csv(result.cases)}
    return files | _rendered(result)


def write_report(result: SizeResult | MarginsResult, folder: Path | str, overwrite: bool = False) -> Path:
    """Write the files of the result into ``folder``, all or none, and return its real path.

    Raises :class:`~compsize.errors.OutputError` where the folder holds an older result and ``overwrite``
    is False, holds anything else, or cannot be written.
    """
    check_folder(folder, overwrite)
    return write_folder(folder, result_files(result), overwrite)


def render(folder: Path | str) -> Path:
    """Render the report of a result folder again from its ``result.json``; returns the page's path.

    Raises :class:`~compsize.errors.InputError` where the folder holds no result this version reads.
    """
    source = Path(folder) / RESULT_FILE
    try:
        text = source.read_text(encoding="utf-8")
    except (OSError, UnicodeDecodeError) as fault:
        why = fault.strerror if isinstance(fault, OSError) else "it is not UTF-8"
        remedy = "Name the folder of a finished result."
        raise InputError([Fault(str(source), f"cannot be read: {why}.", remedy)]) from fault
    for name, page in _rendered(from_json(text)).items():
        write_file(Path(folder) / name, page)
    return Path(folder) / "report.html"


def _rendered(result: SizeResult | MarginsResult) -> dict[str, str]:
    # Drawing is slow to load, and most commands draw nothing.
    from compsize.report.html import render_html

    return {"report.html": render_html(page_of(result))}
