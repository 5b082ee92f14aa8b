"""CSV tables and result.json carry every value and every name unchanged."""

from __future__ import annotations

import csv
import dataclasses
import io
import json
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from sample_results import AFTER, MARGINS, NASTY, NOTHING, OPTIMAL, PLAN, SIZES, UNREACHABLE, case, nasty_result

from compsize.errors import InputError, InternalError
from compsize.plan.records import PlanRow, SizeResult
from compsize.report.csvs import margins_csv, plan_csv
from compsize.report.result_json import FORMAT, from_json, to_json


def rows_of(text: str) -> list[dict[str, str]]:
    return list(csv.DictReader(io.StringIO(text, newline="")))


def test_margin_columns() -> None:
    """The columns of the margin tables are those of the interface, in its order."""
    assert margins_csv(AFTER).splitlines()[0] == (
        "case,class,base_mw,nose_mw,margin_mw,margin_pct,required_mw,met,nose_kind,weakest_bus,weakest_v_pu,"
        "lowest_bus,lowest_v_pu,limited_devices,steps_off,status"
    )


def test_plan_columns_and_rows() -> None:
    """plan.csv has the interface's columns; an empty plan is its heading alone."""
    heading = "site,equipment,kind,steps,step_mvar,total_mvar,cost"
    assert plan_csv(PLAN.rows).splitlines() == [
        heading,
        "Oakmere 110,MSC-15,bank,3,15.0,45.0,1330000.0",
        "Tarnside 33,SVC-20,svc,1,20.0,20.0,2450000.0",
    ]
    assert plan_csv(()) == heading + "\n"


def test_yes_no_blank() -> None:
    """A missing value is blank, a verdict yes or no, and a list of devices is joined by spaces."""
    first, second = rows_of(margins_csv([case("a", None), case("b", 12.0, limited_devices=("G1", "G2"))]))
    assert (first["margin_mw"], first["met"], first["nose_kind"]) == ("", "no", "")
    assert (second["margin_mw"], second["met"], second["limited_devices"]) == ("12.0", "yes", "G1 G2")


@given(st.floats(allow_nan=False, allow_infinity=False))
def test_full_precision(value: float) -> None:
    """A number read back from the table is the number itself, also where it came as a numpy scalar."""
    for given_value in (value, np.float64(value)):
        text = rows_of(margins_csv([dataclasses.replace(AFTER[0], margin_mw=given_value)]))[0]["margin_mw"]
        assert float(text) == value


@pytest.mark.parametrize("name", [*NASTY, "01", "NA", "two\nlines", "tab\there", " ", "carriage\rreturn"])
def test_names_come_back(name: str) -> None:
    """Any name, a spreadsheet formula too, is the same text when the tables are read by a CSV reader."""
    row = rows_of(margins_csv([case(name, 13.0, klass=name, weakest_bus=name, status=name)]))[0]
    assert [row[key] for key in ("case", "class", "weakest_bus", "status")] == [name] * 4
    plan = rows_of(plan_csv([PlanRow(name, name, "bank", 1, 1.0, 1.0, 1.0)]))[0]
    assert (plan["site"], plan["equipment"]) == (name, name)


def test_table_refuses_non_finite() -> None:
    """A number that is not finite is a fault of the program, named by row and column."""
    with pytest.raises(InternalError, match=r"row 3, margin_mw of a result table is nan"):
        margins_csv([AFTER[0], dataclasses.replace(AFTER[1], margin_mw=float("nan"))])


@pytest.mark.parametrize("result", [*SIZES.values(), nasty_result()], ids=[*SIZES, "nasty"])
def test_size_result_comes_back(result: SizeResult) -> None:
    """A sizing result of any status, the empty plan and no plan included, is equal after JSON and back."""
    assert from_json(to_json(result, "size")) == result


def test_margins_result_comes_back() -> None:
    """A margins result is equal after JSON and back."""
    assert from_json(to_json(MARGINS, "margins")) == MARGINS


def test_json_keys() -> None:
    """result.json has the keys of the interface, with the plan's rows under installs."""
    plain = json.loads(to_json(OPTIMAL, "size"))
    assert plain["format"] == FORMAT == "compsize result 1"
    assert plain["command"] == "size"
    wanted = {"status", "cost", "cost_bound", "gap_pct", "proof", "installs", "cases", "cases_before", "runners_up"}
    assert wanted | {"counts", "study_hash", "version"} <= set(plain)
    assert plain["installs"][0] == {
        "site": "Oakmere 110", "equipment": "MSC-15", "kind": "bank", "steps": 3, "step_mvar": 15.0,
        "total_mvar": 45.0, "cost": 1330000.0,
    }  # fmt: skip
    assert {"noses", "factorisations", "master_solves", "relaxations"} <= set(plain["counts"])
    assert plain["cases"][0]["class"] == ""
    assert [c["case"] for c in plain["cases"]] == [c.case for c in AFTER]


def test_no_plan_and_empty_plan_differ() -> None:
    """Both have no installs, and plan_found tells them apart."""
    empty, none = (json.loads(to_json(result, "size")) for result in (NOTHING, UNREACHABLE))
    assert empty["installs"] == none["installs"] == []
    assert (empty["plan_found"], none["plan_found"]) == (True, False)


def test_json_refuses_non_finite() -> None:
    """Infinity never reaches the file; the message names its place."""
    bad = dataclasses.replace(OPTIMAL, cases_after=(dataclasses.replace(AFTER[0], nose_mw=float("inf")),))
    with pytest.raises(InternalError, match=r"cases\[0\]\.nose_mw of the result is inf"):
        to_json(bad, "size")


def test_json_kind_must_fit() -> None:
    """A margins result cannot be written as one of size."""
    with pytest.raises(InternalError, match="A MarginsResult is no result of `compsize size`"):
        to_json(MARGINS, "size")


def altered(change: dict[str, Any]) -> str:
    return json.dumps(json.loads(to_json(OPTIMAL, "size")) | change)


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("", "is not JSON"),
        ('{"format": "compsize result 1", "cost": NaN}', "NaN is not a number of JSON"),
        ("[]", "has format None"),
        ('{"format": "compsize result 2"}', "has format 'compsize result 2'"),
        ('{"format": "compsize result 1", "command": "sites"}', "has command 'sites'"),
        ('{"format": "compsize result 1", "command": "size"}', "has no key `plan_found`"),
        (altered({"colour": 1}), "has the unknown key `colour`"),
        (altered({"cost": "much"}), "`cost` is 'much', which is not of type float"),
        (altered({"cost": True}), "`cost` is True"),
        (altered({"status": "fine"}), "`status` is 'fine'"),
        (altered({"notes": "text"}), "`notes` should be a list"),
        (altered({"basis": [["one"]]}), r"`basis\[0\]` should have 2 entries"),
        (altered({"proof": None}), "`proof` should be an object"),
        (altered({"gap_pct": 1}).replace('"gap_pct": 1', '"gap_pct": 1e999'), "`gap_pct` is not a finite number"),
    ],
)
def test_faulty_json_is_named(text: str, message: str) -> None:
    """A file that is no result of this version is refused with the place of the first fault."""
    with pytest.raises(InputError, match=message):
        from_json(text)


def test_key_with_a_default_may_be_absent() -> None:
    """A result written before a record grew a field with a default can still be read."""
    plain = json.loads(to_json(OPTIMAL, "size"))
    for key in ("notes", "basis", "report", "seconds"):
        del plain[key]
    read = from_json(json.dumps(plain))
    assert read == dataclasses.replace(OPTIMAL, notes=(), basis=(), report=(), seconds=0.0)
