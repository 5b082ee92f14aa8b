"""Reading a whole study: ``study.toml`` and every file it names, all faults at once."""

from __future__ import annotations

import os
from collections.abc import Mapping
from pathlib import Path, PurePosixPath

from compsize.study.context import Context, resolve
from compsize.study.files import Faults, FileReader, decode, parse_toml
from compsize.study.keys import Values, read_keys
from compsize.study.read_network import draft_network
from compsize.study.records import Study
from compsize.study.schema import nearest
from compsize.study.schema_keys import STUDY_SECTIONS
from compsize.study.study_additions import read_candidates, read_limits, read_report, read_stages, read_voltage
from compsize.study.study_cases import read_contingencies, read_requirements
from compsize.study.study_growth import read_growth

__all__ = ["read_study"]


def read_study(path: str | os.PathLike[str]) -> Study:
    """Reads and checks a study.

    :param path: the study folder, or its ``study.toml``.
    :returns: the study; every id it names exists, every number is in range.
    :raises InputError: with every fault of every file of the study at once.
    """
    place = Path(path)
    toml = place if place.suffix.lower() == ".toml" else place / "study.toml"
    faults = Faults()
    reader = FileReader(faults)
    context = Context(toml.resolve().parent, toml.name, reader)
    if not toml.exists():
        where = f"'{place}' does not exist." if not place.exists() else f"'{place}' holds no study.toml."
        faults.add(toml.name, where, "Name a study folder, or its study.toml.")
    content = None if faults else reader.bytes_of(toml, toml.name)
    text = None if content is None else decode(content, toml.name, faults)
    keys = None if text is None else parse_toml(text, toml.name, faults)
    faults.raise_if_any()
    assert keys is not None  # without faults there is a content
    sections, requirements = _read_sections(context, keys)
    _read_network(context, sections[""])
    growth = read_growth(context, sections["growth"])
    cases = read_contingencies(context, sections["contingencies"])
    candidates = read_candidates(context, sections["candidates"])
    stages = read_stages(context, sections["stages"])
    voltage = read_voltage(context, sections["voltage"], "voltage" in keys)
    needs = read_requirements(context, requirements, cases, "candidates" in keys, _positive_mw(context, growth.loads))
    faults.raise_if_any()
    assert context.draft is not None
    return Study(
        folder=context.folder,
        title=sections[""].text("title"),
        network=context.draft.tables,
        growth=growth,
        requirements=needs,
        contingencies=cases,
        voltage=voltage,
        candidates=candidates,
        limits=read_limits(sections["limits"]),
        stages=stages,
        report=read_report(sections["report"]),
        hash=reader.total(),
        files=tuple(reader.read.items()),
    )


def _read_sections(context: Context, keys: Mapping[str, object]) -> tuple[dict[str, Values], list[tuple[str, Values]]]:
    """Values of every section that stands once, and of each ``[[requirement]]`` with its prefix."""
    top = STUDY_SECTIONS[""]
    names = [name for name in STUDY_SECTIONS if name]
    for name in keys:
        if name not in names and name not in top.names:
            kind = "table" if isinstance(keys[name], dict | list) else "key"
            context.fault(name, f"unknown {kind} '{name}'.", nearest(name, [*top.names, *names]))
    plain = {name: value for name, value in keys.items() if name in top.names}
    sections = {"": read_keys(plain, top, context.file, "", context.faults)}
    requirements: list[tuple[str, Values]] = []
    for name in names:
        section = STUDY_SECTIONS[name]
        content = keys.get(name)
        if section.repeated:
            entries = content if isinstance(content, list) else []
            if content is not None and not isinstance(content, list):
                context.fault(name, f"'{name}' stands once.", f"Write it as [[{name}]], once per entry.")
            for at, entry in enumerate(entries, 1):
                where = f"{name}[{at}]."
                if isinstance(entry, dict):
                    requirements.append((where, read_keys(entry, section, context.file, where, context.faults)))
                else:
                    context.fault(name, f"'{name}' is not a table.", f"Write it as [[{name}]].")
            continue
        if content is not None and not isinstance(content, dict):
            context.fault(name, f"'{name}' is not a table.", f"Write its keys under [{name}].")
        given = isinstance(content, dict)
        # The keys of an absent section take their defaults; required keys are required only where it stands.
        noted = context.faults if given else Faults()
        found = content if isinstance(content, dict) else {}
        sections[name] = read_keys(found, section, context.file, f"{name}.", noted)
    return sections, requirements


def _read_network(context: Context, top: Values) -> None:
    if "network" not in top.given or "network" in top.faulty:
        return
    name = top.text("network")
    path = resolve(context, "network", name, sibling=True)
    if path is None:
        return
    if not path.exists():
        remedy = "Name a folder of tables, an .xlsx, an IEEE CDF file, or a CGMES folder or zip."
        context.fault("network", f"there is no '{name}'.", remedy)
        return
    shown = PurePosixPath(name.replace("\\", "/")).as_posix()
    context.draft = draft_network(path, "" if shown == "." else shown, context.reader)


def _positive_mw(context: Context, growing: tuple[str, ...]) -> float:
    if context.draft is None:
        return 0.0
    loads = context.draft.tables.loads
    names = set(growing)
    return float(sum(p for load, p in zip(loads.load, loads.p_mw.tolist(), strict=True) if load in names and p > 0))
