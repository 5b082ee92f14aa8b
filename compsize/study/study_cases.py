"""``[contingencies]`` and ``[[requirement]]``: the cases and what is required of them."""

from __future__ import annotations

from typing import Literal, cast

import numpy as np

from compsize.study.check_network import connected_ends
from compsize.study.columns import Columns
from compsize.study.context import Context
from compsize.study.keys import Values
from compsize.study.records import Contingencies, Event, Requirement
from compsize.study.schema import nearest, nearest_id
from compsize.study.schema_tables import CONTINGENCIES
from compsize.study.topology import bridges

__all__ = ["BRANCH_CLASS", "RESERVED", "read_contingencies", "read_requirements"]

RESERVED = ("intact", "outages", "bank_outage")
_PREFIXES = ("branch:", "bank:")
BRANCH_CLASS = "branch"
"""Class of the single branches that ``all_branches`` adds."""
_TABLES = {"branch": "branches", "generator": "generators", "load": "loads", "shunt": "shunts", "svc": "svcs"}


def read_contingencies(context: Context, values: Values) -> Contingencies:
    """The events of the table in file order, then the single branches in the order of ``branches``.

    A single branch that the table lists too stays listed twice: the two entries may differ in class,
    so dropping one could drop a requirement.
    """
    events: list[Event] = []
    if "table" in values.given and "table" not in values.faulty:
        rows = context.table("contingencies.table", values.text("table"), CONTINGENCIES, context.references())
        if rows is not None:
            events = _events(context, rows)
    left_out: tuple[str, ...] = ()
    if values.flag("all_branches") and context.draft is not None and context.ids("branches") is not None:
        singles, left_out = _single_branches(context)
        events += singles
    choice = cast(Literal["step", "site", "none"], values.text("bank_outage"))
    return Contingencies(tuple(events), left_out, choice)


def _events(context: Context, rows: Columns) -> list[Event]:
    faults = context.faults
    names: dict[str, list[tuple[str, str]]] = {}
    classes: dict[str, str] = {}
    known = context.references()
    for at, (name, kind, element, klass) in enumerate(
        zip(*(rows.texts[column] for column in ("contingency", "kind", "element", "class")), strict=True)
    ):
        row = rows.row(at)
        if name in RESERVED or name.startswith(_PREFIXES):
            message = f"the name '{name}' is reserved."
            faults.add(rows.file, message, "Choose another name.", row=row, column="contingency")
        if klass in RESERVED:
            faults.add(rows.file, f"the class '{klass}' is reserved.", "Choose another class.", row=row, column="class")
        table = _TABLES.get(kind, "")
        if element and table in known.ids and element not in known.ids[table]:
            message, remedy = f"there is no {kind} '{element}'.", known.remedy(element, table)
            faults.add(rows.file, message, remedy, row=row, column="element")
        if not name:
            continue
        lost = names.setdefault(name, [])
        if (kind, element) in lost and kind and element:
            message = f"'{name}' loses {kind} '{element}' twice."
            faults.add(rows.file, message, "Remove one of the rows.", row=row, column="element")
        lost.append((kind, element))
        if klass and classes.setdefault(name, klass) != klass:
            message = f"'{name}' has the class '{klass}' here and '{classes[name]}' above."
            faults.add(rows.file, message, "Give all rows of an event one class.", row=row, column="class")
    return [Event(name, classes.get(name, ""), tuple(lost)) for name, lost in names.items()]


def _single_branches(context: Context) -> tuple[list[Event], tuple[str, ...]]:
    assert context.draft is not None
    ends, used = connected_ends(context.draft)
    ids = context.draft.tables.branches.branch
    splits = bridges(len(context.draft.tables.buses.bus), ends)
    events = [
        Event(f"branch:{ids[at]}", BRANCH_CLASS, (("branch", ids[at]),))
        for at, split in zip(used, splits.tolist(), strict=True)
        if not split
    ]
    return events, tuple(ids[at] for at, split in zip(used, splits.tolist(), strict=True) if split)


def read_requirements(
    context: Context, entries: list[tuple[str, Values]], cases: Contingencies, has_candidates: bool, growing_mw: float
) -> tuple[Requirement, ...]:
    """The margins asked for; ``entries`` pair the key's prefix with its values."""
    if not entries:
        context.fault("requirement", "there is no [[requirement]].", "Add one, with cases and margin_mw or margin_pct.")
    classes = sorted({event.klass for event in cases.events} - {""})
    done: list[Requirement] = []
    for where, values in entries:
        wanted, of = values.text("cases"), values.text("of")
        if not {"margin_mw", "margin_pct"} & values.given:
            remedy = "Give margin_mw, margin_pct, or both."
            context.fault(f"{where}margin_mw", "neither margin_mw nor margin_pct is given.", remedy)
        if "cases" not in values.faulty:
            _check_cases(context, f"{where}cases", wanted, classes=classes, cases=cases, has_candidates=has_candidates)
        if "of" not in values.faulty:
            _check_of(context, f"{where}of", of, values.number("margin_pct") is not None, growing_mw)
        done.append(Requirement(wanted, values.number("margin_mw"), values.number("margin_pct"), of))
    return tuple(done)


def _check_cases(
    context: Context, key: str, wanted: str, *, classes: list[str], cases: Contingencies, has_candidates: bool
) -> None:
    if wanted == "intact" or wanted in classes:
        return
    by_bank = cases.bank_outage != "none"
    if wanted == "outages":
        if not cases.events and not (by_bank and has_candidates) and "contingencies.table" not in _faulty_keys(context):
            remedy = "Add [contingencies] with a table or all_branches = true."
            context.fault(key, "the study lists no outages.", remedy)
    elif wanted == "bank_outage":
        if not by_bank:
            context.fault(key, 'contingencies.bank_outage is "none".', 'Set it to "step" or "site".')
    else:
        valid = (*RESERVED, *classes)
        context.fault(key, f"there is no class '{wanted}'.", f"{nearest(wanted, valid)} Known: {', '.join(valid)}.")


def _faulty_keys(context: Context) -> set[str]:
    return {fault.column or "" for fault in context.faults if fault.file == context.file}


def _check_of(context: Context, key: str, of: str, in_percent: bool, growing_mw: float) -> None:
    if of in ("growing", "total"):
        if of == "growing" and in_percent and growing_mw <= 0 and not context.faults:
            remedy = "Give margin_mw, or another base by 'of'."
            context.fault(key, "the growing loads have no positive MW today, so a percentage of it is 0.", remedy)
        return
    if not of.startswith("area:"):
        remedy = 'Write "growing", "total" or "area:NAME".'
        context.fault(key, f"'{of}' is not a base of margin_pct.", remedy)
        return
    if context.draft is None or context.ids("buses") is None:
        return
    name = of.removeprefix("area:").strip()
    tables = context.draft.tables
    areas = sorted(set(tables.buses.area) - {""})
    if name not in areas:
        context.fault(key, f"there is no area '{name}'.", nearest_id(name, areas, "area"))
        return
    area = dict(zip(tables.buses.bus, tables.buses.area, strict=True))
    inside = np.array([area.get(bus) == name for bus in tables.loads.bus], dtype=np.bool_)
    if context.ids("loads") is not None and not (inside & tables.loads.status & ~(tables.loads.p_mw <= 0)).any():
        context.fault(key, f"the area '{name}' has no load with positive MW.", "Name another base.")
