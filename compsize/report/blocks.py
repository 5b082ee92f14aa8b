"""What a report page is made of, before anything is rendered: words, tables with units, chart data.

A renderer (the web page, a workbook) walks ``Page.sections`` and their blocks and needs nothing else.
Text from the study is always an :class:`Ident` or a :class:`Quote`, never part of a plain string, so that
a renderer can keep it apart from the report's own words whatever its script or its content.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar, Literal

__all__ = [
    "BarRow",
    "Bars",
    "Block",
    "Cell",
    "Column",
    "Curve",
    "CurveChart",
    "CurveCharts",
    "Figure",
    "Figures",
    "Ident",
    "Items",
    "Notice",
    "Page",
    "Pairs",
    "Paragraph",
    "Point",
    "Quote",
    "Section",
    "Table",
    "Tone",
    "Words",
    "plain",
]

Tone = Literal["good", "warn", "bad", "plain"]
ColumnKind = Literal["id", "quote", "text", "number", "verdict"]
"""A name of the study, a sentence that may hold some, the report's own words, a number, yes or no."""


@dataclass(frozen=True)
class Ident:
    """A name the study gives: a case, a bus, a site, an equipment."""

    text: str


@dataclass(frozen=True)
class Quote:
    """A sentence that may contain names of the study, in whatever script."""

    text: str


Piece = str | Ident | Quote
Words = tuple[Piece, ...]


def plain(words: Words) -> str:
    """The words as one string, for a place that can hold nothing else."""
    return "".join(piece if isinstance(piece, str) else piece.text for piece in words)


@dataclass(frozen=True)
class Paragraph:
    type: ClassVar[str] = "paragraph"
    words: Words
    small: bool = False


@dataclass(frozen=True)
class Notice:
    """A paragraph that must not be missed."""

    type: ClassVar[str] = "notice"
    tone: Tone
    words: Words


@dataclass(frozen=True)
class Items:
    """A list, numbered or not. ``lead`` of an item is set apart from its text; it may be empty."""

    type: ClassVar[str] = "items"
    items: tuple[tuple[str, Words], ...]
    numbered: bool = False


@dataclass(frozen=True)
class Pairs:
    """Names and what they stand for; ``title`` may be empty."""

    type: ClassVar[str] = "pairs"
    pairs: tuple[tuple[Words, Words], ...]
    title: str = ""
    compact: bool = False


@dataclass(frozen=True)
class Figure:
    """One key figure: its name, the number as shown, its unit, a remark."""

    label: str
    text: str
    unit: str = ""
    remark: Words = ()


@dataclass(frozen=True)
class Figures:
    type: ClassVar[str] = "figures"
    figures: tuple[Figure, ...]


@dataclass(frozen=True)
class Column:
    """A column of a table. ``group`` is a heading over neighbouring columns; ``decimals`` the fewest shown."""

    key: str
    heading: str
    kind: ColumnKind = "text"
    unit: str = ""
    group: str = ""
    decimals: int = 0


@dataclass(frozen=True)
class Cell:
    """``value`` is unrounded (None: blank), ``text`` what a reader sees of it.

    ``tone`` tells good from bad beside the words, never instead of them. ``parts`` are names of the study
    that stand before ``text``, each apart from the others.
    """

    value: str | float | None
    text: str
    tone: Tone = "plain"
    parts: tuple[str, ...] = ()


@dataclass(frozen=True)
class Table:
    """A table. ``marks`` gives each row a tag (empty: none) that stands beside its first cell."""

    type: ClassVar[str] = "table"
    key: str
    caption: Words
    columns: tuple[Column, ...]
    rows: tuple[tuple[Cell, ...], ...]
    marks: tuple[str, ...] = ()
    total: tuple[Cell, ...] = ()
    notes: tuple[Words, ...] = ()
    basis: tuple[tuple[str, str], ...] = ()
    """What the figures rest on, repeated with each table that needs it."""


@dataclass(frozen=True)
class Point:
    """A marked point of a curve: MW and per-unit voltage."""

    mw: float
    v_pu: float


@dataclass(frozen=True)
class Curve:
    """A nose curve: MW against pu of ``bus``, from the lightest load over the nose to the lower branch."""

    label: str
    after: bool
    bus: str
    mw: tuple[float, ...]
    v_pu: tuple[float, ...]
    nose_index: int
    operating: Point | None
    required: Point | None
    """The point on the upper branch at the required load; None where the curve turns before it."""

    @property
    def nose(self) -> Point:
        return Point(self.mw[self.nose_index], self.v_pu[self.nose_index])


@dataclass(frozen=True)
class CurveChart:
    """The nose curves of one case. ``operating_mw`` and ``required_mw`` are loads, not margins."""

    case: str
    curves: tuple[Curve, ...]
    operating_mw: float
    required_mw: float | None
    description: str
    remarks: tuple[Words, ...] = ()


@dataclass(frozen=True)
class CurveCharts:
    """One chart a case; ``first`` is shown before anybody chooses."""

    type: ClassVar[str] = "curves"
    charts: tuple[CurveChart, ...]
    first: int = 0


@dataclass(frozen=True)
class BarRow:
    """Margins of a case in MW, and as shown; None where no nose was located or there is no such state."""

    case: str
    before: float | None
    after: float | None
    required: float | None
    met: bool
    before_text: str = ""
    after_text: str = ""


@dataclass(frozen=True)
class Bars:
    """Margins of the cases as bars against what is required; the labels name the two states."""

    type: ClassVar[str] = "bars"
    rows: tuple[BarRow, ...]
    before_label: str
    after_label: str
    description: str
    remarks: tuple[Words, ...] = ()

    @property
    def has_before(self) -> bool:
        return bool(self.before_label)

    @property
    def has_after(self) -> bool:
        return bool(self.after_label)


Block = Paragraph | Notice | Items | Pairs | Figures | Table | CurveCharts | Bars


@dataclass(frozen=True)
class Section:
    key: str
    heading: str
    blocks: tuple[Block, ...]


@dataclass(frozen=True)
class Page:
    """A whole report: what it is about, the answer, then the sections in reading order."""

    kind: str
    title: str
    labels: tuple[tuple[str, str], ...]
    tone: Tone
    status: str
    answer: Words
    detail: Words
    sections: tuple[Section, ...]
    colophon: tuple[tuple[str, str], ...]
