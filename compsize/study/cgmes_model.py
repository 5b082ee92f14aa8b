"""The objects of a CGMES set: every XML file of a folder or zip, merged by identifier.

CGMES 2.4.15 (IEC TS 61970-600) spreads one model over profiles: equipment (EQ), steady-state hypothesis
(SSH), topology (TP), state variables (SV) and the boundary's EQ and TP. An object has one identifier in
all of them, so merging by identifier gives each object all its attributes. Attributes are kept under
their last name ("p" of "RotatingMachine.p"), which is unique within an object.
"""

from __future__ import annotations

import io
import zipfile
import zlib
from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path
from xml.etree import ElementTree

from compsize.study.columns import as_number
from compsize.study.files import Faults, FileReader

__all__ = ["Model", "Thing", "read_model"]

_RDF = "{http://www.w3.org/1999/02/22-rdf-syntax-ns#}"
_CIM = "{http://iec.ch/TC57/2013/CIM-schema-cim16#}"
_MOST_BYTES = 2**31
LARGEST = 1e12
"""Largest number, of any unit, that an attribute may have."""
SMALLEST_KV = 1e-3
"""Lowest rated or nominal voltage [kV]."""


@dataclass
class Thing:
    """One object: its class, identifier, and attributes (references as identifiers)."""

    kind: str
    id: str
    values: dict[str, str] = field(default_factory=dict)

    def text(self, key: str) -> str:
        """An attribute as it stands, empty where it is absent."""
        return self.values.get(key, "")

    @property
    def name(self) -> str:
        """The object's name, else its identifier."""
        return self.values.get("name", "").strip() or self.id


@dataclass
class Model:
    """All objects of a set; ``label`` names it in messages."""

    label: str
    faults: Faults
    things: dict[str, Thing] = field(default_factory=dict)
    kinds: dict[str, list[Thing]] = field(default_factory=dict)

    def of(self, *kinds: str) -> Iterator[Thing]:
        """The objects of some classes, in the order of the files."""
        for kind in kinds:
            yield from self.kinds.get(kind, ())

    def link(self, thing: Thing | None, key: str) -> Thing | None:
        """The object that an attribute refers to."""
        return None if thing is None else self.things.get(thing.text(key))

    def number(self, thing: Thing, key: str, default: float = 0.0) -> float:
        """A number, ``default`` where it is absent; a fault where it is not one."""
        text = thing.text(key)
        if not text:
            return default
        value = as_number(text)
        if value is None:
            self.fault(thing, f"{key} is '{text}', which is not a number.", "Correct the file.")
            return default
        if abs(value) > LARGEST:
            self.fault(thing, f"{key} is {text}, which is too large to be meant.", "Correct the file.")
            return default
        return value

    def flag(self, thing: Thing, key: str, default: bool) -> bool:
        """A true or false, ``default`` where it is absent."""
        return {"true": True, "false": False}.get(thing.text(key).lower(), default)

    def fault(self, thing: Thing, message: str, remedy: str) -> None:
        """Notes a fault of one object."""
        self.faults.add(f"{self.label}, {thing.kind} '{thing.name}'", message, remedy)

    def index(self) -> None:
        """Sorts the objects by class."""
        self.kinds.clear()
        for thing in self.things.values():
            self.kinds.setdefault(thing.kind, []).append(thing)


def read_model(path: Path, label: str, reader: FileReader) -> Model | None:
    """Reads every XML file of a folder or zip (also zips within it); None, and a fault, where there is none."""
    model = Model(label.rstrip("/") or path.name, reader.faults)
    count = 0
    before = len(reader.faults)
    for name, content in _contents(path, label, reader):
        count += 1
        _merge(model, name, content)
    if len(reader.faults) > before:
        return None
    model.index()
    for kind, words in (
        ("ACLineSegment PowerTransformer", "equipment (EQ)"),
        ("TopologicalNode", "topology (TP)"),
    ):
        if not any(model.kinds.get(name) for name in kind.split()):
            remedy = "Give the EQ, SSH and TP files of a CGMES 2.4.15 set, with SV and boundary where there are some."
            reader.faults.add(model.label, f"none of the {count} XML files holds {words}.", remedy)
    if not any(thing.text("connected") for thing in model.of("Terminal")):
        remedy = "Give the SSH file too: it holds what is in service and what the loads are."
        reader.faults.add(model.label, "no file holds the steady-state hypothesis (SSH).", remedy)
    return None if len(reader.faults) > before else model


def _contents(path: Path, label: str, reader: FileReader) -> Iterator[tuple[str, bytes]]:
    if path.is_dir():
        for file in sorted(path.iterdir()):
            ending = file.suffix.lower()
            if ending not in (".xml", ".zip"):
                continue
            content = reader.bytes_of(file, f"{label}{file.name}")
            if content is not None and ending == ".xml":
                yield f"{label}{file.name}", content
            elif content is not None:
                yield from _unzip(content, f"{label}{file.name}", reader, depth=0)
        return
    content = reader.bytes_of(path, label)
    if content is not None:
        yield from _unzip(content, label, reader, depth=0)


def _unzip(content: bytes, label: str, reader: FileReader, depth: int) -> Iterator[tuple[str, bytes]]:
    try:
        with zipfile.ZipFile(io.BytesIO(content)) as bundle:
            infos = sorted(bundle.infolist(), key=lambda info: info.filename)
            if sum(info.file_size for info in infos) > _MOST_BYTES:
                reader.faults.add(label, "the zip holds more than 2 GB.", "Unpack it into a folder.")
                return
            for info in infos:
                inside = info.filename.lower()
                if inside.endswith(".xml"):
                    yield f"{label}, {info.filename}", bundle.read(info)
                elif inside.endswith(".zip") and depth < 2:
                    yield from _unzip(bundle.read(info), f"{label}, {info.filename}", reader, depth + 1)
    except (zipfile.BadZipFile, zlib.error, NotImplementedError, RuntimeError, OSError, EOFError, ValueError) as why:
        reader.faults.add(label, f"the zip cannot be read ({type(why).__name__}).", "Pack the XML files again.")


def _merge(model: Model, name: str, content: bytes) -> None:
    try:
        root = ElementTree.fromstring(content)
    except (ElementTree.ParseError, LookupError, ValueError) as error:
        row = getattr(error, "position", (None,))[0]
        model.faults.add(name, f"the XML syntax is wrong ({error}).", "Export the file again.", row=row)
        return
    if root.tag != f"{_RDF}RDF" or any("CIM100" in child.tag for child in root):
        remedy = "Give the files of a CGMES 2.4.15 set."
        model.faults.add(name, "this is not a CGMES 2.4.15 file.", remedy)
        return
    for element in root:
        if not element.tag.startswith(_CIM):
            continue
        key = element.get(f"{_RDF}ID") or element.get(f"{_RDF}about") or ""
        thing = model.things.setdefault(_plain(key), Thing(element.tag.removeprefix(_CIM), _plain(key)))
        for child in element:
            reference = child.get(f"{_RDF}resource")
            attribute = child.tag.rsplit("}", 1)[-1].rsplit(".", 1)[-1]
            if reference is None:
                thing.values[attribute] = (child.text or "").strip()
            elif reference.startswith(("#", "urn:uuid:")):
                thing.values[attribute] = _plain(reference)
            else:  # a choice: http://...#Kind.value
                thing.values[attribute] = reference.rsplit("#", 1)[-1].rsplit(".", 1)[-1]


def _plain(identifier: str) -> str:
    return identifier.removeprefix("#").removeprefix("urn:uuid:").removeprefix("_")
