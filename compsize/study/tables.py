"""Raw reading: a folder of CSV files or the sheets of one workbook, as rows of trimmed text.

Nothing is interpreted here. Cells are text, blank cells are empty text, and every row knows the number
that a spreadsheet or an editor shows for it.
"""

from __future__ import annotations

import csv
import io
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Protocol

from compsize.study.files import Faults, FileReader, decode, parse_toml

__all__ = ["FolderSource", "RawTable", "Source", "parse_csv", "raw_from_records"]


@dataclass(frozen=True)
class RawTable:
    """Rows of trimmed text, all as long as the header; ``numbers`` are the rows' numbers in the file.

    ``ragged`` are the numbers of rows that were shorter or longer, for which a fault has been noted: they
    are here, cut or filled with blanks, so that other rows may refer to them. ``numbers`` is None for tables
    made from a format without rows.
    """

    file: str
    header: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]
    numbers: tuple[int, ...] | None
    ragged: frozenset[int] = frozenset()

    def column(self, name: str) -> tuple[str, ...] | None:
        """The cells of a column, None where there is no such column."""
        if name not in self.header:
            return None
        at = self.header.index(name)
        return tuple(row[at] for row in self.rows)


class Source(Protocol):
    """Where the tables of a network come from."""

    def label(self, table: str) -> str:
        """Name of the table's file (or workbook and sheet) in messages."""

    def names(self) -> tuple[str, ...]:
        """Names of the tables that are there, without ending."""

    def table(self, table: str) -> RawTable | None:
        """The table, None where it is absent or, with a fault noted, unreadable."""

    def keys(self, name: str) -> tuple[str, dict[str, object] | None]:
        """Label and content of ``name``.toml or of a sheet with the columns key and value."""


@dataclass
class FolderSource:
    """A folder of CSV files; ``prefix`` is the folder's name in messages and in the hash."""

    folder: Path
    prefix: str
    reader: FileReader

    def label(self, table: str) -> str:
        """See ``Source``."""
        return f"{self.prefix}{table}.csv"

    def names(self) -> tuple[str, ...]:
        """See ``Source``."""
        return tuple(sorted(path.stem for path in self.folder.glob("*.csv")))

    def table(self, table: str) -> RawTable | None:
        """See ``Source``."""
        path = self.folder / f"{table}.csv"
        if not path.exists():
            return None
        content = self.reader.bytes_of(path, self.label(table))
        return None if content is None else parse_csv(content, self.label(table), self.reader.faults)

    def keys(self, name: str) -> tuple[str, dict[str, object] | None]:
        """See ``Source``."""
        label = f"{self.prefix}{name}.toml"
        content = self.reader.bytes_of(self.folder / f"{name}.toml", label)
        text = None if content is None else decode(content, label, self.reader.faults)
        return label, None if text is None else parse_toml(text, label, self.reader.faults)


def parse_csv(content: bytes, file: str, faults: Faults) -> RawTable | None:
    """A CSV file; None, and faults, where it is empty, wrongly encoded or not CSV.

    The delimiter is the comma, or the semicolon where the header has more of those.
    """
    text = decode(content, file, faults)
    if text is None:
        return None
    head = text.lstrip("\r\n").split("\n", 1)[0]
    delimiter = ";" if head.count(";") > head.count(",") else ","
    records: list[list[str]] = []
    try:
        for record in csv.reader(io.StringIO(text, newline=""), delimiter=delimiter, strict=True):
            records.append(record)
    except csv.Error as error:
        remedy = "Double the quotation marks inside a quoted cell and close every one."
        faults.add(file, f"the file is not valid CSV ({error}).", remedy, row=len(records) + 1)
        return None
    return raw_from_records(records, file, faults)


def raw_from_records(records: Sequence[Sequence[str]], file: str, faults: Faults) -> RawTable | None:
    """Makes a table of records, the first of which that is not blank is the header.

    Blank rows, and blank cells beyond the header, are left over by spreadsheets and skipped. Notes
    faults for an empty file, columns without or with the same name, and rows of another length.
    """
    trimmed = [tuple(cell.strip() for cell in record) for record in records]
    start = next((at for at, record in enumerate(trimmed) if any(record)), None)
    if start is None:
        faults.add(file, "the file is empty.", "Give at least the row of column names.")
        return None
    header = list(trimmed[start])
    while header and not header[-1]:
        header.pop()
    width = len(header)
    _check_header(header, file, start + 1, faults)
    rows: list[tuple[str, ...]] = []
    numbers: list[int] = []
    ragged: set[int] = set()
    for number, record in enumerate(trimmed[start + 1 :], start + 2):
        if not any(record):
            continue
        if len(record) != width and (len(record) < width or any(record[width:])):
            faults.add(
                file,
                f"{len(record)} cells where the header has {width} columns.",
                "Give every row one cell per column; quote cells that hold the delimiter.",
                row=number,
            )
            ragged.add(number)
        rows.append((record + ("",) * width)[:width])
        numbers.append(number)
    return RawTable(file, tuple(header), tuple(rows), tuple(numbers), frozenset(ragged))


def _check_header(header: list[str], file: str, row: int, faults: Faults) -> None:
    seen: set[str] = set()
    for at, name in enumerate(header, 1):
        if not name:
            faults.add(file, f"column {at} has no name.", "Name the column or remove it.", row=row)
        elif name in seen:
            faults.add(file, f"two columns are named '{name}'.", "Remove one of them.", row=row, column=name)
        seen.add(name)
