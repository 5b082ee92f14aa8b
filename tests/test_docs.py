"""The documents agree with the program."""

from __future__ import annotations

import dataclasses
import importlib.util
import re
from pathlib import Path
from types import ModuleType

import pytest

from compsize.cli.main import COMMANDS
from compsize.plan.records import CaseMargin, PlanRow, SizeResult, table_columns

ROOT = Path(__file__).resolve().parents[1]
PAGES = sorted([ROOT / "README.md", ROOT / "DEVELOPERS.md", *(ROOT / "docs").glob("*.md")])


def maker() -> ModuleType:
    """The script that writes files-in.md."""
    path = ROOT / "docs" / "make_files_in.py"
    spec = importlib.util.spec_from_file_location("make_files_in", path)
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


def text(name: str) -> str:
    return (ROOT / name).read_text(encoding="utf-8")


def test_files_in_is_up_to_date() -> None:
    """docs/files-in.md is what the declarations of the readers give."""
    assert text("docs/files-in.md") == maker().page()


def test_commands_are_described() -> None:
    """docs/commands.md has a row for every command and for no other."""
    rows = re.findall(r"^\| `(\w+)(?: [^`]*)?` \|", text("docs/commands.md").split("## Options")[0], re.MULTILINE)
    assert sorted(rows) == sorted(COMMANDS)


@pytest.mark.parametrize("record", [CaseMargin, PlanRow], ids=["margins", "plan"])
def test_columns_are_described(record: type) -> None:
    """docs/files-out.md names every column of the tables."""
    page = text("docs/files-out.md")
    assert [column for column in table_columns(record) if f"`{column}`" not in page] == []


def test_keys_of_a_result_are_described() -> None:
    """docs/files-out.md names every key of result.json."""
    page = text("docs/files-out.md")
    names = {field.name for field in dataclasses.fields(SizeResult)} - {"plan", "cases_after"}
    names |= {"format", "command", "plan_found", "installs", "site_costs", "cases"}
    assert [name for name in sorted(names) if f"`{name}`" not in page] == []


@pytest.mark.parametrize("number", [1, 2])
def test_readme_commands_are_single_lines(number: int) -> None:
    """Each command of the README is one line that can be pasted."""
    found = re.search(rf"<!-- command {number} -->\n```\n(.*?)\n```", text("README.md"), re.DOTALL)
    assert found is not None
    assert "\n" not in found.group(1)
    assert found.group(1).startswith("python3 -m venv .venv && ")


@pytest.mark.parametrize("page", PAGES, ids=lambda page: page.name)
def test_links_lead_somewhere(page: Path) -> None:
    """Every link to a file of the repository finds it."""
    targets = re.findall(r"\]\(([^)#:]+)\)", page.read_text(encoding="utf-8"))
    assert [target for target in targets if not (page.parent / target).exists()] == []
