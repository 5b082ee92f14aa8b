"""What the program says: answers on standard output, everything else on standard error."""

from __future__ import annotations

import json
import os
import sys
from collections.abc import Mapping
from typing import Any, TextIO

__all__ = ["answer", "answer_json", "printable", "tell"]


def answer(text: str) -> None:
    """Print lines of the answer."""
    _print(text, sys.stdout)


def answer_json(content: str | Mapping[str, Any]) -> None:
    """Print the answer as JSON: a text that is JSON already, or keys and plain values."""
    text = content if isinstance(content, str) else json.dumps(content, ensure_ascii=False, indent=1)
    stream = sys.stdout
    encoding = (getattr(stream, "encoding", None) or "utf-8").lower().replace("-", "")
    if encoding != "utf8":
        # Escapes keep every character where the stream cannot carry it.
        text = json.dumps(json.loads(text), ensure_ascii=True, indent=1)
    _print(text.rstrip("\n"), stream)


def tell(text: str) -> None:
    """Print lines that are not part of the answer: a fault, a notice."""
    _print(text, sys.stderr)


def printable(text: str) -> str:
    """``text`` on one line and without characters that would steer a terminal."""
    return "".join(character if character.isprintable() else " " for character in text)


def _print(text: str, stream: TextIO) -> None:
    encoding = getattr(stream, "encoding", None) or "utf-8"
    try:
        stream.write(text.encode(encoding, "replace").decode(encoding) + "\n")
        stream.flush()
    except BrokenPipeError:
        # Whoever read our output has gone; the result and the exit code stand, and the flush at exit stays quiet.
        os.dup2(os.open(os.devnull, os.O_WRONLY), stream.fileno())
