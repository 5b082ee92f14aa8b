"""``compsize size`` from the command line to the files."""

from __future__ import annotations

import csv
import json
from dataclasses import replace
from pathlib import Path

import pytest
from cli_helpers import run, two_bus_study
from sample_results import FAILED_VERIFICATION, SIZES

from compsize.cli.size import exit_code

CODES = {"optimal": 0, "feasible": 4, "unreachable": 3, "limit": 4}


@pytest.mark.parametrize("name", [name for name in SIZES if SIZES[name] is not FAILED_VERIFICATION])
def test_each_status_has_its_exit_code(name: str) -> None:
    """0 for a proved plan, 4 for one without complete proof or a stop, 3 where no plan can do it."""
    assert exit_code(SIZES[name], judged=False) == CODES[SIZES[name].status]


def test_every_status_was_tried() -> None:
    """The sample results hold every status."""
    assert {result.status for result in SIZES.values()} == set(CODES)


def test_a_judged_plan_owes_no_proof() -> None:
    """A given plan that meets everything exits with 0 although nothing was proved of its cost."""
    good = next(result for result in SIZES.values() if result.status == "feasible")
    assert exit_code(good, judged=True) == 0
    assert exit_code(replace(good, status="unreachable"), judged=True) == 3


def test_two_codes_that_disagree_are_an_internal_fault() -> None:
    """A plan that the search holds good and the verification does not never exits with 0."""
    assert exit_code(replace(FAILED_VERIFICATION, status="optimal"), judged=False) == 70


def test_two_buses_take_three_steps(two_buses: Path, tmp_path: Path) -> None:
    """The closed form asks for three steps of 10 Mvar for 5 %; the answer, its cost and its margin say so."""
    done = run("size", two_buses, "--out", tmp_path / "r")
    assert done.code == 0
    with (tmp_path / "r" / "plan.csv").open(newline="", encoding="utf-8") as stream:
        (row,) = csv.DictReader(stream)
    assert (row["site"], row["equipment"], int(row["steps"])) == ("Load", "Bank", 3)
    result = json.loads((tmp_path / "r" / "result.json").read_text(encoding="utf-8"))
    assert (result["status"], result["cost"], result["cost_bound"]) == ("optimal", 1_600_000.0, 1_600_000.0)
    after = {case["case"]: case for case in result["cases"]}
    assert after["North out"]["margin_pct"] == pytest.approx(6.4629, abs=5e-5)
    assert "Build 3 steps (30 Mvar) at 1 site" in done.out
    assert "Lower bound  1,600,000" in done.out


def test_json_is_the_result_file(two_buses: Path, tmp_path: Path) -> None:
    """With --json standard output is result.json and nothing else."""
    done = run("size", two_buses, "--out", tmp_path / "r", "--json", "--quiet")
    assert json.loads(done.out) == json.loads((tmp_path / "r" / "result.json").read_text(encoding="utf-8"))
    assert done.err == ""


def test_more_than_all_steps_can_give(tmp_path: Path) -> None:
    """Five steps give 20.6579 % by the closed form, so 21 % cannot be met: exit code 3, and the files are written."""
    done = run("size", two_bus_study(tmp_path / "two", margin_pct=21.0), "--out", tmp_path / "r")
    assert done.code == 3
    assert "cannot be met" in done.out
    result = json.loads((tmp_path / "r" / "result.json").read_text(encoding="utf-8"))
    assert (result["status"], result["plan_found"]) == ("unreachable", False)


def test_a_limit_of_no_time_stops(two_buses: Path, tmp_path: Path) -> None:
    """A search that is stopped at once exits with 4 and still writes what is known."""
    done = run("size", two_buses, "--out", tmp_path / "r", "--time-limit", "1e-9")
    assert done.code == 4
    assert (tmp_path / "r" / "report.html").exists()


@pytest.mark.parametrize(("steps", "code"), [(3, 0), (5, 0), (2, 3)])
def test_judging_a_plan(two_buses: Path, tmp_path: Path, steps: int, code: int) -> None:
    """By the closed form three and five steps keep 5 % and two steps do not."""
    plan = tmp_path / "plan.csv"
    plan.write_text(f"site,equipment,steps\nLoad,Bank,{steps}\n")
    done = run("size", two_buses, "--plan", plan, "--out", tmp_path / "r")
    assert done.code == code
    result = json.loads((tmp_path / "r" / "result.json").read_text(encoding="utf-8"))
    assert [install["steps"] for install in result["installs"]] == [steps]


def test_a_faulty_plan_stops_before_the_run(two_buses: Path, tmp_path: Path) -> None:
    """A plan that does not fit the study is a fault of the input, and no folder is made."""
    plan = tmp_path / "plan.csv"
    plan.write_text("site,equipment,steps\nLoad,Bank,9\n")
    done = run("size", two_buses, "--plan", plan, "--out", tmp_path / "r")
    assert done.code == 1
    assert "9 steps are too many" in done.err
    assert not (tmp_path / "r").exists()


def test_a_study_without_candidates_cannot_be_sized(two_buses: Path, tmp_path: Path) -> None:
    """Without [candidates] there is nothing to build from: a fault of the input, said as such."""
    toml = two_buses / "study.toml"
    toml.write_text(toml.read_text().split("[candidates]")[0])
    done = run("size", two_buses, "--out", tmp_path / "r")
    assert done.code == 1
    assert "candidates" in done.err
