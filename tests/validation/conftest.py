"""The builders of small networks and studies of other tests serve these tests too."""

from __future__ import annotations

import sys
from pathlib import Path

for folder in ("verify", "nose", "margin", "sizing"):
    path = str(Path(__file__).parents[1] / folder)
    if path not in sys.path:
        sys.path.append(path)
