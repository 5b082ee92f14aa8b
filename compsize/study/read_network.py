"""Reading a network: a folder of tables, a workbook, an IEEE CDF file, or a CGMES folder or zip."""

from __future__ import annotations

import difflib
import os
from dataclasses import dataclass
from pathlib import Path

from compsize.study.build_network import NetworkDraft, build_network, empty_columns
from compsize.study.cdf import draft_cdf
from compsize.study.cgmes import draft_cgmes
from compsize.study.check_network import check_network
from compsize.study.columns import Columns, References, read_columns
from compsize.study.files import Faults, FileReader
from compsize.study.keys import read_keys
from compsize.study.records import NetworkTables
from compsize.study.schema_keys import NETWORK_KEYS
from compsize.study.schema_tables import NETWORK_TABLES
from compsize.study.tables import FolderSource, Source
from compsize.study.workbook import open_workbook

__all__ = ["draft_network", "read_network"]


def read_network(path: str | os.PathLike[str]) -> NetworkTables:
    """Reads and checks a network.

    :param path: a folder of CSV tables, an .xlsx with the same sheets, an IEEE CDF file, or a CGMES
        folder or zip.
    :raises InputError: with every fault of the network at once.
    """
    place = Path(path)
    faults = Faults()
    prefix = "" if place.is_dir() else place.name
    draft = draft_network(place, prefix, FileReader(faults))
    faults.raise_if_any()
    assert draft is not None  # without faults there is a network
    return draft.tables


def draft_network(path: Path, name: str, reader: FileReader) -> NetworkDraft | None:
    """Reads a network, noting faults in ``reader.faults``; None where nothing could be made of it.

    ``name`` is how messages name the folder or file ("" for files of a folder that is not named).
    """
    faults = reader.faults
    prefix = f"{name}/" if name and not name.endswith("/") else name
    if path.is_dir():
        if (
            any(file.suffix.lower() in (".xml", ".zip") for file in path.iterdir())
            and not (path / "buses.csv").exists()
        ):
            return draft_cgmes(path, prefix, reader)
        return _draft_tables(FolderSource(path, prefix, reader), faults)
    if not path.exists():
        remedy = "Name a folder of tables, an .xlsx, an IEEE CDF file, or a CGMES folder or zip."
        faults.add(name or str(path), "there is no such file or folder.", remedy)
        return None
    ending = path.suffix.lower()
    if ending in (".xlsx", ".xlsm"):
        book = open_workbook(path, name, reader, {"network", *NETWORK_TABLES})
        return None if book is None else _draft_tables(book, faults)
    if ending == ".zip":
        return draft_cgmes(path, name, reader)
    if ending in (".xls", ".ods", ".csv", ".toml", ".xml"):
        remedy = "Name a folder of tables, an .xlsx, an IEEE CDF file, or a CGMES folder or zip."
        faults.add(name, f"a network cannot be read from a {ending} file.", remedy)
        return None
    return draft_cdf(path, name, reader)


@dataclass(frozen=True)
class _Table:
    columns: Columns
    readable: bool


def _draft_tables(source: Source, faults: Faults) -> NetworkDraft:
    file, content = source.keys("network")
    values = read_keys(
        content or {},
        NETWORK_KEYS,
        file,
        "",
        faults if content is not None else Faults(),
        texts_only=not isinstance(source, FolderSource),
    )
    references = References()
    there = source.names()
    read: dict[str, _Table] = {}
    for name in NETWORK_TABLES:  # buses come first, the others refer to them
        read[name] = _read_table(source, name, there, references, faults)
        if read[name].readable:
            references.ids[name] = frozenset(read[name].columns.texts[NETWORK_TABLES[name].key.name]) - {""}
    tables = build_network(
        {name: table.columns for name, table in read.items()},
        values.number("base_mva") or 100.0,
        values.number("frequency_hz") or 50.0,
        values.text("title"),
        values.text("source"),
    )
    unreadable = frozenset(name for name, table in read.items() if not table.readable)
    draft = NetworkDraft(tables, {name: table.columns for name, table in read.items()}, unreadable)
    check_network(draft, faults)
    return draft


def _read_table(source: Source, name: str, there: tuple[str, ...], references: References, faults: Faults) -> _Table:
    table = NETWORK_TABLES[name]
    label = source.label(name)
    before = len(faults)
    raw = source.table(name)
    if raw is not None:
        columns = read_columns(raw, table, references, faults)
        return _Table(columns, table.key.name in raw.header)
    if len(faults) == before and name not in there:
        others = [other for other in there if other not in NETWORK_TABLES]
        alike = difflib.get_close_matches(name, [other.lower() for other in others], n=1, cutoff=0.7)
        if alike:
            found = next(other for other in others if other.lower() == alike[0])
            faults.add(label, "the table is missing.", f"Rename '{found}' if that is the table.")
        elif not table.optional:
            faults.add(label, "the required table is missing.", f"Add it: {table.meaning}.")
    return _Table(empty_columns(table, label), table.optional and len(faults) == before)
