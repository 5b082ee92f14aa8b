"""What comes out of a run: plain values, names and MW; nothing here knows a solver or an internal number.

Every record is a frozen dataclass with the same fields whatever the outcome. ``None`` stands for "has
no value here" (a margin of a case that could not be evaluated, a gap without a plan).
"""

from __future__ import annotations

import dataclasses
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any, Literal, cast

if TYPE_CHECKING:
    import pandas as pd

NoseKind = Literal["fold", "limit", "none", ""]
Status = Literal["optimal", "feasible", "unreachable", "limit"]


@dataclass(frozen=True)
class CaseMargin:
    """The nose of one case (the intact network or an outage), a row of ``margins.csv``.

    ``base_mw``, ``nose_mw``, ``margin_mw`` and ``required_mw`` count nominal MW (at 1 pu) of the load
    that grows. ``status`` is ``ok``, or says in words what is particular about the case; ``margin_mw``
    is None where no nose was located.
    """

    case: str
    klass: str
    base_mw: float
    nose_mw: float | None
    margin_mw: float | None
    margin_pct: float | None
    required_mw: float | None
    met: bool
    nose_kind: NoseKind
    weakest_bus: str
    weakest_v_pu: float | None
    lowest_bus: str
    lowest_v_pu: float | None
    limited_devices: tuple[str, ...]
    steps_off: str
    status: str


@dataclass(frozen=True)
class PlanRow:
    """New steps of one equipment at one site; ``cost`` leaves out the site cost."""

    site: str
    equipment: str
    kind: str
    steps: int
    step_mvar: float
    total_mvar: float
    cost: float


@dataclass(frozen=True)
class Plan:
    """A plan: its rows and the site costs (once per site with new steps). The empty plan costs 0."""

    rows: tuple[PlanRow, ...] = ()
    site_costs: tuple[tuple[str, float], ...] = ()

    @property
    def cost(self) -> float:
        """Total cost in the study's currency."""
        return sum(row.cost for row in self.rows) + sum(cost for _, cost in self.site_costs)

    @property
    def sites(self) -> tuple[str, ...]:
        """Sites with new steps, in candidate order."""
        return tuple(dict.fromkeys(row.site for row in self.rows))

    def to_frame(self) -> pd.DataFrame:
        return table_frame(self.rows, PlanRow)


@dataclass(frozen=True)
class NoseCurve:
    """One nose curve for a picture: voltage [pu] of ``bus`` against MW of the load that grows.

    Points run from the lightest load over the nose to the lower branch; ``nose_index`` is the nose.
    ``required_mw`` is the required margin: the required load lies that far above ``operating_mw``.
    ``operating_v_pu`` is None where the base load has no solution.
    """

    case: str
    plan: Literal["before", "after"]
    bus: str
    load_mw: tuple[float, ...]
    v_pu: tuple[float, ...]
    nose_index: int
    operating_mw: float
    operating_v_pu: float | None
    required_mw: float | None
    nose_kind: NoseKind


@dataclass(frozen=True)
class VoltageCheck:
    """One voltage condition of a plan. ``name`` is the key of ``[voltage]`` it belongs to."""

    name: str
    case: str
    bus: str
    value: float
    limit: float
    unit: str
    met: bool
    note: str = ""


@dataclass(frozen=True)
class StepCheck:
    """One step fewer of a row of the plan: the constraint that then breaks, or why it costs no less."""

    site: str
    equipment: str
    steps: int
    cost: float
    breaks: str
    """In words: the case and its margin against the requirement, or the voltage condition."""


@dataclass(frozen=True)
class ProofPart:
    """Plans excluded by one means, the assumption it rests on and how often that was tested."""

    means: str
    plans: int
    assumption: str
    tests: int = 0
    tests_failed: int = 0


@dataclass(frozen=True)
class Proof:
    """Why nothing cheaper works. ``kind`` is ``full``, ``relaxation``, ``covers``, ``mixed`` or ``none``."""

    kind: str
    sentence: str
    cheaper_plans: int | None = None
    parts: tuple[ProofPart, ...] = ()
    traced: int = 0
    """Deciding noses traced again from the operating point."""
    flips: int = 0
    """How many of these changed a verdict (each was corrected and widened the check)."""


@dataclass(frozen=True)
class RunnerUp:
    """A dearer plan that also meets everything, or a cheaper one and what it breaks."""

    plan: Plan
    cost: float
    meets: bool
    note: str


@dataclass(frozen=True)
class Verification:
    """The second opinion on the chosen plan by code that shares nothing with the search."""

    passed: bool
    cases: int
    worst_residual_mva: float
    sentence: str
    failures: tuple[str, ...] = ()
    one_step_fewer: tuple[StepCheck, ...] = ()


@dataclass(frozen=True)
class Counts:
    """Effort: deterministic counters, comparable between machines."""

    noses: int = 0
    factorisations: int = 0
    master_solves: int = 0
    relaxations: int = 0
    plans_walked: int = 0
    noses_traced: int = 0
    fallbacks: int = 0


@dataclass(frozen=True)
class MarginsResult:
    """Outcome of ``compsize margins``."""

    title: str
    cases: tuple[CaseMargin, ...]
    counts: Counts
    study_hash: str
    version: str
    basis: tuple[tuple[str, str], ...] = ()
    notes: tuple[str, ...] = ()

    @property
    def met(self) -> bool:
        return all(case.met for case in self.cases)

    def to_frame(self) -> pd.DataFrame:
        return table_frame(self.cases, CaseMargin)


@dataclass(frozen=True)
class SizeResult:
    """Outcome of ``compsize size``, whatever it is.

    ``plan`` is None only with status ``unreachable`` or ``limit``; ``cases_after`` then describes the
    plan with the best reachable margins. ``cost_bound`` is a proved lower bound on the cost of any plan
    that meets everything; ``gap_pct`` is (cost - cost_bound) / cost in percent, 0 for a zero-cost optimum.
    """

    title: str
    status: Status
    sentence: str
    plan: Plan | None
    cost: float | None
    cost_bound: float | None
    gap_pct: float | None
    proof: Proof
    cases_before: tuple[CaseMargin, ...]
    cases_after: tuple[CaseMargin, ...]
    voltages: tuple[VoltageCheck, ...]
    runners_up: tuple[RunnerUp, ...]
    verification: Verification | None
    curves: tuple[NoseCurve, ...]
    counts: Counts
    study_hash: str
    version: str
    basis: tuple[tuple[str, str], ...] = ()
    """What every table rests on: pairs of a name and words (load direction, power factor, pick-up, ...)."""
    notes: tuple[str, ...] = ()
    seconds: float = 0.0
    report: tuple[tuple[str, str], ...] = field(default=())
    """The words of ``[report]``: project, author, currency, price_year, notes."""

    def to_frame(self) -> pd.DataFrame:
        """The plan as a table (no rows: nothing to build, or no plan)."""
        return (self.plan or Plan()).to_frame()


COLUMN_NAMES = {"klass": "class"}


def table_columns(record: type) -> tuple[str, ...]:
    """Column names of a table of ``record``, as they stand in the files."""
    return tuple(COLUMN_NAMES.get(f.name, f.name) for f in dataclasses.fields(record))


def table_rows(records: Sequence[Any]) -> Iterator[dict[str, Any]]:
    """Rows of a table; tuples are joined by spaces, yes/no becomes ``yes`` or ``no``, None stays None."""
    for record in records:
        row: dict[str, Any] = {}
        for f in dataclasses.fields(record):
            value = getattr(record, f.name)
            if isinstance(value, bool):
                value = "yes" if value else "no"
            elif isinstance(value, tuple):
                value = " ".join(str(item) for item in value)
            row[COLUMN_NAMES.get(f.name, f.name)] = value
        yield row


def table_frame(records: Sequence[Any], record: type) -> pd.DataFrame:
    """The table as a pandas frame."""
    import pandas as pd

    return pd.DataFrame(list(table_rows(records)), columns=list(table_columns(record)))


def to_plain(value: Any) -> Any:
    """Dataclasses, tuples and numbers as JSON-ready values; ``klass`` becomes ``class``."""
    if dataclasses.is_dataclass(value) and not isinstance(value, type):
        return {COLUMN_NAMES.get(f.name, f.name): to_plain(getattr(value, f.name)) for f in dataclasses.fields(value)}
    if isinstance(value, (tuple, list)):
        return [to_plain(item) for item in value]
    if isinstance(value, dict):
        return {str(key): to_plain(item) for key, item in value.items()}
    if hasattr(value, "item"):
        return cast(Any, value).item()
    return value
