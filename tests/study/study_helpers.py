"""Helpers of the tests of reading: a study to spoil, and the comparison of two networks."""

from __future__ import annotations

from pathlib import Path

from compsize.errors import Fault, InputError
from compsize.study.new import write_starter
from compsize.study.read_study import read_study
from compsize.study.records import NetworkTables
from compsize.study.schema_tables import NETWORK_TABLES


class Spoiler:
    """A starter study in a folder whose files can be changed line by line."""

    def __init__(self, folder: Path) -> None:
        self.folder = write_starter(folder)

    def path(self, name: str) -> Path:
        """A file of the study."""
        return self.folder / name

    def swap(self, name: str, old: str, new: str) -> None:
        """Replaces the first ``old``, which must be there, by ``new``."""
        text = self.path(name).read_text(encoding="utf-8")
        assert old in text, f"{old!r} is not in {name}"
        self.path(name).write_text(text.replace(old, new, 1), encoding="utf-8")

    def write(self, name: str, text: str) -> None:
        """Writes a file."""
        self.path(name).write_text(text, encoding="utf-8")

    def append(self, name: str, text: str) -> None:
        """Adds lines to a file."""
        self.path(name).write_text(self.path(name).read_text(encoding="utf-8") + text, encoding="utf-8")

    def faults(self) -> list[Fault]:
        """All faults of the study; empty where it is right."""
        try:
            read_study(self.folder)
        except InputError as error:
            return list(error.faults)
        return []

    def only_fault(self) -> Fault:
        """The one fault of the study."""
        faults = self.faults()
        assert len(faults) == 1, [str(fault) for fault in faults]
        return faults[0]


def same(one: NetworkTables, other: NetworkTables) -> None:
    """Fails where any cell of two networks differs, NaN and signs of zero included."""
    for key in ("base_mva", "frequency_hz", "title", "source"):
        assert getattr(one, key) == getattr(other, key)
    for name in NETWORK_TABLES:
        for column, values in vars(getattr(one, name)).items():
            found = getattr(getattr(other, name), column)
            if isinstance(values, tuple):
                assert found == values, (name, column)
            else:
                assert found.tobytes() == values.tobytes(), (name, column)
