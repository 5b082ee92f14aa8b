"""The progress line."""

from __future__ import annotations

import io

import pytest

from compsize.cli.progress import ProgressLine, progress, time_left


class Terminal(io.StringIO):
    """A stream that says it is a terminal."""

    def isatty(self) -> bool:
        return True


class Clock:
    """A clock that stands until it is moved."""

    def __init__(self) -> None:
        self.now = 1000.0

    def __call__(self) -> float:
        return self.now


def test_a_terminal_has_one_line_that_renews_itself() -> None:
    """On a terminal every message overwrites the last, and the end leaves nothing."""
    stream, clock = Terminal(), Clock()
    line = ProgressLine(stream, clock)
    line("cases", 1, 4)
    clock.now += 1.0
    line("cases", 2, 4)
    assert stream.getvalue() == "\rcases: 1 of 4\x1b[K\rcases: 2 of 4\x1b[K"
    line.close()
    assert stream.getvalue().endswith("\r\x1b[K")
    assert "\n" not in stream.getvalue()


def test_a_terminal_is_not_flooded() -> None:
    """A thousand messages within a moment are one line."""
    stream = Terminal()
    line = ProgressLine(stream, Clock())
    for done in range(1000):
        line("cases", done, 1000)
    assert stream.getvalue().count("\r") == 1


def test_time_left_is_estimated_from_the_pace() -> None:
    """25 cases in 10 s leave 30 s for 74 more, whatever stages before and the first case took."""
    stream, clock = Terminal(), Clock()
    line = ProgressLine(stream, clock)
    line("search", 0, None)
    clock.now += 500.0
    line("cases", 0, 100)
    clock.now += 60.0
    line("cases", 1, 100)
    clock.now += 10.0
    line("cases", 26, 100)
    assert stream.getvalue().endswith("\rcases: 26 of 100, about 30 s left\x1b[K")


def test_no_estimate_without_a_total() -> None:
    """Where it is not known how much there is, no end is promised."""
    stream, clock = Terminal(), Clock()
    line = ProgressLine(stream, clock)
    line("search", 0, None)
    clock.now += 60.0
    line("search", 1234, None)
    assert stream.getvalue().endswith("\rsearch: 1,234\x1b[K")


def test_a_long_line_does_not_wrap(monkeypatch: pytest.MonkeyPatch) -> None:
    """A line is cut to the terminal, since one that wraps cannot be overwritten."""
    monkeypatch.setenv("COLUMNS", "20")
    stream = Terminal()
    ProgressLine(stream, Clock())("a stage with a long name", 1, 2)
    assert stream.getvalue() == "\ra stage with a long\x1b[K"


def test_a_file_gets_a_plain_line_every_ten_seconds() -> None:
    """Not on a terminal: nothing in the first ten seconds, then at most one line in ten."""
    stream, clock = io.StringIO(), Clock()
    line = ProgressLine(stream, clock)
    for second in range(31):
        clock.now = 1000.0 + second
        line("cases", second, 60)
    line.close()
    lines = stream.getvalue().splitlines()
    assert [words.split(",")[0] for words in lines] == ["cases: 10 of 60", "cases: 20 of 60", "cases: 30 of 60"]
    assert "\r" not in stream.getvalue()


def test_quiet_means_no_line() -> None:
    """With --quiet the run is told to report no progress at all."""
    with progress(quiet=True) as line:
        assert line is None


@pytest.mark.parametrize(
    ("seconds", "words"),
    [(0.0, "about 5 s left"), (42.0, "about 45 s left"), (61.0, "about 2 min left"), (7201.0, "about 3 h left")],
)
def test_time_left_is_rounded_up(seconds: float, words: str) -> None:
    """An estimate is rounded up to a unit that suits it."""
    assert time_left(seconds) == words
