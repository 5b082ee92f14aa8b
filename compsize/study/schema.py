"""The one declaration of every table column and every key of a study.

Readers, checks, the suggestion of the nearest valid name, the starter study and the documentation
all take names, kinds, defaults, ranges and meanings from here, so that they cannot disagree.
The declarations themselves stand in ``schema_tables`` and ``schema_keys``.
"""

from __future__ import annotations

import difflib
from collections.abc import Iterable
from dataclasses import dataclass
from typing import Literal

__all__ = ["Bounds", "Column", "Key", "Section", "Table", "nearest", "nearest_id"]

ColumnKind = Literal["id", "reference", "text", "number", "integer", "yes-no", "choice"]
KeyKind = Literal["text", "path", "number", "integer", "yes-no", "choice", "loads", "power factor"]
Default = float | str | bool | None


@dataclass(frozen=True)
class Bounds:
    """A range of numbers; ``open_low`` leaves the lower end itself out."""

    low: float | None = None
    high: float | None = None
    open_low: bool = False

    def admits(self, value: float) -> bool:
        """Whether ``value`` lies in the range (NaN, which stands for blank, does)."""
        if self.low is not None and (value < self.low or (self.open_low and value == self.low)):
            return False
        return not (self.high is not None and value > self.high)

    def __str__(self) -> str:
        if self.low is not None and self.high is not None:
            low = f"above {self.low:g}, up" if self.open_low else f"{self.low:g}"
            return f"{low} to {self.high:g}"
        if self.low is not None:
            return f"above {self.low:g}" if self.open_low else f"{self.low:g} or more"
        return "any number" if self.high is None else f"{self.high:g} or less"


ANY = Bounds()
POSITIVE = Bounds(0.0, open_low=True)
NOT_NEGATIVE = Bounds(0.0)
PER_CENT = Bounds(0.0, 100.0)
# A set-point above 2 pu is a value in kV that slipped into a per-unit column.
SET_POINT = Bounds(0.0, 2.0, open_low=True)


@dataclass(frozen=True)
class Column:
    """One column of a table.

    ``id`` names the row and is unique in its table (unless ``Table.unique`` is false), ``reference``
    is the id of a row of the table ``refers``, ``text`` is free. A blank cell of a column that is not
    required takes ``default``; a number without default becomes NaN.
    """

    name: str
    kind: ColumnKind
    meaning: str
    required: bool = False
    default: Default = None
    bounds: Bounds = ANY
    unit: str = ""
    choices: tuple[str, ...] = ()
    refers: str = ""


@dataclass(frozen=True)
class Table:
    """One table: its file name without ending (also the sheet of a workbook) and its columns.

    ``optional``: the file may be absent. ``may_be_empty``: it may have a header and no rows.
    ``unique``: no two rows share the id in the first column. ``open_ended``: columns beyond the declared
    ones are allowed and handed on.
    """

    name: str
    meaning: str
    columns: tuple[Column, ...]
    optional: bool = False
    may_be_empty: bool = True
    unique: bool = True
    open_ended: bool = False

    @property
    def key(self) -> Column:
        """The first column, which names the row."""
        return self.columns[0]

    @property
    def names(self) -> tuple[str, ...]:
        """The valid column names in their order."""
        return tuple(column.name for column in self.columns)


@dataclass(frozen=True)
class Key:
    """One key of a TOML file. An absent key takes ``default`` (None: absent)."""

    name: str
    kind: KeyKind
    meaning: str
    required: bool = False
    default: Default = None
    bounds: Bounds = ANY
    unit: str = ""
    choices: tuple[str, ...] = ()


@dataclass(frozen=True)
class Section:
    """One table of ``study.toml``; ``name`` is empty for the keys at the top, ``repeated`` means ``[[name]]``."""

    name: str
    meaning: str
    keys: tuple[Key, ...]
    repeated: bool = False

    @property
    def names(self) -> tuple[str, ...]:
        """The valid keys in their order."""
        return tuple(key.name for key in self.keys)


def nearest(name: str, valid: Iterable[str]) -> str:
    """A remedy for an unknown ``name`` out of a short list: the nearest valid name, else all of them."""
    names = list(valid)
    found = _closest(name, names)
    if found is not None:
        return f"Did you mean '{found}'?"
    return "Valid here: " + ", ".join(names) + "." if names else ""


def nearest_id(name: str, valid: Iterable[str], what: str) -> str:
    """A remedy for an unknown id out of a list that may be long: the nearest id, else where to look."""
    found = _closest(name, list(valid))
    return f"Did you mean '{found}'?" if found is not None else f"Name a {what} that exists."


def _closest(name: str, names: list[str]) -> str | None:
    plain: dict[str, str] = {}
    for valid in names:
        plain.setdefault(valid.casefold(), valid)
    found = difflib.get_close_matches(name.casefold(), list(plain), n=1, cutoff=0.5)
    return plain[found[0]] if found else None
