"""What the readers of the parts of a study share: folder, faults, network, and reading of a named table."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path, PurePosixPath, PureWindowsPath

from compsize.study.build_network import NetworkDraft
from compsize.study.columns import Columns, References, read_columns
from compsize.study.files import Faults, FileReader
from compsize.study.schema import Table
from compsize.study.tables import parse_csv

__all__ = ["Context", "resolve"]


@dataclass
class Context:
    """The study being read. ``draft`` is None where nothing could be made of the network."""

    folder: Path
    file: str
    """Name of the TOML file in messages."""
    reader: FileReader
    draft: NetworkDraft | None = None

    @property
    def faults(self) -> Faults:
        """All faults of the study so far."""
        return self.reader.faults

    def fault(self, key: str, message: str, remedy: str = "") -> None:
        """Notes a fault of a key of the TOML file."""
        self.faults.add(self.file, message, remedy, column=key)

    def ids(self, table: str) -> tuple[str, ...] | None:
        """The ids of a network table, None where they are not known and nothing can be said of references."""
        return None if self.draft is None else self.draft.ids(table)

    def references(self) -> References:
        """What references to the network may name."""
        known = References()
        for table in ("buses", "loads", "branches", "generators", "shunts", "svcs"):
            ids = self.ids(table)
            if ids is not None:
                known.ids[table] = frozenset(ids) - {""}
        return known

    def table(self, key: str, name: str, table: Table, references: References) -> Columns | None:
        """Reads the table that the key ``key`` names; None, with faults, where nothing could be made of it."""
        path = resolve(self, key, name, sibling=False)
        if path is None:
            return None
        if not path.exists():
            self.fault(key, f"the file '{name}' does not exist.", "Correct the name or add the file.")
            return None
        shown = PurePosixPath(name.replace("\\", "/")).as_posix()
        content = self.reader.bytes_of(path, shown)
        raw = None if content is None else parse_csv(content, shown, self.faults)
        return None if raw is None else read_columns(raw, table, references, self.faults)


def resolve(context: Context, key: str, name: str, sibling: bool) -> Path | None:
    """The file or folder a key names; None, and a fault, where it lies outside.

    Paths are relative and stay inside the study folder; with ``sibling`` one step up is allowed, to
    name a folder or file beside the study folder. Links are followed before this is judged.
    """
    plain = name.replace("\\", "/")
    remedy = "Write a path relative to and inside the study folder."
    if sibling:
        remedy = "Write a path inside the study folder, or ../NAME for one beside it."
    if PurePosixPath(plain).is_absolute() or PureWindowsPath(name).drive or PureWindowsPath(name).root:
        context.fault(key, f"'{name}' is not a relative path.", remedy)
        return None
    parts: list[str] = []
    for part in PurePosixPath(plain).parts:
        if part == ".." and parts and parts[-1] != "..":
            parts.pop()
        else:
            parts.append(part)
    up = parts.count("..")
    allowed = context.folder.parent if sibling else context.folder
    path = context.folder.joinpath(*parts)
    escapes = up > (1 if sibling else 0) or (up == 1 and len(parts) == 1)
    if escapes or not path.resolve().is_relative_to(allowed.resolve()):
        context.fault(key, f"'{name}' leaves the study folder.", remedy)
        return None
    return path
