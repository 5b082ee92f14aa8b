"""The two-bus sizing study through its files, against closed forms (Van Cutsem and Vournas 1998, ch. 2)."""

from __future__ import annotations

import math
from pathlib import Path

import pytest

from compsize.api import margins, size
from compsize.study.read_study import read_study
from compsize.study.records import Study

X, LOAD_MW, POWER_FACTOR = 0.5, 80.0, 0.95
SINE = math.sqrt(1.0 - POWER_FACTOR**2)
MARGINS_PCT = (-9.5066, -4.7438, 0.5483, 6.4629, 13.1168, 20.6579)
"""With one of two lines out, for 0 to 5 steps of 10 Mvar: closed form, checked by brute force."""


def nose_mw(b: float, x: float = X) -> float:
    """Largest load at 0.95 lagging [MW, base 100 MVA] behind ``x`` with susceptance ``b`` beside it [pu]."""
    return 100.0 * POWER_FACTOR / (2.0 * x * (1.0 - b * x) * (1.0 + SINE))


def susceptance(margin_pct: float) -> float:
    """Susceptance [pu] for a margin with one line out: (1/X)(1 - P_max(0)/P)."""
    return (1.0 - nose_mw(0.0) / (LOAD_MW * (1.0 + margin_pct / 100.0))) / X


def two_buses(
    folder: Path, margin_pct: float = 5.0, *, step_mvar: float = 10.0, most: int = 8, existing: int = 0, more: str = ""
) -> Study:
    """Two lines of 0.5 pu feed 80 MW at 0.95 lagging; one of them may be lost."""
    (folder / "network").mkdir(parents=True)
    q = LOAD_MW * SINE / POWER_FACTOR
    tables = {
        "network/network.toml": "base_mva = 100\nfrequency_hz = 50\n",
        "network/buses.csv": "bus,kv\nS,110\nL,110\n",
        "network/loads.csv": f"load,bus,p_mw,q_mvar\nD,L,{LOAD_MW},{q!r}\n",
        "network/branches.csv": f"branch,from_bus,to_bus,r_pu,x_pu\none,S,L,0,{X}\ntwo,S,L,0,{X}\n",
        "network/generators.csv": "generator,bus,p_mw,v_set_pu,slack\nG,S,80,1.0,yes\n",
        "contingencies.csv": "contingency,kind,element\nline one,branch,one\n",
        "equipment.csv": f"equipment,kind,step_mvar,cost_fixed,cost_per_step\nbank,bank,{step_mvar},700,140\n",
        "candidates.csv": f"site,equipment,max_steps,site_cost,existing_steps\nL,bank,{most},300,{existing}\n",
        "study.toml": f"""network = "network"
[growth]
loads = "all"
[[requirement]]
cases = "outages"
margin_pct = {margin_pct}
[contingencies]
table = "contingencies.csv"
bank_outage = "none"
[candidates]
table = "candidates.csv"
equipment = "equipment.csv"
{more}""",
    }
    for name, text in tables.items():
        (folder / name).write_text(text, encoding="utf-8")
    return read_study(folder)


@pytest.mark.parametrize("steps", range(6))
def test_margins_of_steps(tmp_path: Path, steps: int) -> None:
    """Margins with one line out for 0 to 5 steps are those of the closed form, negative ones included."""
    result = margins(two_buses(tmp_path, existing=steps))
    intact, outage = result.cases
    assert outage.margin_pct == pytest.approx(MARGINS_PCT[steps], abs=5e-5)
    assert outage.nose_mw == pytest.approx(nose_mw(0.1 * steps), rel=1e-9)
    assert intact.nose_mw == pytest.approx(nose_mw(0.1 * steps, X / 2.0), rel=1e-9)
    v = 1.0 / ((1.0 - 0.1 * steps * X) * math.sqrt(2.0 * (1.0 + SINE)))
    assert outage.weakest_bus == "L"
    assert outage.weakest_v_pu == pytest.approx(v, abs=1e-6)
    assert outage.nose_kind == "fold"
    assert ("no solution at base load" in outage.status) is (steps < 2)


@pytest.mark.parametrize(("margin_pct", "steps"), [(2.5, 3), (5.0, 3), (10.0, 4), (0.5, 2), (13.0, 4)])
def test_steps_for_a_margin(tmp_path: Path, margin_pct: float, steps: int) -> None:
    """Three steps of 10 Mvar for 5 % and for 2.5 %, four for 10 %: closed form; the cost follows from the tables."""
    result = size(two_buses(tmp_path, margin_pct))
    assert result.status == "optimal"
    assert result.plan is not None
    assert [row.steps for row in result.plan.rows] == [steps]
    assert result.cost == pytest.approx(300.0 + 700.0 + 140.0 * steps)
    (outage,) = [case for case in result.cases_after if case.case == "line one"]
    assert outage.margin_pct == pytest.approx(MARGINS_PCT[steps], abs=5e-5)
    assert result.verification is not None
    assert result.verification.passed


@pytest.mark.parametrize(("margin_pct", "b"), [(2.5, 0.234274), (5.0, 0.276316), (10.0, 0.354665)])
def test_susceptance_for_a_margin(tmp_path: Path, margin_pct: float, b: float) -> None:
    """With steps of 1 Mvar the plan has the next whole step above the closed form's susceptance."""
    assert susceptance(margin_pct) == pytest.approx(b, abs=1e-6)
    result = size(two_buses(tmp_path, margin_pct, step_mvar=1.0, most=60))
    assert result.plan is not None
    assert [row.steps for row in result.plan.rows] == [math.ceil(100.0 * b)]


def test_met_within_the_tolerance(tmp_path: Path) -> None:
    """A margin short of the requirement by less than 1e-6 of the base counts as met, by more does not."""
    exact = nose_mw(0.3) / LOAD_MW * 100.0 - 100.0
    for k, (short, steps) in enumerate(((0.9e-4, 3), (1.1e-4, 4))):
        result = size(two_buses(tmp_path / str(k), exact + short))
        assert result.plan is not None
        assert [row.steps for row in result.plan.rows] == [steps]


def test_out_of_reach(tmp_path: Path) -> None:
    """With two steps at most 5 % is out of reach; the margin shown is that of both steps."""
    result = size(two_buses(tmp_path, most=2))
    assert result.status == "unreachable"
    assert result.plan is None
    assert result.cost is None
    (outage,) = [case for case in result.cases_after if case.case == "line one"]
    assert outage.margin_pct == pytest.approx(MARGINS_PCT[2], abs=5e-5)
    assert not outage.met


def test_extension_of_existing_steps(tmp_path: Path) -> None:
    """Two of three steps exist: the third alone is paid, with its site and without a second bay."""
    result = size(two_buses(tmp_path, existing=2))
    assert result.plan is not None
    assert [row.steps for row in result.plan.rows] == [1]
    assert result.cost == pytest.approx(300.0 + 140.0)


@pytest.mark.parametrize(("budget", "status"), [(1420.0, "optimal"), (1419.0, "unreachable")])
def test_budget_at_the_optimum_and_below(tmp_path: Path, budget: float, status: str) -> None:
    """A budget of just the least cost is enough; one unit less and no plan is left."""
    result = size(two_buses(tmp_path, more=f"[limits]\nbudget = {budget}\n"))
    assert result.status == status
    assert result.cost == (1420.0 if status == "optimal" else None)
