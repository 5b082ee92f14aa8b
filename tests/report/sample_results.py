"""Invented results of every status, as the report gets them: names and figures are made up.

The nose curves are those of two buses: a source of 1 pu behind a reactance X feeding a load of power
factor 0.95 lagging with a shunt susceptance B, in closed form (a quadratic in the squared voltage), on a
base of 300 MVA; upper branch from 60 MW, nose, lower branch back to 60 MW.
"""

from __future__ import annotations

import math
from dataclasses import replace

from compsize.plan.records import (
    CaseMargin,
    Counts,
    MarginsResult,
    NoseCurve,
    Plan,
    PlanRow,
    Proof,
    ProofPart,
    RunnerUp,
    SizeResult,
    StepCheck,
    Verification,
    VoltageCheck,
)

HASH = "5f2d1c7e" * 8
TAN = math.tan(math.acos(0.95))

NASTY = (
    "=1+1",
    "<script>document.title='owned'</script>",
    "\"quoted\", and 'single'",
    "Zürich-Ångström-Łódź",
    "N" * 200,
    "محطة الشمال 3",
    "\N{RIGHT-TO-LEFT OVERRIDE}reversed",
    "&amp;<b>bold</b>",
    "$x_1$ {{ 7*7 }}",
)

BASIS = (
    ("Load direction", "all loads, shares follow p_mw"),
    ("Power factor", "as base"),
    ("Pick-up of generation", "proportional to dispatch, the slack takes the losses"),
    ("Reactive limits", "on, but not of the slack unit"),
    ("Taps", "locked"),
)


def case(name: str, margin: float | None, required: float | None = 12.0, **changes: object) -> CaseMargin:
    """A case with 240 MW of growing load; met by its margin unless ``changes`` say otherwise."""
    met = margin is not None and (required is None or margin >= required - 1e-6 * 240)
    fields: dict[str, object] = {
        "case": name,
        "klass": "" if name == "intact" else "bank_outage" if name.startswith("bank:") else "single",
        "base_mw": 240.0,
        "nose_mw": None if margin is None else 240.0 + margin,
        "margin_mw": margin,
        "margin_pct": None if margin is None else margin / 2.4,
        "required_mw": required,
        "met": met,
        "nose_kind": "" if margin is None else "limit" if len(name) % 2 else "fold",
        "weakest_bus": "Oakmere 110",
        "weakest_v_pu": None if margin is None else 0.74183,
        "lowest_bus": "Tarnside 33",
        "lowest_v_pu": None if margin is None else 0.72216,
        "limited_devices": ("G Fellhead 1", "G Fellhead 2"),
        "steps_off": "",
        "status": "ok" if margin is not None else "no nose was located",
    }
    return CaseMargin(**(fields | changes))  # type: ignore[arg-type]


BEFORE = (
    case("intact", 71.4402, 24.0),
    case("Fellhead-Oakmere 1", 9.13077),
    case("Fellhead-Oakmere 2", 14.9),
    case("Oakmere-Tarnside", -4.26112),
    case("Tarnside transformer T1", 26.083),
    case("Fellhead unit 2", 31.7, nose_kind="none", limited_devices=tuple(f"G{i}" for i in range(1, 11))),
)

AFTER = (
    case("intact", 92.118, 24.0),
    case("Fellhead-Oakmere 1", 27.0041),
    case("Fellhead-Oakmere 2", 34.55),
    case("Oakmere-Tarnside", 12.00384, status="9 MW of load at Ghyll are cut off and leave the base"),
    case("Tarnside transformer T1", 40.2),
    case("Fellhead unit 2", 47.9, nose_kind="none"),
    case("bank:Oakmere 110:MSC-15", 12.7725, steps_off="Tarnside 33: 1"),
    case("bank:Tarnside 33:SVC-20", 19.31),
)

PLAN = Plan(
    (
        PlanRow("Oakmere 110", "MSC-15", "bank", 3, 15.0, 45.0, 1_330_000.0),
        PlanRow("Tarnside 33", "SVC-20", "svc", 1, 20.0, 20.0, 2_450_000.0),
    ),
    (("Oakmere 110", 400_000.0), ("Tarnside 33", 250_000.0)),
)

PROOF = Proof(
    "mixed",
    "All 1,204 plans that cost less than 4,430,000 fail a case.",
    1204,
    (
        ProofPart("evaluation, one by one", 1010, "nothing beyond located noses"),
        ProofPart("convex relaxation", 194, "nothing; certificates recomputed to 1e-7"),
    ),
    traced=57,
    flips=1,
)

VERIFICATION = Verification(
    True,
    8,
    3.2e-9,
    "Every case of the plan was traced again from the operating point by separate code.",
    (),
    (
        StepCheck("Oakmere 110", "MSC-15", 2, 4_150_000.0, "Oakmere-Tarnside: margin 8.31 MW, 12 MW required"),
        StepCheck("Tarnside 33", "SVC-20", 0, 1_730_000.0, "post_outage_min_pu: 0.861 pu at Tarnside 33, limit 0.900"),
    ),
)

VOLTAGES = (
    VoltageCheck("intact_min_pu", "intact", "Tarnside 33", 0.97312, 0.95, "pu", True),
    VoltageCheck("intact_max_pu", "intact", "Oakmere 110", 1.04988, 1.05, "pu", True, "one step on"),
    VoltageCheck("post_outage_min_pu", "Oakmere-Tarnside", "Tarnside 33", 0.90011, 0.90, "pu", True),
    VoltageCheck("switching_step_max_pct", "intact", "Oakmere 110", 1.842, 3.0, "%", True),
)

RUNNERS = (
    RunnerUp(
        Plan(
            (PlanRow("Oakmere 110", "MSC-15", "bank", 5, 15.0, 75.0, 1_950_000.0),),
            (("Oakmere 110", 400_000.0),),
        ),
        2_350_000.0,
        False,
        "Oakmere-Tarnside: margin 10.90 MW, 12 MW required",
    ),
    RunnerUp(
        Plan((PlanRow("Tarnside 33", "SVC-20", "svc", 2, 20.0, 40.0, 4_300_000.0),), (("Tarnside 33", 250_000.0),)),
        4_550_000.0,
        True,
        "meets everything",
    ),
)


def two_bus_curve(name: str, plan: str, bare_mw: float, nose_mw: float, required_mw: float | None = 12.0) -> NoseCurve:
    """240 MW today; X is what turns at ``bare_mw`` without compensation, B what moves that to ``nose_mw``."""
    largest = nose_mw / 300
    x = 0.95 / (2 * (bare_mw / 300) * (1 + math.sin(math.acos(0.95))))
    b = (1 - bare_mw / nose_mw) / x
    start = 0.2
    steps = [start + (largest - start) * (1 - (1 - i / 60) ** 2) for i in range(61)]
    upper = [_voltage(p, x, b, 1) for p in steps]
    lower = [_voltage(p, x, b, -1) for p in steps]
    base = 0.8
    return NoseCurve(
        name,
        plan,  # type: ignore[arg-type]
        "Tarnside 33",
        tuple(300 * p for p in (*steps, *reversed(steps[:-1]))),
        (*upper, *reversed(lower[:-1])),
        60,
        240.0,
        _voltage(base, x, b, 1) if base <= largest else None,
        required_mw,
        "fold",
    )


def _voltage(p: float, x: float, b: float, sign: int) -> float:
    k = 1 - b * x
    half = (2 * k * x * p * TAN - 1) / 2
    inside = max(half * half - (k * x * p) ** 2 * (1 + TAN * TAN), 0.0)
    return math.sqrt((-half + sign * math.sqrt(inside)) / (k * k))


CURVES = (
    two_bus_curve("Oakmere-Tarnside", "before", 235.73888, 235.73888),
    two_bus_curve("Oakmere-Tarnside", "after", 235.73888, 252.00384),
    two_bus_curve("Fellhead-Oakmere 1", "before", 249.13077, 249.13077),
    two_bus_curve("Fellhead-Oakmere 1", "after", 249.13077, 267.0041),
)

OPTIMAL = SizeResult(
    title="Fellhead area, winter peak",
    status="optimal",
    sentence="The plan of least cost was found and checked; all 1,204 cheaper plans fail.",
    plan=PLAN,
    cost=4_430_000.0,
    cost_bound=4_430_000.0,
    gap_pct=0.0,
    proof=PROOF,
    cases_before=BEFORE,
    cases_after=AFTER,
    voltages=VOLTAGES,
    runners_up=RUNNERS,
    verification=VERIFICATION,
    curves=CURVES,
    counts=Counts(5120, 46211, 12, 194, 1010, 57, 2),
    study_hash=HASH,
    version="0.1.0",
    basis=BASIS,
    notes=("Branch Ghyll-Tarn was left out of the outages: its loss splits the network.",),
    seconds=12.5,
    report=(("project", "Fellhead reinforcement"), ("author", "Planning"), ("currency", "EUR"), ("price_year", "2024"),
            ("notes", "Draft for discussion.")),
)  # fmt: skip

FEASIBLE = replace(
    OPTIMAL,
    status="feasible",
    sentence="Stopped by the time limit of 60 s with a verified plan.",
    cost_bound=4_150_000.0,
    gap_pct=100 * (4_430_000 - 4_150_000) / 4_430_000,
    proof=Proof("covers", "194 of the cheaper plans are not excluded yet.", 1204,
                (ProofPart("covers", 1010, "fewer steps never raise a margin", 240, 3),)),
)  # fmt: skip

NOTHING = replace(
    OPTIMAL,
    sentence="No new equipment is needed.",
    plan=Plan(),
    cost=0.0,
    cost_bound=0.0,
    gap_pct=0.0,
    proof=Proof("full", "Nothing costs less than 0.", 0),
    cases_before=AFTER[:6],
    cases_after=AFTER[:6],
    runners_up=(),
    verification=Verification(True, 6, 1e-9, "Every case was traced again by separate code."),
)

UNREACHABLE = replace(
    OPTIMAL,
    status="unreachable",
    sentence="Even all steps at all sites leave a case below its requirement.",
    plan=None,
    cost=None,
    cost_bound=None,
    gap_pct=None,
    proof=Proof("full", "Every plan of the candidates fails a case.", 4000),
    cases_after=(*AFTER[:3], case("Oakmere-Tarnside", 11.999), case("Tarnside transformer T1", None), AFTER[5]),
    verification=None,
    runners_up=(),
)

LIMIT = replace(
    OPTIMAL,
    status="limit",
    sentence="Stopped by the time limit of 5 s.",
    plan=None,
    cost=None,
    cost_bound=1_730_000.0,
    gap_pct=None,
    proof=Proof("none", "The search had only begun.", None),
    cases_after=(),
    voltages=(),
    verification=None,
    runners_up=(),
    curves=CURVES[::2],
)

FAILED_VERIFICATION = replace(
    OPTIMAL,
    status="feasible",
    verification=Verification(
        False,
        8,
        4.1,
        "The second code disagrees with the search.",
        ("Oakmere-Tarnside: margin 11.2 MW here, 12.00 MW in the search",),
    ),
)

MARGINS = MarginsResult("Fellhead area, winter peak", BEFORE, Counts(noses=6, factorisations=212), HASH, "0.1.0", BASIS,
                        ("Margins without new equipment.",))  # fmt: skip

SIZES = {
    "optimal": OPTIMAL,
    "feasible": FEASIBLE,
    "nothing": NOTHING,
    "unreachable": UNREACHABLE,
    "limit": LIMIT,
    "failed": FAILED_VERIFICATION,
}


def nasty_result() -> SizeResult:
    """A result in which every name is one that a careless renderer would spoil or run."""
    before = tuple(case(name, 1.0 + i) for i, name in enumerate(NASTY))
    after = tuple(
        case(
            name,
            12.5 + i,
            klass=name,
            weakest_bus=name,
            lowest_bus=name,
            limited_devices=(name, name),
            steps_off=name,
            status=f"remark on {name}",
        )
        for i, name in enumerate(NASTY)
    )
    rows = tuple(PlanRow(name, name, "bank", 1, 10.0, 10.0, 100.0) for name in NASTY)
    plan = Plan(rows, tuple((name, 10.0) for name in NASTY))
    curves = tuple(
        replace(two_bus_curve(name, state, 235.0, nose_mw), bus=name)
        for name in NASTY
        for state, nose_mw in (("before", 235.0), ("after", 252.0))
    )
    return replace(
        OPTIMAL,
        title=NASTY[1],
        sentence=" ".join(NASTY),
        plan=plan,
        cost=plan.cost,
        cost_bound=plan.cost,
        proof=Proof("full", NASTY[1], 3, (ProofPart(NASTY[1], 3, NASTY[6]),)),
        cases_before=before,
        cases_after=after,
        voltages=tuple(VoltageCheck("intact_max_pu", n, n, 1.0, 1.05, "pu", True, n) for n in NASTY),
        runners_up=(RunnerUp(plan, plan.cost, True, NASTY[1]),),
        verification=replace(
            VERIFICATION, one_step_fewer=tuple(StepCheck(n, n, 0, 1.0, n) for n in NASTY), sentence=NASTY[1]
        ),
        curves=curves,
        basis=tuple((name, name) for name in NASTY),
        notes=NASTY,
        report=tuple((key, NASTY[1]) for key in ("project", "author", "currency", "price_year", "notes")),
    )
