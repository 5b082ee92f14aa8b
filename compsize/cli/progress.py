"""How far a long run is: one line on a terminal that renews itself, else a plain line now and then."""

from __future__ import annotations

import math
import shutil
import sys
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from typing import TextIO

from compsize.cli.say import printable

__all__ = ["ProgressLine", "progress", "time_left"]

RENEW_SECONDS = 0.1
PLAIN_SECONDS = 10.0
SETTLED_SECONDS = 2.0
"""No time left is estimated before so much of a stage has passed."""


def time_left(seconds: float) -> str:
    """A duration in words, rounded up: an estimate should not run out before the work does."""
    if seconds < 60.0:
        return f"about {max(5, 5 * math.ceil(seconds / 5.0))} s left"
    if seconds < 3600.0:
        return f"about {math.ceil(seconds / 60.0)} min left"
    return f"about {math.ceil(seconds / 3600.0)} h left"


class ProgressLine:
    """Told a stage, how much is done and of how much (None: not known); may be called from any thread."""

    def __init__(self, stream: TextIO, clock: Callable[[], float] = time.monotonic) -> None:
        self._stream = stream
        self._clock = clock
        self._terminal = stream.isatty()
        self._lock = threading.Lock()
        self._stage = ""
        self._stage_began = 0.0
        self._done_before = 0
        self._said = -math.inf if self._terminal else clock()
        self._shown = False

    def __call__(self, stage: str, done: int, total: int | None) -> None:
        with self._lock:
            now = self._clock()
            # The first of a stage may compile or prepare; the pace is measured from its end.
            if stage != self._stage or done < self._done_before or (done > 0 and self._done_before == 0):
                self._stage, self._stage_began, self._done_before = stage, now, done
            if now - self._said < (RENEW_SECONDS if self._terminal else PLAIN_SECONDS):
                return
            self._said = now
            self._show(self._words(stage, done, total, now))

    def _words(self, stage: str, done: int, total: int | None, now: float) -> str:
        words = f"{printable(stage)}: {done:,}" + (f" of {total:,}" if total is not None else "")
        passed, advanced = now - self._stage_began, done - self._done_before
        if total is not None and passed >= SETTLED_SECONDS and advanced > 0 and total > done:
            words += f", {time_left(passed / advanced * (total - done))}"
        return words

    def _show(self, words: str) -> None:
        if self._terminal:
            room = shutil.get_terminal_size().columns - 1
            self._stream.write(f"\r{words[:room]}\x1b[K")
            self._shown = True
        else:
            self._stream.write(words + "\n")
        self._stream.flush()

    def close(self) -> None:
        """Takes the line off the terminal."""
        with self._lock:
            if self._shown:
                self._stream.write("\r\x1b[K")
                self._stream.flush()
                self._shown = False


@contextmanager
def progress(quiet: bool) -> Iterator[ProgressLine | None]:
    """A progress line on standard error for as long as the run lasts; None where it should be quiet."""
    if quiet:
        yield None
        return
    line = ProgressLine(sys.stderr)
    try:
        yield line
    finally:
        line.close()
