"""Raw reading of one workbook (.xlsx): a sheet is named as the CSV file without ending."""

from __future__ import annotations

import io
import warnings
from dataclasses import dataclass
from datetime import date, datetime, time, timedelta
from pathlib import Path
from typing import TYPE_CHECKING, Any

from compsize.study.files import Faults, FileReader
from compsize.study.tables import RawTable, raw_from_records

if TYPE_CHECKING:
    from openpyxl import Workbook

__all__ = ["WorkbookSource", "open_workbook"]


@dataclass
class WorkbookSource:
    """The sheets of an open workbook as tables; ``name`` is the file's name in messages."""

    name: str
    sheets: dict[str, list[list[str]]]
    faults: Faults

    def label(self, table: str) -> str:
        """See ``tables.Source``."""
        return f"{self.name}, sheet {table}"

    def names(self) -> tuple[str, ...]:
        """See ``tables.Source``."""
        return tuple(self.sheets)

    def table(self, table: str) -> RawTable | None:
        """See ``tables.Source``."""
        if table not in self.sheets:
            return None
        return raw_from_records(self.sheets[table], self.label(table), self.faults)

    def keys(self, name: str) -> tuple[str, dict[str, object] | None]:
        """See ``tables.Source``. Numbers are told from text by what the key asks for, later."""
        label = self.label(name)
        if name not in self.sheets:
            self.faults.add(self.name, f"the sheet '{name}' is missing.", "Add it with the columns key and value.")
            return label, None
        raw = raw_from_records(self.sheets[name], label, self.faults)
        if raw is None:
            return label, None
        if raw.header != ("key", "value"):
            self.faults.add(label, "the columns are not 'key' and 'value'.", "Give exactly these two columns.", row=1)
            return label, None
        found: dict[str, object] = {}
        for (key, value), row in zip(raw.rows, raw.numbers or (), strict=True):
            if key in found:
                self.faults.add(label, f"the key '{key}' stands twice.", "Remove one of them.", row=row)
            if value:
                found[key] = value
        return label, found


def open_workbook(path: Path, name: str, reader: FileReader, wanted: set[str]) -> WorkbookSource | None:
    """Reads the ``wanted`` sheets; None, and a fault, where the workbook cannot be read."""
    content = reader.bytes_of(path, name)
    if content is None:
        return None
    try:
        found = _values(content, wanted)
    except Exception as why:  # a damaged workbook fails somewhere inside its own reader, with whatever comes first
        reader.faults.add(name, f"the workbook cannot be read ({type(why).__name__}).", "Save it again as .xlsx.")
        return None
    sheets: dict[str, list[list[str]]] = {}
    notes: list[tuple[str, int, int, str]] = []
    for title, rows in found.items():
        sheets[title] = [[_text(value) for value in row] for row in rows]
        notes += [
            (title, at, to, problem)
            for at, row in enumerate(rows)
            for to, value in enumerate(row)
            if (problem := _problem(value))
        ]
    for sheet, at, to, problem in notes:
        remedy = "Correct the cell."
        if "date" in problem:
            remedy = "Format the column as text and type the value again."
        elif "formula" in problem:
            remedy = "Open and save the workbook in a spreadsheet program, or write the value."
        head = sheets[sheet][0][to] if to < len(sheets[sheet][0]) else ""
        reader.faults.add(f"{name}, sheet {sheet}", problem, remedy, row=at + 1, column=head or None)
    return WorkbookSource(name, sheets, reader.faults)


class _NoValue:
    """Stands for a formula that the workbook stores no value of."""

    def __str__(self) -> str:
        return ""


def _values(content: bytes, wanted: set[str]) -> dict[str, list[list[Any]]]:
    """Cell values of the wanted sheets by title; other sheets are there without rows."""
    book = _load(content, values=False)
    stored: Workbook | None = None
    found: dict[str, list[list[Any]]] = {}
    for title in book.sheetnames:
        if title.strip() not in wanted:
            found.setdefault(title.strip(), [])
            continue
        rows: list[list[Any]] = []
        formulas: list[tuple[int, int]] = []
        for at, cells in enumerate(book[title].iter_rows()):
            rows.append([cell.value for cell in cells])
            formulas += [(at, to) for to, cell in enumerate(cells) if cell.data_type == "f"]
        if formulas:
            stored = stored or _load(content, values=True)
            results = list(stored[title].iter_rows(values_only=True))
            for at, to in formulas:
                value = results[at][to]
                rows[at][to] = _NoValue() if value is None else value
        found[title.strip()] = rows
    return found


def _load(content: bytes, values: bool) -> Workbook:
    from openpyxl import load_workbook

    with warnings.catch_warnings():
        # Styles and validations that are not understood do not touch the values.
        warnings.simplefilter("ignore")
        return load_workbook(io.BytesIO(content), read_only=True, data_only=values)


def _text(value: Any) -> str:
    if value is None:
        return ""
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, float) and value.is_integer():
        return str(int(value))
    return str(value).strip()


def _problem(value: Any) -> str:
    if isinstance(value, _NoValue):
        return "the formula has no stored value."
    if isinstance(value, datetime | date | time | timedelta):
        return "the cell holds a date or time."
    if isinstance(value, str) and value in _ERRORS:
        return f"the cell holds the error {value}."
    return ""


_ERRORS = {"#REF!", "#DIV/0!", "#VALUE!", "#NAME?", "#N/A", "#NUM!", "#NULL!"}
