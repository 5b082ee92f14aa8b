"""The public names of the package."""

from __future__ import annotations

import subprocess
import sys

import pytest

import compsize

NAMES = [
    "CompsizeError",
    "InputError",
    "MarginsResult",
    "NetworkTables",
    "OutputError",
    "Plan",
    "SizeResult",
    "Study",
    "UsageError",
    "margins",
    "read_network",
    "read_study",
    "size",
    "write_network",
    "write_report",
]


def test_names_are_exactly_these() -> None:
    """A public name is added or dropped only on purpose."""
    assert sorted(compsize.__all__) == NAMES


@pytest.mark.parametrize("name", NAMES)
def test_each_name_is_what_its_home_calls_so(name: str) -> None:
    """Every public name can be had from the package, and carries that name."""
    assert getattr(compsize, name).__name__ == name


def test_errors_are_one_tree() -> None:
    """Whoever catches CompsizeError catches every public error."""
    for name in NAMES:
        if name.endswith("Error"):
            assert issubclass(getattr(compsize, name), compsize.CompsizeError)


def test_names_are_listed() -> None:
    """Names are listed for completion although they are loaded late."""
    assert set(NAMES) <= set(dir(compsize))


def test_an_unknown_name_is_an_attribute_error() -> None:
    """A misspelt name fails as on any module."""
    with pytest.raises(AttributeError, match="has no attribute 'sise'"):
        _ = compsize.sise  # type: ignore[attr-defined]


def test_importing_the_package_loads_nothing_heavy() -> None:
    """Importing the package alone loads no library for arrays, tables or compilation."""
    heavy = ("numpy", "scipy", "numba", "cvxpy", "pandas", "jinja2", "click")
    script = f"import sys, compsize; print([name for name in {heavy} if name in sys.modules])"
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"
