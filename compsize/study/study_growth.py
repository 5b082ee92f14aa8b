"""``[growth]``: which loads grow in which direction, and who picks it up."""

from __future__ import annotations

import math
from typing import Literal, cast

import numpy as np

from compsize.study.context import Context
from compsize.study.keys import Values
from compsize.study.records import Growth, Loads, NetworkTables
from compsize.study.schema import nearest, nearest_id
from compsize.study.schema_tables import GROWTH

__all__ = ["read_growth"]

_NO_GROWTH = Growth((), (), (), 0.0, "", "as base")


def read_growth(context: Context, values: Values) -> Growth:
    """Makes the load direction; where that fails, faults are noted and an empty direction returned.

    A load of the selection contributes its ``p_mw`` and, for ``"as base"``, its ``q_mvar``. With a number
    as power factor, loads with positive MW get the Mvar of that power factor (lagging positive, leading
    negative); loads with zero or negative MW keep P and Q in proportion. Loads out of service never grow:
    a selection passes over them, and naming one is a fault.
    """
    known = context.draft is not None and context.ids("loads") is not None
    ratio = _power_factor(context, values)
    direction: tuple[list[int], list[float], list[float], str] | None = None
    if "loads" in values.given and "table" in values.given:
        context.fault("growth.table", "both 'loads' and 'table' are given.", "Remove one of them.")
    elif "table" in values.given:
        direction = _from_table(context, values, ratio)
    elif known:
        direction = _from_selection(context, values, ratio)
    if direction is None or not known or context.draft is None:
        return _NO_GROWTH
    tables = context.draft.tables
    chosen, dp, dq, words = direction
    total = math.fsum(dp)
    if not math.isnan(total) and total <= 0:
        key = "growth.table" if "table" in values.given else "growth.loads"
        context.fault(key, f"the load direction adds up to {total:g} MW.", "Its sum must be above 0 MW.")
    _check_pickup(context, values, tables)
    return Growth(
        loads=tuple(tables.loads.load[at] for at in chosen),
        dp_mw=tuple(dp),
        dq_mvar=tuple(dq),
        base_mw=math.fsum(float(tables.loads.p_mw[at]) for at in chosen),
        description=words,
        power_factor="as base" if ratio is None else f"{_given_factor(values):g}",
        pickup=cast(Literal["proportional", "slack", "headroom", "table"], values.text("pickup")),
        pickup_limits=values.flag("pickup_limits"),
        generator_limits=values.flag("generator_limits"),
        slack_limits=values.flag("slack_limits"),
        taps=cast(Literal["locked", "moving"], values.text("taps")),
    )


def _given_factor(values: Values) -> float:
    return float(cast(float, values.found["power_factor"]))


def _power_factor(context: Context, values: Values) -> float | None:
    """Mvar per MW of the added part, None for "as base"."""
    given = values.found.get("power_factor")
    if given == "as base":
        return None
    if isinstance(given, bool) or not isinstance(given, int | float) or not 0 < abs(given) <= 1:
        remedy = 'Write "as base", or a number from 0 to 1 (lagging) or from -1 to 0 (leading).'
        context.fault("growth.power_factor", f"'{given}' is not a power factor.", remedy)
        return None
    return math.copysign(math.sqrt(max(0.0, 1.0 - given * given)) / abs(given), given) if abs(given) < 1 else 0.0


def _reactive(p_mw: float, q_mvar: float, ratio: float | None) -> float:
    return q_mvar if ratio is None or p_mw <= 0 else p_mw * ratio


def _from_selection(
    context: Context, values: Values, ratio: float | None
) -> tuple[list[int], list[float], list[float], str] | None:
    assert context.draft is not None
    loads = context.draft.tables.loads
    selection = values.found.get("loads")
    before = len(context.faults)
    if selection is None or selection == "all":
        chosen, words = np.flatnonzero(loads.status).tolist(), "all loads"
        if not chosen:
            context.fault("growth.loads", "the network has no load in service.", "Add loads.")
    elif isinstance(selection, list):
        chosen = _listed(context, loads, selection)
        words = "load " + chosen_words(loads, chosen)
    elif isinstance(selection, dict):
        chosen, words = _selected(context, context.draft.tables, selection)
    else:
        remedy = 'Write "all", a list of load ids, { group = "..." } or { area = "..." }.'
        context.fault("growth.loads", f"'{selection}' selects no loads.", remedy)
        return None
    if len(context.faults) > before:
        return None
    dp = [float(loads.p_mw[at]) for at in chosen]
    dq = [_reactive(p, float(loads.q_mvar[at]), ratio) for p, at in zip(dp, chosen, strict=True)]
    if all(p == 0 for p in dp):
        remedy = "Shares follow p_mw; give the direction by a table instead."
        context.fault("growth.loads", "every load that should grow has 0 MW today.", remedy)
        return None
    return chosen, dp, dq, words


def chosen_words(loads: Loads, chosen: list[int]) -> str:
    """Names a list of loads in a few words."""
    names = [loads.load[at] for at in chosen]
    return ", ".join(names) if len(names) <= 5 else f"{', '.join(names[:4])} and {len(names) - 4} more"


def _listed(context: Context, loads: Loads, names: list[object]) -> list[int]:
    index = {load: at for at, load in enumerate(loads.load)}
    chosen: list[int] = []
    if not names:
        context.fault("growth.loads", "the list of loads is empty.", "Name at least one load.")
    for entry in names:
        name = str(entry).strip()
        if not isinstance(entry, str):
            context.fault("growth.loads", f"'{entry}' is not a text.", "Write load ids in double quotes.")
        elif name not in index:
            context.fault("growth.loads", f"there is no load '{name}'.", nearest_id(name, index, "load"))
        elif index[name] in chosen:
            context.fault("growth.loads", f"the load '{name}' is listed twice.", "List it once.")
        elif not loads.status[index[name]]:
            remedy = "Switch it on in loads, or leave it out."
            context.fault("growth.loads", f"the load '{name}' is out of service.", remedy)
        else:
            chosen.append(index[name])
    return chosen


def _selected(context: Context, tables: NetworkTables, selection: dict[str, object]) -> tuple[list[int], str]:
    loads = tables.loads
    wrong = [key for key in selection if key not in ("group", "area")]
    for key in wrong:
        context.fault(f"growth.loads.{key}", f"unknown key '{key}'.", nearest(key, ("group", "area")))
    if wrong:
        return [], ""
    if len(selection) != 1 or not isinstance(wanted := next(iter(selection.values())), str):
        remedy = 'Write { group = "..." } or { area = "..." }.'
        context.fault("growth.loads", "one group or one area is needed.", remedy)
        return [], ""
    kind, wanted = next(iter(selection)), wanted.strip()
    area = dict(zip(tables.buses.bus, tables.buses.area, strict=True))
    where = loads.group if kind == "group" else tuple(area.get(bus, "") for bus in loads.bus)
    known = {name for name in (loads.group if kind == "group" else tables.buses.area) if name}
    chosen = [at for at, name in enumerate(where) if wanted and name == wanted and loads.status[at]]
    if wanted not in known:
        remedy = nearest_id(wanted, sorted(known), kind)
        context.fault("growth.loads", f"there is no {kind} '{wanted}'.", remedy)
    elif not chosen:
        context.fault("growth.loads", f"the {kind} '{wanted}' has no load in service.", f"Name another {kind}.")
    return chosen, f"{kind} {wanted}"


def _from_table(
    context: Context, values: Values, ratio: float | None
) -> tuple[list[int], list[float], list[float], str] | None:
    if "table" in values.faulty:
        return None
    rows = context.table("growth.table", values.text("table"), GROWTH, context.references())
    ids = context.ids("loads")
    if rows is None or ids is None or context.draft is None:
        return None
    loads = context.draft.tables.loads
    index = {load: at for at, load in enumerate(ids)}
    chosen: list[int] = []
    dp: list[float] = []
    dq: list[float] = []
    for at, name in enumerate(rows.texts["load"]):
        if not name:
            continue
        if name not in index:
            message, remedy = f"there is no load '{name}'.", nearest_id(name, index, "load")
            context.faults.add(
                rows.file,
                message,
                f"{remedy} A new load of 0 MW belongs into loads first.",
                row=rows.row(at),
                column="load",
            )
            continue
        load = index[name]
        if not loads.status[load]:
            context.faults.add(
                rows.file,
                f"the load '{name}' is out of service.",
                "Switch it on in loads, or leave it out.",
                row=rows.row(at),
                column="load",
            )
            continue
        p, q = float(rows.numbers["dp_mw"][at]), float(rows.numbers["dq_mvar"][at])
        if math.isnan(q) and not math.isnan(p):
            q = _blank_reactive(context, p, loads, load, ratio, file=rows.file, row=rows.row(at))
        chosen.append(load)
        dp.append(p)
        dq.append(q)
    return chosen, dp, dq, f"{rows.file} ({len(chosen)} loads)"


def _blank_reactive(
    context: Context, dp: float, loads: Loads, load: int, ratio: float | None, *, file: str, row: int | None
) -> float:
    """Reactive part of a row that leaves it blank: by the power factor, else in the load's own proportion."""
    p_mw, q_mvar = float(loads.p_mw[load]), float(loads.q_mvar[load])
    if ratio is not None and dp > 0:
        return dp * ratio
    if p_mw != 0 or dp == 0:
        return 0.0 if dp == 0 else dp * q_mvar / p_mw
    if not any(fault.file == file and fault.row == row for fault in context.faults):
        remedy = "Give dq_mvar, or a number as growth.power_factor."
        context.faults.add(file, "dq_mvar is blank and the load has 0 MW today.", remedy, row=row, column="dq_mvar")
    return math.nan


def _check_pickup(context: Context, values: Values, tables: NetworkTables) -> None:
    units, loads = tables.generators, tables.loads
    if context.ids("generators") is None or "pickup" in values.faulty:
        return
    others = units.status & ~units.slack
    if values.text("pickup") == "table":
        total = float(np.nansum(np.where(units.status, units.pickup, 0.0)))
        if total <= 0:
            remedy = "Fill the column pickup of generators for units in service."
            context.fault("growth.pickup", "no unit in service has a share in the column pickup.", remedy)
    elif values.text("pickup") == "headroom":
        room = np.where(units.status, units.p_max_mw - units.p_mw, np.nan)
        if not (np.nan_to_num(room, nan=0.0) > 0).any():
            remedy = "Fill the column p_max_mw of generators for units in service."
            context.fault("growth.pickup", "no unit in service has p_max_mw above p_mw.", remedy)
    elif values.text("pickup") == "proportional" and (units.p_mw[others] != 0).any():
        base = float(np.nansum(np.where(loads.status, loads.p_mw, 0.0)))
        if base <= 0:
            remedy = 'Choose pickup = "slack", "headroom" or "table".'
            message = f"the loads in service add up to {base:g} MW, so units have no shares."
            context.fault("growth.pickup", message, remedy)
