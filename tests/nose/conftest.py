"""The small networks of the tests of the second opinion serve these tests too."""

from __future__ import annotations

import sys
from pathlib import Path

sys.path.append(str(Path(__file__).parents[1] / "verify"))
