"""Reading a plan to be judged."""

from __future__ import annotations

from pathlib import Path

import pytest

from compsize import InputError, read_study
from compsize.cli.plan_file import read_plan
from compsize.plan.records import PlanRow
from compsize.report.csvs import plan_csv


def test_a_plan_of_a_result_can_be_judged(two_buses: Path, tmp_path: Path) -> None:
    """What a result writes as plan.csv reads back as its sites, equipment and steps."""
    path = tmp_path / "plan.csv"
    path.write_text(plan_csv([PlanRow("Load", "Bank", "bank", 3, 10.0, 30.0, 1_600_000.0)]))
    assert read_plan(path, read_study(two_buses)) == [("Load", "Bank", 3)]


def test_three_columns_are_enough(two_buses: Path, tmp_path: Path) -> None:
    """A plan written by hand needs site, equipment and steps, in any order."""
    path = tmp_path / "plan.csv"
    path.write_text("steps,site,equipment\n2,Load,Bank\n")
    assert read_plan(path, read_study(two_buses)) == [("Load", "Bank", 2)]


def test_the_empty_plan(two_buses: Path, tmp_path: Path) -> None:
    """A heading alone is the plan to build nothing."""
    path = tmp_path / "plan.csv"
    path.write_text("site,equipment,steps\n")
    assert read_plan(path, read_study(two_buses)) == []


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("site,equipment,steps\nLaod,Bank,1\n", r"row 2, site: 'Laod' is no site .* Did you mean 'Load'\?"),
        (
            "site,equipment,steps\nLoad,Bnak,1\n",
            r"row 2, equipment: 'Bnak' is no candidate at Load. .*'Bank'",
        ),
        ("site,equipment,steps\nLoad,Bank,6\n", r"row 2, steps: 6 steps are too many. The study has room for 5"),
        ("site,equipment,steps\nLoad,Bank,1.5\n", r"row 2, steps: '1.5' is not a whole number"),
        ("site,equipment,steps\nLoad,Bank,-1\n", r"row 2, steps: -1.* is out of range"),
        ("site,equipment,steps\nLoad,Bank,1\nLoad,Bank,1\n", r"row 3, equipment: Load with Bank stands twice"),
        ("site,equipment\nLoad,Bank\n", r"the required column 'steps' is missing"),
        ("site,equipment,steps,colour\nLoad,Bank,1,red\n", r"unknown column 'colour'"),
        ("", r"plan.csv"),
    ],
)
def test_faults_of_a_plan(two_buses: Path, tmp_path: Path, text: str, message: str) -> None:
    """Every fault of a plan names row and column, and the nearest valid name."""
    path = tmp_path / "plan.csv"
    path.write_text(text)
    with pytest.raises(InputError, match=message):
        read_plan(path, read_study(two_buses))


def test_all_faults_of_a_plan_at_once(two_buses: Path, tmp_path: Path) -> None:
    """Several faults are reported together."""
    path = tmp_path / "plan.csv"
    path.write_text("site,equipment,steps\nLaod,Bank,1\nLoad,Bank,x\n")
    with pytest.raises(InputError, match="2 faults"):
        read_plan(path, read_study(two_buses))


def test_a_plan_that_is_not_there(two_buses: Path, tmp_path: Path) -> None:
    """A missing file is a fault of the input."""
    with pytest.raises(InputError, match="does not exist"):
        read_plan(tmp_path / "plan.csv", read_study(two_buses))
