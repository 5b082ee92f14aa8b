"""Writing studies: the starter of ``compsize new`` and the tables of a network."""

from __future__ import annotations

import csv
import io
import math
import os
import shutil
from collections.abc import Mapping
from importlib import resources
from importlib.resources.abc import Traversable
from pathlib import Path

import numpy as np

from compsize.errors import OutputError
from compsize.study.records import NetworkTables
from compsize.study.schema import Column, Table
from compsize.study.schema_tables import NETWORK_TABLES

__all__ = ["write_network", "write_starter"]


def write_starter(folder: str | os.PathLike[str]) -> Path:
    """Writes the starter study, a small network with candidates that passes every check.

    :returns: the folder.
    :raises OutputError: where the folder holds anything, or cannot be written.
    """
    place = Path(folder)
    _write_all(place, _files_of(resources.files("compsize.study").joinpath("starter")), overwrite=False)
    return place


def write_network(tables: NetworkTables, folder: str | os.PathLike[str], *, overwrite: bool = False) -> Path:
    """Writes a network as a folder of tables; reading it again gives equal arrays, bit for bit.

    Columns of which every cell would be the default are left out, and so are tables without rows that may
    be absent. With ``overwrite`` the network tables of the folder are replaced and other files stay.

    :returns: the folder.
    :raises OutputError: where the folder holds anything and ``overwrite`` is false, or cannot be written.
    """
    place = Path(folder)
    files = {"network.toml": _network_toml(tables)}
    for name, table in NETWORK_TABLES.items():
        text = _csv_of(table, getattr(tables, name))
        if text is not None:
            files[f"{name}.csv"] = text
    _write_all(place, {name: text.encode() for name, text in files.items()}, overwrite)
    return place


def _files_of(source: Traversable, prefix: str = "") -> dict[str, bytes]:
    found: dict[str, bytes] = {}
    for entry in sorted(source.iterdir(), key=lambda entry: entry.name):
        if entry.is_dir():
            found |= _files_of(entry, f"{prefix}{entry.name}/")
        elif entry.name.endswith((".toml", ".csv")):
            found[prefix + entry.name] = entry.read_bytes()
    return found


def _write_all(folder: Path, files: Mapping[str, bytes], overwrite: bool) -> None:
    """Writes all files or none: beside the folder first, then by renaming."""
    target = folder.absolute()
    partial = target.with_name(f".{target.name}.{os.getpid()}.partial")
    try:
        if target.exists() and not target.is_dir():
            raise OutputError(f"'{folder}' is a file. Name a folder.")
        used = target.exists() and any(target.iterdir())
        if used and not overwrite:
            raise OutputError(f"the folder '{folder}' is not empty. Name a new one.")
        try:
            for name, content in files.items():
                path = partial / name
                path.parent.mkdir(parents=True, exist_ok=True)
                path.write_bytes(content)
            if used:
                _replace(target, partial, files)
            else:
                if target.exists():
                    target.rmdir()
                partial.rename(target)
        finally:
            shutil.rmtree(partial, ignore_errors=True)
    except OSError as error:
        raise OutputError(f"'{folder}' cannot be written ({error.strerror or type(error).__name__}).") from error


def _replace(target: Path, partial: Path, files: Mapping[str, bytes]) -> None:
    for name in files:
        os.replace(partial / name, target / name)
    # A table of the network that stood here before would be read as part of the new one.
    for table in NETWORK_TABLES:
        if f"{table}.csv" not in files:
            (target / f"{table}.csv").unlink(missing_ok=True)


def _network_toml(tables: NetworkTables) -> str:
    lines = []
    if tables.title:
        lines.append(f"title = {_toml_text(tables.title)}")
    if tables.source:
        lines.append(f"source = {_toml_text(tables.source)}")
    lines.append(f"base_mva = {float(tables.base_mva)!r}")
    lines.append(f"frequency_hz = {float(tables.frequency_hz)!r}")
    return "\n".join(lines) + "\n"


def _toml_text(text: str) -> str:
    escaped = text.replace("\\", "\\\\").replace('"', '\\"')
    return '"' + "".join(letter if letter.isprintable() else f"\\U{ord(letter):08x}" for letter in escaped) + '"'


def _csv_of(table: Table, record: object) -> str | None:
    """The table as CSV; None where it has no rows and may be absent."""
    columns = [(column, getattr(record, column.name)) for column in table.columns]
    if len(columns[0][1]) == 0 and table.optional:
        return None
    kept = [(column, _cells(column, values)) for column, values in columns]
    kept = [(column, cells) for column, cells in kept if column.required or any(cells)]
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow([column.name for column, _ in kept])
    writer.writerows(zip(*(cells for _, cells in kept), strict=True))
    return out.getvalue()


def _cells(column: Column, values: object) -> list[str]:
    """Text of a column; the default is a blank cell."""
    if isinstance(values, np.ndarray):
        if column.kind == "yes-no":
            words = ("off", "on") if column.name == "status" else ("no", "yes")
            texts = [words[int(value)] for value in values]
            return texts if any(bool(value) != column.default for value in values) else [""] * len(values)
        default = math.nan if column.default is None else float(column.default)
        return ["" if _same(value, default) and not column.required else _number(value) for value in values.tolist()]
    assert isinstance(values, tuple)
    return list(values)


def _same(value: float, other: float) -> bool:
    """Equal bit for bit, so that a blank cell stands for nothing but the default."""
    return (math.isnan(value) and math.isnan(other)) or (
        value == other and math.copysign(1.0, value) == math.copysign(1.0, other)
    )


def _number(value: float) -> str:
    """The shortest text that reads back as the same number."""
    text = repr(value)
    return text.removesuffix(".0")
