"""The one tree of errors.

::

    CompsizeError                 every error a caller may want to catch
    |- InputError                 faults in files the user wrote, all of them at once (exit code 1)
    |- OutputError                a result could not be written, or would overwrite one (exit code 1)
    |- UsageError                 a call or command line that makes no sense (exit code 2)
    `- InternalError              a fault of this program (exit code 70)

Expected outcomes (a requirement that cannot be met, a search stopped by a limit, an outage without
a solution) are results, never exceptions.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

__all__ = ["CompsizeError", "Fault", "InputError", "InternalError", "OutputError", "UsageError"]


@dataclass(frozen=True)
class Fault:
    """One fault of the input: where it is, what is wrong, and what to do about it.

    ``row`` is the number a spreadsheet or editor shows: the header is row 1.
    """

    file: str
    message: str
    remedy: str = ""
    row: int | None = None
    column: str | None = None

    def __str__(self) -> str:
        where = self.file
        if self.row is not None:
            where += f", row {self.row}"
        if self.column is not None:
            where += f", {self.column}"
        text = f"{where}: {self.message}"
        return f"{text} {self.remedy}" if self.remedy else text


class CompsizeError(Exception):
    """Base of every error this package raises on purpose."""


class InputError(CompsizeError):
    """The study or a file it names has faults; ``faults`` holds all of them."""

    def __init__(self, faults: Iterable[Fault]) -> None:
        self.faults = tuple(faults)
        head = "1 fault in the input" if len(self.faults) == 1 else f"{len(self.faults)} faults in the input"
        super().__init__("\n".join([f"{head}:", *(f"  {fault}" for fault in self.faults)]))


class OutputError(CompsizeError):
    """A result could not be written where it was asked for."""


class UsageError(CompsizeError):
    """The arguments of a call contradict each other or name something unknown."""


class InternalError(CompsizeError):
    """A check inside the program failed; the result would not have been trustworthy."""
