"""The margin tables and the pictures of margins and noses, as content."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from compsize.plan.records import CaseMargin, NoseCurve
from compsize.report.blocks import (
    BarRow,
    Bars,
    Cell,
    Column,
    Curve,
    CurveChart,
    CurveCharts,
    Ident,
    Point,
    Table,
    Words,
)
from compsize.report.shown import shown, shown_pair, shown_row
from compsize.report.words import NOSES, amount

__all__ = [
    "CasePair",
    "bars_of",
    "binding",
    "curves_of",
    "details_table",
    "margins_table",
    "miss_words",
    "mw_decimals",
    "pair_up",
    "surplus",
    "worst_first",
]

Basis = tuple[tuple[str, str], ...]

MOST_BARS = 24
MOST_NAMES = 6
DASH = "\N{EN DASH}"
NO_NOSE = "not located"


@dataclass(frozen=True)
class CasePair:
    """A case without and with the plan; None where it does not exist (the loss of a bank not yet built)."""

    before: CaseMargin | None
    after: CaseMargin | None

    @property
    def last(self) -> CaseMargin:
        """The state that counts: with the plan where that was evaluated."""
        found = self.after or self.before
        assert found is not None
        return found


def pair_up(before: Sequence[CaseMargin], after: Sequence[CaseMargin]) -> list[CasePair]:
    """Each case once, in the order of the cases with the plan, then those that only exist without it."""
    first = {case.case: case for case in before}
    last = {case.case: case for case in after}
    return [CasePair(first.get(name), last.get(name)) for name in (*last, *(n for n in first if n not in last))]


def surplus(case: CaseMargin) -> float:
    """Margin beyond the requirement [MW]; -inf where no nose was located, inf where nothing is required."""
    if case.margin_mw is None:
        return -math.inf
    return math.inf if case.required_mw is None else case.margin_mw - case.required_mw


def worst_first(pairs: Sequence[CasePair]) -> list[CasePair]:
    """Cases that miss their requirement first, then by what is left beyond it."""
    return sorted(pairs, key=lambda pair: (pair.last.met, surplus(pair.last)))


def binding(cases: Sequence[CaseMargin]) -> frozenset[str]:
    """Cases that are met with the least to spare, once all are met; several if equal to 1e-6 of the base."""
    if not all(case.met for case in cases):
        return frozenset()
    met = [case for case in cases if case.margin_mw is not None and case.required_mw is not None]
    if not met:
        return frozenset()
    least = min(surplus(case) for case in met)
    return frozenset(c.case for c in met if surplus(c) <= least + 1e-6 * max(1.0, abs(c.base_mw)))


def mw_decimals(cases: Sequence[CaseMargin]) -> int:
    """Places for MW: about five figures of the largest nose."""
    largest = max(
        (abs(value) for case in cases for value in (case.base_mw, case.nose_mw) if value is not None), default=0
    )
    return 1 if largest >= 10_000 else 2 if largest >= 10 else 4


def margins_table(key: str, caption: Words, pairs: Sequence[CasePair], labels: tuple[str, str], basis: Basis) -> Table:
    """Noses and margins by case, worst first; ``labels`` head the two states (empty: leave that state out)."""
    cases = [case for pair in pairs for case in (pair.before, pair.after) if case is not None]
    decimals = mw_decimals(cases)
    columns = [
        Column("case", "Case", "id"),
        Column("class", "Class", "id"),
        Column("base_mw", "Base load", "number", "MW", decimals=decimals),
        Column("required_mw", "Required margin", "number", "MW", decimals=decimals),
    ]
    for label in filter(None, labels):
        columns += [
            Column("nose_mw", "Nose", "number", "MW", label, decimals),
            Column("margin_mw", "Margin", "number", "MW", label, decimals),
            Column("met", "Met", "verdict", "", label),
        ]
    tight = binding([pair.last for pair in pairs])
    rows, marks = [], []
    for pair in worst_first(pairs):
        case = pair.last
        states = [state for state, label in ((pair.before, labels[0]), (pair.after, labels[1])) if label]
        margins, required = shown_row(
            [(s.margin_mw, s.met) for s in states if s is not None], case.required_mw, decimals
        )
        row = [
            Cell(case.case, case.case),
            Cell(case.klass, case.klass),
            Cell(case.base_mw, shown(case.base_mw, decimals)),
            Cell(case.required_mw, required or DASH),
        ]
        texts = iter(margins)
        for state in states:
            row += [Cell(None, DASH)] * 3 if state is None else _state_cells(state, next(texts), decimals)
        rows.append(tuple(row))
        marks.append("not met" if not case.met else "binding" if case.case in tight else "")
    note = (
        "Worst first: cases that miss their requirement, then by what is left beyond it. "
        "MW are nominal (at 1 pu) and count the load that grows."
    )
    if tight:
        note += " Binding: met with the least to spare."
    if any(case.nose_kind == "none" for case in cases):
        note += " \N{GREATER-THAN OR EQUAL TO}: no turn was found up to this loading."
    return Table(key, caption, tuple(columns), tuple(rows), tuple(marks), notes=((note,),), basis=basis)


def _state_cells(case: CaseMargin, margin: str, decimals: int) -> list[Cell]:
    tone = "good" if case.met else "bad"
    verdict = Cell("yes" if case.met else "no", "yes" if case.met else "no", "good" if case.met else "bad")
    if case.margin_mw is None:
        nose = shown(case.nose_mw, decimals) or NO_NOSE
        return [Cell(case.nose_mw, nose), Cell(None, DASH, "bad" if tone == "bad" else "plain"), verdict]
    open_end = "\N{GREATER-THAN OR EQUAL TO}\N{NARROW NO-BREAK SPACE}" if case.nose_kind == "none" else ""
    return [
        Cell(case.nose_mw, open_end + shown(case.nose_mw, decimals) if case.nose_mw is not None else DASH),
        Cell(case.margin_mw, open_end + margin, "bad" if tone == "bad" else "plain"),
        verdict,
    ]


def details_table(key: str, caption: Words, cases: Sequence[CaseMargin], basis: Basis) -> Table:
    """Where and how each case turns: kind of nose, buses, devices at a limit, steps not in use."""
    with_off = any(case.steps_off for case in cases)
    columns = [
        Column("case", "Case", "id"),
        Column("margin_pct", "Margin", "number", "%", decimals=2),
        Column("nose_kind", "Kind of nose"),
        Column("weakest_bus", "Name", "id", "", "Fastest falling bus"),
        Column("weakest_v_pu", "Voltage", "number", "pu", "Fastest falling bus", 4),
        Column("lowest_bus", "Name", "id", "", "Lowest bus"),
        Column("lowest_v_pu", "Voltage", "number", "pu", "Lowest bus", 4),
        Column("limited_devices", "At a limit", "id"),
        *([Column("steps_off", "Steps off", "id")] if with_off else []),
        Column("status", "Remark", "quote"),
    ]
    rows = []
    for pair in worst_first([CasePair(None, case) for case in cases]):
        case = pair.last
        percent = shown_pair(case.margin_pct, _required_pct(case), case.met)[0]
        row = [
            Cell(case.case, case.case),
            Cell(case.margin_pct, percent or DASH),
            Cell(case.nose_kind, NOSES.get(case.nose_kind, case.nose_kind)),
            Cell(case.weakest_bus, case.weakest_bus),
            Cell(case.weakest_v_pu, shown(case.weakest_v_pu, 4)),
            Cell(case.lowest_bus, case.lowest_bus),
            Cell(case.lowest_v_pu, shown(case.lowest_v_pu, 4)),
            _names(case.limited_devices),
            *([Cell(case.steps_off, case.steps_off)] if with_off else []),
            Cell(case.status, "" if case.status == "ok" else case.status),
        ]
        rows.append(tuple(row))
    return Table(key, caption, tuple(columns), tuple(rows), basis=basis)


def _required_pct(case: CaseMargin) -> float | None:
    """What is required as a share of the same base as ``margin_pct`` [%]."""
    if case.required_mw is None or not case.margin_mw or case.margin_pct is None:
        return None
    return case.required_mw * (case.margin_pct / case.margin_mw)


def _names(names: tuple[str, ...]) -> Cell:
    rest = len(names) - MOST_NAMES
    return Cell(" ".join(names), f"and {rest:,} more" if rest > 0 else "", parts=names[:MOST_NAMES])


def miss_words(case: CaseMargin) -> Words:
    """The margin of a case against its requirement, in words that follow the case's name."""
    if case.margin_mw is None:
        return (" has no located nose",)
    margin, required = shown_pair(case.margin_mw, case.required_mw, case.met, mw_decimals([case]))
    if not required:
        return (f" has {margin} MW",)
    return (f" has {margin} MW where {required} MW are required",)


def bars_of(pairs: Sequence[CasePair], labels: tuple[str, str]) -> Bars:
    """The margins as bars, worst first and at most :data:`MOST_BARS` cases."""
    chosen = worst_first(pairs)[:MOST_BARS]
    decimals = mw_decimals([case for pair in pairs for case in (pair.before, pair.after) if case is not None])
    rows = tuple(_bar(pair, labels, decimals) for pair in chosen)
    remarks: list[Words] = []
    if len(pairs) > len(chosen):
        remarks.append((f"The {len(chosen)} worst of {amount(len(pairs), 'case')}; the table has them all.",))
    if any(row.before is None and row.after is None for row in rows):
        remarks.append(("A case without bars has no located nose.",))
    missed = sum(not pair.last.met for pair in pairs)
    description = (
        f"Horizontal bars of the margin in MW of {amount(len(chosen), 'case')}, each with a mark at the required "
        f"margin. {amount(missed, 'case misses', 'cases miss')} the requirement."
    )
    return Bars(rows, labels[0], labels[1], description, tuple(remarks))


def _bar(pair: CasePair, labels: tuple[str, str], decimals: int) -> BarRow:
    states = (pair.before if labels[0] else None, pair.after if labels[1] else None)
    values = [(state.margin_mw, state.met) if state is not None else (None, None) for state in states]
    texts, _ = shown_row(values, pair.last.required_mw, decimals)
    case = pair.last
    return BarRow(case.case, values[0][0], values[1][0], case.required_mw, case.met, texts[0], texts[1])


def curves_of(curves: Sequence[NoseCurve], prefer: Sequence[str], labels: tuple[str, str]) -> CurveCharts | None:
    """The nose curves, one chart a case; the first of the cases ``prefer`` that has a curve is shown first."""
    cases = tuple(dict.fromkeys(curve.case for curve in curves))
    if not cases:
        return None
    charts = tuple(_chart([curve for curve in curves if curve.case == case], labels) for case in cases)
    first = next((cases.index(case) for case in prefer if case in cases), 0)
    return CurveCharts(charts, first)


def _chart(curves: Sequence[NoseCurve], labels: tuple[str, str]) -> CurveChart:
    head = curves[0]
    target = next((c.operating_mw + c.required_mw for c in curves if c.required_mw is not None), None)
    drawn: list[Curve] = []
    remarks: list[Words] = []
    said: list[str] = []
    target_text = shown(target, 2)
    for curve in sorted(curves, key=lambda c: c.plan == "after"):
        label = labels[curve.plan == "after"]
        operating = None if curve.operating_v_pu is None else Point(curve.operating_mw, curve.operating_v_pu)
        required = None if target is None else _on_upper_branch(curve, target)
        after = curve.plan == "after"
        drawn.append(Curve(label, after, curve.bus, curve.load_mw, curve.v_pu, curve.nose_index, operating, required))
        nose = drawn[-1].nose
        # The nose is compared with the required load, so it must not round up to it either.
        nose_text, limit_text = shown_pair(nose.mw, target, None, 2)
        target_text = max(target_text, limit_text, key=len)
        end = "No turn up to" if curve.nose_kind == "none" else "Nose at"
        words = f"{label}: {end[0].lower() + end[1:]} {nose_text} MW, {shown(nose.v_pu, 3)} pu"
        kind = f" ({NOSES[curve.nose_kind]})" if curve.nose_kind in ("fold", "limit") else ""
        remarks.append((f"{words}{kind}, at bus ", Ident(curve.bus), "."))
        said.append(words + kind)
        if operating is None:
            remarks.append((f"{label}: today's load has no solution in this case, so there is no operating point.",))
    if target is not None:
        said.append(f"required load {target_text} MW, load today {shown(head.operating_mw, 2)} MW")
    description = "Bus voltage in pu against load in MW. " + "; ".join(said) + "."
    return CurveChart(head.case, tuple(drawn), head.operating_mw, target, description, tuple(remarks))


def _on_upper_branch(curve: NoseCurve, mw: float) -> Point | None:
    """The point before the nose at this load, between two computed points on a straight line."""
    for i in range(curve.nose_index):
        low, high = curve.load_mw[i], curve.load_mw[i + 1]
        if low <= mw <= high and high > low:
            share = (mw - low) / (high - low)
            return Point(mw, curve.v_pu[i] + share * (curve.v_pu[i + 1] - curve.v_pu[i]))
    return None
