"""A valid study to spoil, and where the open data lie beside the repository."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import pytest

from compsize.errors import Fault, InputError
from compsize.study.new import write_starter
from compsize.study.read_study import read_study

SHARED = Path(__file__).resolve().parents[3] / "shared"


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


@pytest.fixture
def study(tmp_path: Path) -> Spoiler:
    """A fresh starter study."""
    return Spoiler(tmp_path / "study")


@pytest.fixture
def shared() -> Callable[[str], Path]:
    """Path of open data beside the repository; the test is skipped where they are absent."""

    def find(name: str) -> Path:
        path = SHARED / name
        if not path.exists():
            pytest.skip(f"the open data ../shared/{name} are not here")
        return path

    return find
