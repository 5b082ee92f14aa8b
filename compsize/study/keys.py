"""From the keys of a TOML file to typed values, checked against the declaration of the section."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field

from compsize.study.columns import as_number, as_yes_no
from compsize.study.files import Faults
from compsize.study.schema import Key, Section, nearest

__all__ = ["Values", "read_keys"]


@dataclass
class Values:
    """The typed values of one section; a key that is absent or faulty has its default."""

    found: dict[str, object] = field(default_factory=dict)
    given: frozenset[str] = frozenset()
    """Names of the keys that the file has, faulty ones included."""
    faulty: frozenset[str] = frozenset()

    def number(self, name: str) -> float | None:
        """A number, None where absent without default."""
        value = self.found.get(name)
        return float(value) if isinstance(value, int | float) else None

    def text(self, name: str) -> str:
        """A text or choice, empty where absent without default."""
        value = self.found.get(name)
        return value if isinstance(value, str) else ""

    def flag(self, name: str) -> bool:
        """A yes/no value, false where absent without default."""
        return self.found.get(name) is True


def read_keys(
    content: Mapping[str, object], section: Section, file: str, where: str, faults: Faults, *, texts_only: bool = False
) -> Values:
    """Types every key of ``section``, with a fault for each key and value that is wrong.

    ``where`` is put before the key in messages ("growth."). ``texts_only``: the values come from a
    workbook sheet and numbers are told from text by what the key asks for.
    """
    found: dict[str, object] = {}
    faulty: set[str] = set()
    for name in content:
        if name not in section.names:
            faults.add(file, f"unknown key '{where}{name}'.", nearest(name, section.names), column=f"{where}{name}")
    for key in section.keys:
        found[key.name] = key.default
        if key.name not in content:
            if key.required:
                faults.add(file, f"the required key '{where}{key.name}' is missing.", "Add it.", None, where + key.name)
                faulty.add(key.name)
            continue
        value = content[key.name]
        if texts_only and isinstance(value, str):
            value = _from_text(value, key)
        value, problem, remedy = _typed(value, key)
        if problem:
            faults.add(file, problem, remedy, column=where + key.name)
            faulty.add(key.name)
        else:
            found[key.name] = value
    return Values(found, frozenset(content) & frozenset(section.names), frozenset(faulty))


def _from_text(text: str, key: Key) -> object:
    if key.kind in ("number", "integer"):
        number = as_number(text)
        return text if number is None else number
    if key.kind == "yes-no":
        flag = as_yes_no(text)
        return text if flag is None else flag
    return text


def _typed(value: object, key: Key) -> tuple[object, str, str]:
    """Value, problem and remedy; the problem is empty where the value is right."""
    shown = f"'{value}'" if isinstance(value, str) else str(value).lower() if isinstance(value, bool) else str(value)
    if key.kind in ("number", "integer"):
        if isinstance(value, bool) or not isinstance(value, int | float) or not math.isfinite(value):
            return None, f"{shown} is not a number.", "Write a plain number without quotes."
        if key.kind == "integer" and value != round(value):
            return None, f"{shown} is not a whole number.", "Write a whole number."
        if not key.bounds.admits(value):
            return None, f"{shown} is out of range.", f"Permitted: {key.bounds}{f' {key.unit}' if key.unit else ''}."
        return float(value), "", ""
    if key.kind == "yes-no":
        if isinstance(value, bool):
            return value, "", ""
        return None, f"{shown} is not true or false.", "Write true or false without quotes."
    if key.kind == "choice":
        if isinstance(value, str) and value in key.choices:
            return value, "", ""
        return None, f"{shown} is not a valid choice.", nearest(str(value), key.choices)
    if key.kind in ("text", "path"):
        if isinstance(value, int | float) and not isinstance(value, bool) and key.kind == "text":
            return str(value), "", ""  # a year of prices is often written as a number
        if not isinstance(value, str):
            return None, f"{shown} is not a text.", "Write a text in double quotes."
        if key.kind == "path" and not value.strip():
            return None, "the path is blank.", "Name a file or folder."
        return value.strip(), "", ""
    return value, "", ""  # loads and power factor are judged where the network is known
