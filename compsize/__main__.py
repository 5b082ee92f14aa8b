"""``python -m compsize``: the same program as the command ``compsize``."""

from __future__ import annotations

import sys

from compsize.cli.main import main

if __name__ == "__main__":
    sys.exit(main())
