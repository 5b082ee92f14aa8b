"""Exit codes, the same for every command."""

from __future__ import annotations

from typing import Final

__all__ = ["DONE", "INPUT", "INTERNAL", "INTERRUPTED", "STOPPED", "UNMET", "USAGE"]

DONE: Final = 0
"""Done; the requirement is met."""
INPUT: Final = 1
"""A fault in the input, or a file that cannot be read or written."""
USAGE: Final = 2
"""A command line that makes no sense."""
UNMET: Final = 3
"""Finished; the requirement cannot be met, or is not met."""
STOPPED: Final = 4
"""Stopped by a limit, or the proof is incomplete."""
INTERNAL: Final = 70
"""A fault of this program."""
INTERRUPTED: Final = 130
"""Stopped from the keyboard; nothing was written."""
