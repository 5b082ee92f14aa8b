"""The tables of a result as CSV text: UTF-8, comma, full precision, ids exactly as the study has them."""

from __future__ import annotations

import csv
import io
import math
from collections.abc import Sequence
from typing import Any

from compsize.errors import InternalError
from compsize.plan.records import CaseMargin, PlanRow, table_columns, table_rows

__all__ = ["margins_csv", "plan_csv", "table_csv"]


def margins_csv(cases: Sequence[CaseMargin]) -> str:
    """``margins.csv``, ``margins_before.csv`` or ``margins_after.csv``: one row a case, in the given order."""
    return table_csv(cases, CaseMargin)


def plan_csv(rows: Sequence[PlanRow]) -> str:
    """``plan.csv``: one row for each equipment used at a site; only the heading where nothing is built."""
    return table_csv(rows, PlanRow)


def table_csv(records: Sequence[Any], record: type) -> str:
    """The table of ``records`` as CSV text; raises :class:`InternalError` at a number that is not finite.

    Yes/no is ``yes`` or ``no``, None is blank, a tuple is joined by spaces. An id such as ``=1+1`` stays that
    text: whoever reads the file by a program must get the id of the study back.
    """
    columns = table_columns(record)
    lines = [_line(columns)]
    for number, row in enumerate(table_rows(records), start=2):
        lines.append(_line([_cell(row[column], f"row {number}, {column}") for column in columns]))
    return "".join(lines)


def _line(cells: Sequence[str]) -> str:
    # The writer quotes a carriage return in a name only while one is part of its line ends.
    stream = io.StringIO(newline="")
    csv.writer(stream, lineterminator="\r\n").writerow(cells)
    return stream.getvalue().removesuffix("\r\n") + "\n"


def _cell(value: Any, where: str) -> str:
    if value is None:
        return ""
    if isinstance(value, str):
        return value
    if hasattr(value, "item"):  # a numpy scalar, whose repr would name its type
        value = value.item()
    if isinstance(value, float) and not math.isfinite(value):
        raise InternalError(f"{where} of a result table is {value}.")
    return repr(value)
