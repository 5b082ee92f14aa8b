"""Reading files, keeping their hashes, collecting faults."""

from __future__ import annotations

import hashlib
import re
import tomllib
from pathlib import Path

from compsize.errors import Fault, InputError

__all__ = ["Faults", "FileReader", "decode", "parse_toml"]

_TEXT_ENDINGS = {".csv", ".toml", ".txt", ".cdf", ".xml", ""}


class Faults(list[Fault]):
    """A growing list of faults, so that one run reports all of them."""

    def add(self, file: str, message: str, remedy: str = "", row: int | None = None, column: str | None = None) -> None:
        """Notes one fault."""
        self.append(Fault(file, message, remedy, row, column))

    def raise_if_any(self) -> None:
        """Raises InputError with every fault noted so far."""
        if self:
            raise InputError(self)


class FileReader:
    """Reads whole files and remembers name and SHA-256 of each, in reading order.

    Names are as the user would write them relative to the study. Line endings of text do not enter
    the hash, so that a study keeps its hash when it passes between operating systems.
    """

    def __init__(self, faults: Faults) -> None:
        self.faults = faults
        self.read: dict[str, str] = {}

    def bytes_of(self, path: Path, name: str) -> bytes | None:
        """Content of a file; None, and a fault, where it cannot be read."""
        try:
            content = path.read_bytes()
        except OSError as error:
            self.faults.add(name, _why_unreadable(path, error), "Check the name and the rights of the file.")
            return None
        self.note(name, content)
        return content

    def note(self, name: str, content: bytes) -> None:
        """Remembers the hash of a file that was read."""
        if Path(name).suffix.lower() in _TEXT_ENDINGS:
            content = content.removeprefix(b"\xef\xbb\xbf").replace(b"\r\n", b"\n").replace(b"\r", b"\n")
        self.read[name] = hashlib.sha256(content).hexdigest()

    def total(self) -> str:
        """SHA-256 over the names and hashes of all files read, whatever their order."""
        lines = "".join(f"{name}\0{digest}\n" for name, digest in sorted(self.read.items()))
        return hashlib.sha256(lines.encode()).hexdigest()


def _why_unreadable(path: Path, error: OSError) -> str:
    if isinstance(error, FileNotFoundError):
        return "the file does not exist."
    if path.is_dir():
        return "this is a folder, not a file."
    return f"the file cannot be read ({error.strerror or type(error).__name__})."


def decode(content: bytes, name: str, faults: Faults) -> str | None:
    """Text of a UTF-8 file, with or without byte-order mark; None, and a fault, where it is not UTF-8."""
    remedy = "Save it as UTF-8."
    if content[:2] in (b"\xff\xfe", b"\xfe\xff"):
        faults.add(name, "the file is encoded in UTF-16.", remedy)
        return None
    try:
        text = content.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        row = content[: error.start].count(b"\n") + 1
        faults.add(name, "the file is not encoded in UTF-8.", remedy, row=row)
        return None
    if "\0" in text:
        faults.add(name, "the file holds zero bytes, so it is not a text file.", remedy)
        return None
    return text


def parse_toml(text: str, name: str, faults: Faults) -> dict[str, object] | None:
    """The keys of a TOML text; None, and a fault with the line, where its syntax is wrong."""
    try:
        return tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        message = str(error)
        found = re.search(r" ?\(at line (\d+), column \d+\)", message)
        # An error at the end of the document carries no line of its own.
        row = int(found.group(1)) if found else text.count("\n") + 1
        if found:
            message = message.replace(found.group(0), "")
        message = message.replace(" (at end of document)", " at the end of the file")
        faults.add(name, f"the TOML syntax is wrong: {message}.", "Text stands in double quotes.", row=row)
        return None
