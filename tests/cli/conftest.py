"""The two-bus study, and the invented results of the report's tests."""

from __future__ import annotations

import sys
from pathlib import Path

import pytest
from cli_helpers import two_bus_study

sys.path.append(str(Path(__file__).resolve().parents[1] / "report"))


@pytest.fixture
def two_buses(tmp_path: Path) -> Path:
    """A fresh two-bus study."""
    return two_bus_study(tmp_path / "two")
