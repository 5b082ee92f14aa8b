"""``compsize margins`` from the command line to the files."""

from __future__ import annotations

import csv
import json
from pathlib import Path

import pytest
from cli_helpers import run

from compsize.plan.records import CaseMargin, table_columns


def test_margins_of_two_buses(two_buses: Path, tmp_path: Path) -> None:
    """The table has the closed-form margin of the outage, -9.5066 % of 80 MW, and the intact nose of 144.7895 MW."""
    done = run("margins", two_buses, "--out", tmp_path / "r")
    assert done.code == 0
    with (tmp_path / "r" / "margins.csv").open(newline="", encoding="utf-8") as stream:
        rows = {row["case"]: row for row in csv.DictReader(stream)}
    assert list(rows["intact"]) == list(table_columns(CaseMargin))
    assert float(rows["North out"]["margin_pct"]) == pytest.approx(-9.5066, abs=5e-5)
    assert float(rows["intact"]["nose_mw"]) == pytest.approx(144.7895, abs=5e-5)
    assert rows["North out"]["met"] == "no"


def test_the_answer_is_printed(two_buses: Path, tmp_path: Path) -> None:
    """Standard output says whether the requirement is met, shows the cases and where the files are."""
    out = run("margins", two_buses, "--out", tmp_path / "r").out
    assert "Requirement not met" in out
    assert "North out" in out
    assert "-7.61" in out
    assert f"Written to {tmp_path / 'r'}/: margins.csv, report.html, result.json" in out


def test_json_is_the_result_file(two_buses: Path, tmp_path: Path) -> None:
    """With --json standard output is result.json and nothing else."""
    done = run("margins", two_buses, "--out", tmp_path / "r", "--json")
    assert json.loads(done.out) == json.loads((tmp_path / "r" / "result.json").read_text(encoding="utf-8"))


def test_unmet_fails_on_demand(two_buses: Path, tmp_path: Path) -> None:
    """With --fail-unmet a missed requirement exits with 3, and the files are written all the same."""
    done = run("margins", two_buses, "--out", tmp_path / "r", "--fail-unmet")
    assert done.code == 3
    assert (tmp_path / "r" / "report.html").exists()


def test_met_does_not_fail(two_buses: Path, tmp_path: Path) -> None:
    """With --fail-unmet a requirement that is met exits with 0."""
    toml = two_buses / "study.toml"
    toml.write_text(toml.read_text().replace('cases = "outages"', 'cases = "intact"'))
    assert run("margins", two_buses, "--out", tmp_path / "r", "--fail-unmet").code == 0


def test_an_older_result_is_kept(two_buses: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A folder with a result is refused before anything is computed, unless --overwrite is said."""
    assert run("margins", two_buses, "--out", tmp_path / "r").code == 0
    before = (tmp_path / "r" / "result.json").stat().st_mtime_ns
    with monkeypatch.context() as patch:
        patch.setattr("compsize.api.margins", lambda *_, **__: pytest.fail("the run began"))
        done = run("margins", two_buses, "--out", tmp_path / "r")
    assert done.code == 1
    assert "--overwrite" in done.err
    assert (tmp_path / "r" / "result.json").stat().st_mtime_ns == before
    assert run("margins", two_buses, "--out", tmp_path / "r", "--overwrite").code == 0
    assert (tmp_path / "r" / "result.json").stat().st_mtime_ns > before


def test_one_worker_says_the_same(two_buses: Path, tmp_path: Path) -> None:
    """The result does not depend on the number of workers."""
    one = run("margins", two_buses, "--out", tmp_path / "a", "--json", "--workers", "1")
    two = run("margins", two_buses, "--out", tmp_path / "b", "--json", "--workers", "2")
    assert json.loads(one.out)["cases"] == json.loads(two.out)["cases"]


@pytest.mark.parametrize(("quiet", "notices"), [([], 1), (["--quiet"], 0)])
def test_the_first_use_says_that_it_compiles(
    two_buses: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, quiet: list[str], notices: int
) -> None:
    """Where no compiled code is stored one line on standard error says so; --quiet leaves it out."""
    monkeypatch.setattr("compsize.flow.jit.compiled_before", lambda: False)
    done = run("margins", two_buses, "--out", tmp_path / "r", *quiet)
    assert done.err.count("First use on this machine") == notices


def test_an_answer_survives_a_full_disk(two_buses: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Where the result cannot be written the answer is printed nevertheless, and the exit code is 1."""
    monkeypatch.setattr("compsize.report.store._write", _full)
    done = run("margins", two_buses, "--out", tmp_path / "r")
    assert done.code == 1
    assert "Requirement not met" in done.out
    assert "Written to" not in done.out
    assert "cannot be written" in done.err
    assert not (tmp_path / "r").exists()


def _full(path: Path, content: bytes | str) -> None:
    raise OSError(28, "No space left on device")
