"""The files of a command, and the page rendered again."""

from __future__ import annotations

import json
import os
from dataclasses import replace
from pathlib import Path

import pytest
from sample_results import LIMIT, MARGINS, OPTIMAL, SIZES

from compsize.errors import InputError, InternalError, OutputError
from compsize.plan.records import SizeResult
from compsize.report.write import render, write_report

SIZE_FILES = {"result.json", "plan.csv", "margins_before.csv", "margins_after.csv", "report.html"}


@pytest.mark.parametrize("result", SIZES.values(), ids=SIZES)
def test_size_files(tmp_path: Path, result: SizeResult) -> None:
    """A sizing result of any status gives its five files."""
    folder = write_report(result, tmp_path / "run")
    assert set(os.listdir(folder)) == SIZE_FILES
    assert json.loads((folder / "result.json").read_text(encoding="utf-8"))["status"] == result.status


def test_margins_files(tmp_path: Path) -> None:
    """A margins result gives its three files."""
    folder = write_report(MARGINS, tmp_path / "run")
    assert set(os.listdir(folder)) == {"result.json", "margins.csv", "report.html"}


def test_older_result_needs_overwrite(tmp_path: Path) -> None:
    """A second result replaces the first only when asked to."""
    write_report(OPTIMAL, tmp_path / "run")
    with pytest.raises(OutputError, match="already holds a result"):
        write_report(MARGINS, tmp_path / "run")
    write_report(MARGINS, tmp_path / "run", overwrite=True)
    assert set(os.listdir(tmp_path / "run")) == {"result.json", "margins.csv", "report.html"}


def test_nothing_is_written_where_a_value_is_not_finite(tmp_path: Path) -> None:
    """A result that cannot be stored leaves no folder."""
    with pytest.raises(InternalError, match="cost of the result is inf"):
        write_report(replace(OPTIMAL, cost=float("inf")), tmp_path / "run")
    assert os.listdir(tmp_path) == []


@pytest.mark.parametrize("result", [OPTIMAL, LIMIT, MARGINS])
def test_page_rendered_again_is_the_same(tmp_path: Path, result: SizeResult) -> None:
    """The page rendered from result.json alone is byte for byte the first one, and no other file changes."""
    folder = write_report(result, tmp_path / "run")
    first = {path.name: path.read_bytes() for path in folder.iterdir()}
    (folder / "report.html").unlink()
    assert render(folder) == folder / "report.html"
    assert {path.name: path.read_bytes() for path in folder.iterdir()} == first


def test_render_needs_a_result(tmp_path: Path) -> None:
    """Rendering a folder without a result, or with a broken one, names the file."""
    with pytest.raises(InputError, match=r"result\.json: cannot be read: No such file.*Name the folder"):
        render(tmp_path)
    (tmp_path / "result.json").write_bytes(b"\xff\xfe")
    with pytest.raises(InputError, match="it is not UTF-8"):
        render(tmp_path)
    (tmp_path / "result.json").write_text("{}")
    with pytest.raises(InputError, match="has format None"):
        render(tmp_path)
    assert os.listdir(tmp_path) == ["result.json"]
