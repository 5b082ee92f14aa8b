"""A valid study to spoil, and where the open data lie beside the repository."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import pytest
from study_helpers import Spoiler

SHARED = Path(__file__).resolve().parents[3] / "shared"


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
