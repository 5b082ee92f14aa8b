"""From rows of text to typed columns, checked against the declaration of the table."""

from __future__ import annotations

import re
from collections.abc import Collection, Iterable, Sequence
from dataclasses import dataclass, field

import numpy as np

from compsize.study.files import Faults
from compsize.study.records import Bools, Floats, Ids
from compsize.study.schema import Column, Table, nearest, nearest_id
from compsize.study.tables import RawTable

__all__ = ["Columns", "References", "as_number", "as_yes_no", "read_columns"]

_NUMBER = re.compile(r"[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?")
_NUMBER_LETTERS = frozenset("0123456789.+-eE")
_YES_NO = {"yes": True, "on": True, "true": True, "1": True, "no": False, "off": False, "false": False, "0": False}
# Looking for the nearest of thousands of ids is slow, and a file with so many faults needs no more hints.
_MOST_COMPARISONS = 150_000


@dataclass
class Columns:
    """The typed columns of one table, in file order.

    A faulty number is NaN, a faulty id or reference is empty text, so that later checks pass over it
    and report no fault twice. ``rows`` are row numbers of the file, None where there are none.
    """

    file: str
    rows: Sequence[int] | None
    size: int
    texts: dict[str, Ids] = field(default_factory=dict)
    numbers: dict[str, Floats] = field(default_factory=dict)
    flags: dict[str, Bools] = field(default_factory=dict)
    extra: dict[str, Ids] = field(default_factory=dict)
    """Text of the undeclared columns of an open-ended table."""
    given: frozenset[str] = frozenset()
    """Names of the columns that the file has."""
    ragged: frozenset[int] = frozenset()
    """Numbers of the rows of the wrong length."""
    key: str = ""
    """Name of the column that names the row."""

    def row(self, at: int) -> int | None:
        """Row number of the ``at``-th entry, counted from 0."""
        return None if self.rows is None else self.rows[at]

    def place(self, at: int) -> str:
        """The file and, where it has no rows, the name of the ``at``-th entry, to stand before a fault."""
        if self.rows is not None or self.key not in self.texts:
            return self.file
        return f"{self.file}, {self.key} '{self.texts[self.key][at]}'"


@dataclass
class References:
    """The ids that references may name, by table; a table that is unknown or unreadable is not checked."""

    ids: dict[str, Collection[str]] = field(default_factory=dict)
    comparisons: int = 0

    def remedy(self, value: str, table: str) -> str:
        """Names the nearest id for a reference that names none."""
        self.comparisons += len(self.ids[table])
        what = {"buses": "bus", "branches": "branch", "equipment": "row of the equipment table"}.get(table, table[:-1])
        return nearest_id(value, self.ids[table] if self.comparisons <= _MOST_COMPARISONS else (), what)


def as_number(text: str) -> float | None:
    """A plain decimal number, None for anything else (also for nan and inf, and for 1_000)."""
    if _NUMBER.fullmatch(text) is None:
        return None
    value = float(text)
    return value if np.isfinite(value) else None


def as_yes_no(text: str) -> bool | None:
    """yes, on, true, 1 or no, off, false, 0; None for anything else."""
    return _YES_NO.get(text.lower())


def read_columns(raw: RawTable, table: Table, references: References, faults: Faults) -> Columns:
    """Types every declared column of ``raw``, with a fault for each cell and name that is wrong."""
    done = Columns(
        raw.file, raw.numbers, len(raw.rows), given=frozenset(raw.header), ragged=raw.ragged, key=table.key.name
    )
    for name in raw.header:
        if name and name not in table.names:
            if table.open_ended:
                done.extra[name] = raw.column(name) or ()
                continue
            faults.add(raw.file, f"unknown column '{name}'.", nearest(name, table.names), column=name)
    cells = dict(zip(raw.header, zip(*raw.rows, strict=True), strict=False)) if raw.rows else {}
    for column in table.columns:
        if column.name not in raw.header and column.required:
            remedy = "Add the column."
            faults.add(raw.file, f"the required column '{column.name}' is missing.", remedy, column=column.name)
        missing = column.required and column.name not in raw.header
        _read_column(
            done, column, cells.get(column.name), missing=missing, table=table, references=references, faults=faults
        )
    if not raw.rows and not table.may_be_empty:
        faults.add(raw.file, "the table has no rows.", f"Give at least one {table.key.name}.")
    return done


def _read_column(
    done: Columns,
    column: Column,
    cells: Sequence[str] | None,
    *,
    missing: bool,
    table: Table,
    references: References,
    faults: Faults,
) -> None:
    if cells is None:
        cells = ("",) * done.size
    where = _Where(done, column, faults)
    if column.required and not missing and "" in cells:
        for at in _indices(cells, ""):
            where.fault(at, "the cell is blank.", "A value is required here.")
    if column.kind in ("number", "integer"):
        done.numbers[column.name] = _numbers(cells, column, where)
    elif column.kind == "yes-no":
        done.flags[column.name] = _flags(cells, column, where)
    else:
        done.texts[column.name] = _names(cells, column, where, table, references)


@dataclass
class _Where:
    """Puts file, row and column to a fault of a cell; a row of the wrong length has its fault already."""

    done: Columns
    column: Column
    faults: Faults

    def fault(self, at: int, message: str, remedy: str) -> None:
        if self.done.rows is None or self.done.row(at) not in self.done.ragged:
            self.faults.add(self.done.place(at), message, remedy, row=self.done.row(at), column=self.column.name)


def _indices(cells: Iterable[str], wanted: str) -> list[int]:
    return [at for at, cell in enumerate(cells) if cell == wanted]


def _numbers(cells: Sequence[str], column: Column, where: _Where) -> Floats:
    blank = np.nan if column.default is None else float(column.default)
    if _NUMBER_LETTERS.issuperset("".join(cells)):
        try:
            values = np.array([float(cell) if cell else blank for cell in cells], dtype=np.float64)
        except ValueError:
            values = _each_number(cells, blank, where)
    else:
        values = _each_number(cells, blank, where)
    filled = np.array([bool(cell) for cell in cells], dtype=bool)
    for at in np.flatnonzero(filled & np.isinf(values)):
        where.fault(int(at), f"'{cells[int(at)]}' is too large to be a number.", "Write a plain number.")
        values[at] = np.nan
    if column.kind == "integer":
        for at in np.flatnonzero(filled & ~np.isnan(values) & (values != np.round(values))):
            where.fault(int(at), f"'{cells[int(at)]}' is not a whole number.", "Write a whole number.")
            values[at] = np.nan
    bounds = column.bounds
    outside = np.zeros(len(values), dtype=bool)
    if bounds.low is not None:
        outside |= values <= bounds.low if bounds.open_low else values < bounds.low
    if bounds.high is not None:
        outside |= values > bounds.high
    unit = f" {column.unit}" if column.unit else ""
    for at in np.flatnonzero(filled & outside):
        where.fault(int(at), f"{cells[int(at)]} is out of range.", f"Permitted: {bounds}{unit}.")
        values[at] = np.nan
    values.setflags(write=False)
    return values


def _each_number(cells: Sequence[str], blank: float, where: _Where) -> Floats:
    values = np.full(len(cells), blank)
    for at, cell in enumerate(cells):
        if not cell:
            continue
        value = as_number(cell)
        if value is None and _NUMBER.fullmatch(cell):
            value = np.inf
        elif value is None:
            remedy = "Write a number with a decimal point."
            if cell.count(",") == 1 and as_number(cell.replace(",", ".")) is not None:
                remedy = f"Write the decimal point: {cell.replace(',', '.')}; no separators of thousands."
            elif as_number(cell.replace(" ", "").replace(",", "")) is not None:
                remedy = "Write it without separators of thousands."
            where.fault(at, f"'{cell}' is not a number.", remedy)
            value = np.nan
        values[at] = value
    return values


def _flags(cells: Sequence[str], column: Column, where: _Where) -> Bools:
    default = bool(column.default)
    meaning = {cell: default if not cell else as_yes_no(cell) for cell in set(cells)}
    for cell, value in meaning.items():
        if value is None:
            for at in _indices(cells, cell):
                where.fault(at, f"'{cell}' is neither yes nor no.", "Write yes or no (on, off, true, false, 1, 0).")
    values = np.array([bool(meaning[cell]) for cell in cells], dtype=np.bool_)
    values.setflags(write=False)
    return values


def _names(cells: Sequence[str], column: Column, where: _Where, table: Table, references: References) -> Ids:
    bad: set[int] = set()
    if not "".join(cells).isprintable():
        for at, cell in enumerate(cells):
            if not cell.isprintable():
                shown = cell.encode("unicode_escape").decode("ascii")
                where.fault(at, f"'{shown}' holds a line break or another invisible character.", "Remove it.")
                bad.add(at)
    if column.kind == "choice":
        for at, cell in enumerate(cells):
            if cell and cell not in column.choices:
                where.fault(at, f"'{cell}' is not a valid {column.name}.", nearest(cell, column.choices))
                bad.add(at)
    if column.kind == "reference" and column.refers in references.ids:
        known = references.ids[column.refers]
        for at, cell in enumerate(cells):
            if cell and cell not in known and at not in bad:
                what = "bus" if column.refers == "buses" else column.refers
                where.fault(at, f"there is no {what} '{cell}'.", references.remedy(cell, column.refers))
                bad.add(at)
    if column.kind == "id" and table.unique and column is table.key and len(set(cells)) != len(cells):
        first: dict[str, int] = {}
        for at, cell in enumerate(cells):
            if cell and cell in first:
                earlier = where.done.row(first[cell])
                also = "" if earlier is None else f" (also in row {earlier})"
                where.fault(at, f"the {column.name} '{cell}' stands twice{also}.", "Give every row its own name.")
            first.setdefault(cell, at)
    return tuple("" if at in bad else cell for at, cell in enumerate(cells)) if bad else tuple(cells)
