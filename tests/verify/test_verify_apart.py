"""The second opinion stands apart."""

from __future__ import annotations

import ast
from pathlib import Path

import compsize.verify

ALLOWED = ("compsize.errors", "compsize.study.records", "compsize.plan.records", "compsize.verify")


def imported(source: str) -> set[str]:
    """Names of the project's modules that a source imports, wherever in it."""
    found = set()
    for node in ast.walk(ast.parse(source)):
        if isinstance(node, ast.Import):
            found |= {alias.name for alias in node.names}
        elif isinstance(node, ast.ImportFrom):
            found.add("." * node.level + (node.module or ""))
    return {name for name in found if name.startswith(("compsize", "."))}


def test_it_imports_records_and_errors_only() -> None:
    """No module of the second opinion imports anything of the code that it judges."""
    files = sorted(Path(compsize.verify.__file__).parent.glob("*.py"))
    assert len(files) > 5
    for file in files:
        for name in imported(file.read_text()):
            assert name.startswith(ALLOWED), f"{file.name} imports {name}"


def test_the_scan_sees_an_import_inside_a_function() -> None:
    """The check can fail: a hidden import is found too."""
    assert imported("def f():\n    from compsize.flow import equations\n") == {"compsize.flow"}
