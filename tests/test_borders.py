"""Imports run only towards earlier stages."""

from __future__ import annotations

import ast
from collections.abc import Iterator
from pathlib import Path

import pytest

import compsize

PACKAGE = Path(compsize.__file__).parent

ALLOWED: dict[str, tuple[str, ...]] = {
    "errors": (),
    "study": ("errors",),
    "plan": (),
    "flow": ("errors",),
    "network": ("errors", "study.records", "flow"),
    "nose": ("errors", "flow", "network"),
    "margin": ("errors", "study.records", "plan.records", "flow", "network", "nose"),
    "sizing": ("errors", "study.records", "plan.records", "flow", "network", "nose", "margin"),
    "verify": ("errors", "study.records", "plan.records"),
    "report": ("errors", "study.records", "plan.records"),
    "api": (
        "errors",
        "study.records",
        "plan.records",
        "flow",
        "network",
        "nose",
        "margin",
        "sizing",
        "verify",
        "report",
    ),
    "cli": ("errors", "study", "plan.records", "flow.jit", "report", "api"),
    "__main__": ("cli.main",),
    "__init__": ("errors", "study", "plan.records", "report", "api"),
}
"""Stage to what it may import besides itself; a name stands for the module and all below it."""

SOLVERS = ("cvxpy", "highspy")
SOLVER_MODULES = ("sizing/master", "sizing/relaxation")
"""Only modules whose path starts so may import a solver."""


def stage_of(path: Path) -> str:
    """The stage a file of the package belongs to."""
    return path.relative_to(PACKAGE).with_suffix("").parts[0]


def imports(source: str) -> Iterator[str]:
    """Every module that a source imports, wherever in it and for whatever purpose."""
    for node in ast.walk(ast.parse(source)):
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, "imports within the package are written in full"
            module = node.module or ""
            # `from compsize.x import y` may mean the module compsize.x.y.
            names = [f"{module}.{alias.name}" for alias in node.names]
            yield from (name if _is_module(name) else module for name in names)


def _is_module(name: str) -> bool:
    path = PACKAGE.parent.joinpath(*name.split("."))
    return path.is_dir() or path.with_suffix(".py").exists()


def crossings(path: Path, source: str) -> list[str]:
    """The imports of a source that cross a border."""
    stage = stage_of(path)
    permitted = [f"compsize.{name}" for name in (*ALLOWED[stage], stage)]
    found = []
    for name in imports(source):
        if name.split(".")[0] == "compsize":
            if not any(name == border or name.startswith(f"{border}.") for border in permitted):
                found.append(name)
        elif name.split(".")[0] in SOLVERS:
            place = path.relative_to(PACKAGE).as_posix()
            if not place.startswith(SOLVER_MODULES):
                found.append(name)
    return found


FILES = sorted(PACKAGE.rglob("*.py"))


@pytest.mark.parametrize("path", FILES, ids=lambda path: path.relative_to(PACKAGE).as_posix())
def test_imports_run_towards_earlier_stages(path: Path) -> None:
    """No module imports a later stage, and no module but the master and the relaxation a solver."""
    assert crossings(path, path.read_text(encoding="utf-8")) == []


def test_every_stage_is_named() -> None:
    """A new folder or module of the package has a place in the order, and the order names no other."""
    assert {stage_of(path) for path in FILES} == set(ALLOWED)


def test_order_has_no_circle() -> None:
    """The stages can be put in a row so that each imports only those before it."""
    left = {stage: {name.split(".")[0] for name in names} for stage, names in ALLOWED.items()}
    while left:
        ready = [stage for stage, needs in left.items() if not needs & left.keys()]
        assert ready, f"these import each other: {sorted(left)}"
        for stage in ready:
            del left[stage]


@pytest.mark.parametrize(
    ("place", "source", "crossing"),
    [
        ("nose/engine.py", "from compsize.margin.cases import CaseSpec", "compsize.margin.cases"),
        ("flow/lu.py", "def f():\n    import compsize.nose.trace", "compsize.nose.trace"),
        ("verify/plan.py", "from compsize import nose", "compsize.nose"),
        ("network/grid.py", "from compsize.study.read_study import read_study", "compsize.study.read_study"),
        ("report/write.py", "from compsize.api import size", "compsize.api"),
        ("api.py", "import cvxpy as cp", "cvxpy"),
        ("sizing/search.py", "from highspy import Highs", "highspy"),
    ],
)
def test_a_crossing_is_found(place: str, source: str, crossing: str) -> None:
    """The check can fail: an import of a later stage, a hidden one or a solver in the wrong place is seen."""
    assert crossings(PACKAGE / place, source) == [crossing]


def test_the_master_may_import_a_solver() -> None:
    """A solver is allowed where it belongs."""
    assert crossings(PACKAGE / "sizing" / "master.py", "import cvxpy") == []
