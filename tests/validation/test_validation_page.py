"""docs/validation.md says what the program computes today."""

from __future__ import annotations

import importlib.util
import re
import sys
from pathlib import Path
from types import ModuleType

import pytest

ROOT = Path(__file__).resolve().parents[2]
PAGE = (ROOT / "docs" / "validation.md").read_text(encoding="utf-8")
CLOSE = 1e-6
"""Between numbers on the page and those computed again, which the last digits printed do not limit."""
Table = dict[str, tuple[str, ...]]


def maker() -> ModuleType:
    """The script that writes the page."""
    name = "make_validation"
    if name not in sys.modules:
        spec = importlib.util.spec_from_file_location(name, ROOT / "docs" / f"{name}.py")
        assert spec is not None
        assert spec.loader is not None
        module = importlib.util.module_from_spec(spec)
        sys.modules[name] = module
        spec.loader.exec_module(module)
    return sys.modules[name]


def tables(text: str) -> dict[str, Table]:
    """Tables of a page by title, rows by their first cell, without the head."""
    found = {}
    for part in re.split(r"^## ", text, flags=re.MULTILINE)[1:]:
        lines = [line for line in part.splitlines() if line.startswith("|")][2:]
        rows = [tuple(cell.strip() for cell in line.strip("|").split("|")) for line in lines]
        found[part.splitlines()[0]] = {row[0]: row[1:] for row in rows}
    return found


def same(one: str, other: str) -> bool:
    """Whether two cells say the same: words alike, numbers close."""
    words = [cell.split() for cell in (one, other)]
    if len(words[0]) != len(words[1]):
        return False
    for a, b in zip(*words, strict=True):
        try:
            x, y = float(a), float(b)
        except ValueError:
            if a != b:
                return False
        else:
            if abs(x - y) > CLOSE * max(1.0, abs(y)):
                return False
    return True


def test_page_is_up_to_date() -> None:
    """All rows that are made quickly are on the page, with the same words and numbers; blank cells are left out."""
    there = tables(PAGE)
    wrong, compared = [], 0
    for section in maker().quick_sections():
        table = there.get(section.title, {})
        for name, *cells in section.rows:
            if name not in table:
                wrong.append((section.title, name))
                continue
            for head, mine, page in zip(section.head[1:], cells, table[name], strict=True):
                if mine == "":
                    continue
                compared += 1
                if not same(mine, page):
                    wrong.append((section.title, name, head, mine, page))
    assert wrong == []
    assert compared > 200


def test_every_network_is_on_the_page() -> None:
    """Ten networks with and without limits, and a kind of nose for each."""
    rows = tables(PAGE)["Open networks"]
    assert len(rows) == 20
    assert {cells[2] for cells in rows.values()} <= {"fold", "limit"}


def test_other_methods_agree_wherever_they_answered() -> None:
    """On the page no answer of another method is farther than 1e-8 from the nose computed."""
    answers = [cells[5] for cells in tables(PAGE)["Open networks"].values() if cells[5]]
    assert len(answers) >= 15
    assert [text for text in answers if float(text) > 1e-8] == []


@pytest.mark.parametrize(
    ("one", "other", "alike"),
    [
        ("1.25", "1.2500000001", True),
        ("1.25", "1.2501", False),
        ("101.4204 limit", "101.4204 limit", True),
        ("101.4204 limit", "101.4204 fold", False),
        ("101.4204 limit", "101.4204", False),
        ("fold", "1.0", False),
    ],
)
def test_cells_are_compared(one: str, other: str, alike: bool) -> None:
    """Numbers may differ in the last digits, words not at all."""
    assert same(one, other) is alike
