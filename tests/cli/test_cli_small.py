"""The commands that compute nothing: new, check, convert, report."""

from __future__ import annotations

import json
import os
from pathlib import Path

import pytest
from cli_helpers import run, two_bus_study
from sample_results import OPTIMAL

import compsize

CDF = Path(__file__).resolve().parents[3] / "shared" / "data" / "ieee_cdf" / "ieee14cdf.txt"


def test_a_new_study_has_no_fault(tmp_path: Path) -> None:
    """The starter study passes `check`, and the line that `new` prints says how to run it."""
    made = run("new", tmp_path / "study")
    assert made.code == 0
    assert f"compsize check {tmp_path / 'study'}" in made.out
    checked = run("check", tmp_path / "study")
    assert checked.code == 0
    assert checked.out.startswith("Starter study: no fault found\n")


def test_new_never_overwrites(tmp_path: Path) -> None:
    """`new` leaves a folder with files alone and exits with 1."""
    (tmp_path / "mine.txt").write_text("keep")
    done = run("new", tmp_path, "--overwrite")
    assert done.code == 1
    assert "is not empty" in done.err
    assert os.listdir(tmp_path) == ["mine.txt"]


def test_new_lists_its_files(tmp_path: Path) -> None:
    """With --json `new` lists the files that it wrote."""
    found = json.loads(run("new", tmp_path / "study", "--json").out)
    assert "study.toml" in found["files"]
    assert all((tmp_path / "study" / name).is_file() for name in found["files"])


def test_check_counts_what_a_study_holds(two_buses: Path) -> None:
    """The summary counts rows, cases, candidates and requirements of the study."""
    done = run("check", two_buses)
    text = " ".join(done.out.split())
    assert "2 buses, 2 branches, 1 generator, 1 load" in text
    assert "2 cases: the intact network, 1 listed event" in text
    assert "outages: 5 % of growing load" in text
    assert "1 candidate at 1 site" in text


def test_check_counts_single_branches(two_buses: Path) -> None:
    """Branches that all_branches adds are counted apart from listed events."""
    toml = two_buses / "study.toml"
    without_candidates = toml.read_text().split("[candidates]")[0]
    toml.write_text(without_candidates + "all_branches = true\n")
    found = json.loads(run("check", two_buses, "--json").out)
    assert (found["cases"], found["listed_events"], found["single_branches"]) == (4, 1, 2)
    assert found["candidates"] == 0


def test_every_fault_at_once(two_buses: Path) -> None:
    """`check` names all faults with file and row on standard error, prints no answer and exits with 1."""
    (two_buses / "candidates.csv").write_text("site,equipment,max_steps\nLaod,Bank,5\nLoad,Bank,-1\n")
    (two_buses / "contingencies.csv").write_text("contingency,kind,element\nNorth out,branch,Nroth\n")
    done = run("check", two_buses)
    assert done.code == 1
    assert "3 faults in the input" in done.err
    for words in (
        "candidates.csv, row 2, site",
        "candidates.csv, row 3, max_steps",
        "contingencies.csv, row 2, element",
    ):
        assert words in done.err
    assert done.out == ""


def test_faults_as_json(two_buses: Path) -> None:
    """With --json the faults stand on standard output too, field by field."""
    (two_buses / "contingencies.csv").write_text("contingency,kind,element\nNorth out,branch,Nroth\n")
    done = run("check", two_buses, "--json")
    assert done.code == 1
    found = json.loads(done.out)
    assert found["sound"] is False
    (fault,) = found["faults"]
    assert (fault["file"], fault["row"], fault["column"]) == ("contingencies.csv", 2, "element")
    assert "North" in fault["remedy"]


def test_no_study_there(tmp_path: Path) -> None:
    """A study that does not exist is a fault of the input, whatever the command."""
    for arguments in (["check", "none"], ["margins", "none", "--out", "r"], ["size", "none", "--out", "r"]):
        done = run(arguments[0], tmp_path / arguments[1], *arguments[2:])
        assert done.code == 1
        assert "does not exist" in done.err


def test_converted_tables_are_the_network(tmp_path: Path) -> None:
    """`convert` writes tables that read back as the same network, and asks before it replaces them."""
    two_bus_study(tmp_path / "two")
    source, target = tmp_path / "two" / "network", tmp_path / "tables"
    first = run("convert", source, target)
    assert first.code == 0
    assert "2 buses, 2 branches, 1 generator, 1 load" in first.out
    assert compsize.read_network(target).loads.p_mw.tolist() == [80.0]
    second = run("convert", source, target)
    assert second.code == 1
    assert "is not empty" in second.err
    third = run("convert", source, target, "--overwrite", "--json")
    assert third.code == 0
    assert json.loads(third.out)["network"]["branches"] == 2


@pytest.mark.skipif(not CDF.exists(), reason="the open data ../shared/data/ieee_cdf are not here")
def test_convert_reads_the_common_data_format(tmp_path: Path) -> None:
    """The published IEEE 14-bus file has 14 buses and 20 branches."""
    found = json.loads(run("convert", CDF, tmp_path / "net", "--json").out)
    assert (found["network"]["buses"], found["network"]["branches"]) == (14, 20)


def test_convert_of_nothing(tmp_path: Path) -> None:
    """A source that is not there exits with 1 and leaves no folder behind."""
    done = run("convert", tmp_path / "none.txt", tmp_path / "net")
    assert done.code == 1
    assert "no such file or folder" in done.err
    assert os.listdir(tmp_path) == []


def test_report_is_rendered_again(tmp_path: Path) -> None:
    """`report` makes the page anew from result.json and names it."""
    compsize.write_report(OPTIMAL, tmp_path / "r")
    page = tmp_path / "r" / "report.html"
    first = page.read_bytes()
    page.unlink()
    done = run("report", tmp_path / "r")
    assert done.code == 0
    assert done.out == f"{page}\n"
    assert page.read_bytes() == first


def test_report_needs_a_result(tmp_path: Path) -> None:
    """A folder without a result is a fault of the input."""
    done = run("report", tmp_path)
    assert done.code == 1
    assert "result.json" in done.err
