"""The judgement on skipped tests can fail."""

from __future__ import annotations

import importlib.util
from pathlib import Path
from types import ModuleType

import pytest


@pytest.fixture
def skipped() -> ModuleType:
    """The script that judges skipped tests."""
    path = Path(__file__).resolve().parents[1] / ".ci" / "skipped.py"
    spec = importlib.util.spec_from_file_location("skipped", path)
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


def record(path: Path, module: ModuleType, extra: str = "") -> Path:
    """A record in which one test of every required part passed, and what is added."""
    cases = "".join(f'<testcase classname="{part}" name="test_it"/>' for part in module.REQUIRED)
    path.write_text(f"<testsuites><testsuite>{cases}{extra}</testsuite></testsuites>")
    return path


def skip(reason: str, part: str = "tests.study.test_study_cdf") -> str:
    return f'<testcase classname="{part}" name="test_skipped"><skipped message="{reason}"/></testcase>'


def test_a_run_without_skips_is_good(tmp_path: Path, skipped: ModuleType) -> None:
    """Where every required part ran there is nothing to say."""
    assert skipped.main(record(tmp_path / "t.xml", skipped)) == 0


def test_a_skip_without_excuse_fails(tmp_path: Path, skipped: ModuleType, capsys: pytest.CaptureFixture[str]) -> None:
    """A required test that was skipped for a reason nobody knows is a failure, and its reason is printed."""
    assert skipped.main(record(tmp_path / "t.xml", skipped, skip("not today"))) == 1
    assert "test_skipped: not today  <- required" in capsys.readouterr().out


def test_missing_data_excuse_only_while_they_are_missing(
    tmp_path: Path, skipped: ModuleType, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Open data that are not there excuse a skip; data that are there do not."""
    path = record(tmp_path / "t.xml", skipped, skip("the open data ../shared/data/x.txt are not here"))
    monkeypatch.setattr(skipped, "SHARED", tmp_path / "shared")
    assert skipped.main(path) == 0
    (tmp_path / "shared" / "data").mkdir(parents=True)
    (tmp_path / "shared" / "data" / "x.txt").touch()
    assert skipped.main(path) == 1


def test_a_missing_browser_excuses_only_while_it_is_missing(
    tmp_path: Path, skipped: ModuleType, monkeypatch: pytest.MonkeyPatch
) -> None:
    """No browser on the machine excuses the tests of the page; an installed one does not."""
    path = record(tmp_path / "t.xml", skipped, skip("no Chromium is installed", "tests.report.test_report_browser"))
    monkeypatch.setattr(skipped.shutil, "which", lambda name: None)
    assert skipped.main(path) == 0
    monkeypatch.setattr(skipped.shutil, "which", lambda name: f"/usr/bin/{name}")
    assert skipped.main(path) == 1


def test_a_part_that_never_ran_fails(tmp_path: Path, skipped: ModuleType) -> None:
    """A required part of which nothing passed is a failure although nothing was skipped."""
    path = tmp_path / "t.xml"
    path.write_text('<testsuites><testsuite><testcase classname="tests.cli" name="t"/></testsuite></testsuites>')
    assert skipped.main(path) == 1


def test_other_skips_are_listed_only(tmp_path: Path, skipped: ModuleType) -> None:
    """A skip outside the required parts is shown and does no harm."""
    extra = skip("this outage leaves nothing to evaluate", "tests.verify.test_verify_path")
    assert skipped.main(record(tmp_path / "t.xml", skipped, extra)) == 0
