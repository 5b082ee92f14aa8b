"""``[candidates]``, ``[limits]``, ``[stages]``, ``[voltage]`` and ``[report]``."""

from __future__ import annotations

import math
from typing import Literal, cast

import numpy as np

from compsize.study.columns import Columns, References, as_number
from compsize.study.context import Context
from compsize.study.keys import Values
from compsize.study.records import Candidate, Equipment, Limits, ReportText, Stages, VoltageLimits
from compsize.study.schema import nearest_id
from compsize.study.schema_tables import CANDIDATES, EQUIPMENT, STAGES

__all__ = ["read_candidates", "read_limits", "read_report", "read_stages", "read_voltage"]


def read_candidates(context: Context, values: Values) -> tuple[Candidate, ...]:
    """What may be added where, in file order."""
    references = context.references()
    machines: Columns | None = None
    if "equipment" in values.given and "equipment" not in values.faulty:
        key = "candidates.equipment"
        machines = context.table(key, values.text("equipment"), EQUIPMENT, References())
    equipment: dict[str, Equipment] = {}
    if machines is not None:
        equipment = {name: _equipment(machines, at) for at, name in enumerate(machines.texts["equipment"]) if name}
        references.ids["equipment"] = frozenset(equipment)
        _check_equipment(context, machines)
    if "table" not in values.given or "table" in values.faulty:
        return ()
    rows = context.table("candidates.table", values.text("table"), CANDIDATES, references)
    if rows is None:
        return ()
    costs = _site_costs(context, rows)
    _check_candidates(context, rows, equipment)
    done: list[Candidate] = []
    for at, (site, name) in enumerate(zip(rows.texts["site"], rows.texts["equipment"], strict=True)):
        steps, existing = rows.numbers["max_steps"][at], rows.numbers["existing_steps"][at]
        if site and name in equipment and not math.isnan(steps) and not math.isnan(existing):
            group = rows.texts["exclusive_group"][at]
            done.append(Candidate(site, equipment[name], int(steps), costs.get(site, 0.0), group, int(existing)))
    return tuple(done)


def _equipment(rows: Columns, at: int) -> Equipment:
    def optional(name: str) -> float | None:
        value = float(rows.numbers[name][at])
        return None if math.isnan(value) else value

    def number(name: str) -> float:
        return float(rows.numbers[name][at])

    return Equipment(
        equipment=rows.texts["equipment"][at],
        kind=cast(Literal["bank", "svc", "statcom"], rows.texts["kind"][at]),
        step_mvar=number("step_mvar"),
        cost_fixed=number("cost_fixed"),
        cost_per_step=number("cost_per_step"),
        kv=optional("kv"),
        switched=bool(rows.flags["switched"][at]),
        q_absorb_mvar=number("q_absorb_mvar"),
        slope_pct=number("slope_pct"),
        v_ref_pu=optional("v_ref_pu"),
        annual_om_pct=number("annual_om_pct"),
        life_years=optional("life_years"),
        extension_pays_fixed=bool(rows.flags["extension_pays_fixed"][at]),
        reactor_uh=optional("reactor_uh"),
        breaker_peak_ka=optional("breaker_peak_ka"),
        breaker_khz=optional("breaker_khz"),
    )


def _check_equipment(context: Context, rows: Columns) -> None:
    for at, kind in enumerate(rows.texts["kind"]):
        if kind != "bank":
            continue
        for column in ("q_absorb_mvar", "slope_pct", "v_ref_pu"):
            value = rows.numbers[column][at]
            if not math.isnan(value) and value != 0:
                message = f"a bank has no {column}."
                remedy = "Leave the cell blank, or make the kind svc or statcom."
                context.faults.add(rows.file, message, remedy, row=rows.row(at), column=column)


def _site_costs(context: Context, rows: Columns) -> dict[str, float]:
    """The cost of each site; blank cells take what the site's other rows say."""
    costs: dict[str, float] = {}
    for at, site in enumerate(rows.texts["site"]):
        cost = float(rows.numbers["site_cost"][at])
        if site and not math.isnan(cost) and costs.setdefault(site, cost) != cost:
            message = f"the site '{site}' has the site_cost {cost:g} here and {costs[site]:g} above."
            remedy = "It is paid once per site: give one value, or leave the other cells blank."
            context.faults.add(rows.file, message, remedy, row=rows.row(at), column="site_cost")
    return costs


def _check_candidates(context: Context, rows: Columns, equipment: dict[str, Equipment]) -> None:
    bus_kv: dict[str, float] = {}
    if context.draft is not None and context.ids("buses") is not None:
        buses = context.draft.tables.buses
        bus_kv = dict(zip(buses.bus, buses.kv.tolist(), strict=True))
    seen: dict[tuple[str, str], int | None] = {}
    for at, pair in enumerate(zip(rows.texts["site"], rows.texts["equipment"], strict=True)):
        site, name = pair
        row = rows.row(at)
        if rows.numbers["existing_steps"][at] > rows.numbers["max_steps"][at]:
            remedy = "max_steps counts the existing steps too."
            context.faults.add(rows.file, "existing_steps is above max_steps.", remedy, row, "existing_steps")
        if not site or not name:
            continue
        if pair in seen:
            message = f"the site '{site}' lists '{name}' twice (also in row {seen[pair]})."
            context.faults.add(rows.file, message, "Give one row per site and equipment.", row=row, column="equipment")
        seen.setdefault(pair, row)
        rated = equipment[name].kv if name in equipment else None
        if rated is not None and site in bus_kv and not 0.5 <= rated / bus_kv[site] <= 2.0:
            message = f"'{name}' is rated {rated:g} kV and the bus '{site}' has {bus_kv[site]:g} kV."
            context.faults.add(
                rows.file, message, "Choose equipment for the voltage of the bus.", row=row, column="equipment"
            )


def read_limits(values: Values) -> Limits:
    """Limits on new work."""
    sites = values.number("max_sites")
    share = values.number("min_fast_share_pct") or 0.0
    return Limits(values.number("budget"), None if sites is None else int(sites), share)


def read_stages(context: Context, values: Values) -> Stages | None:
    """Loads by year, None where the table cannot be made out."""
    if "table" not in values.given or "table" in values.faulty:
        return None
    rows = context.table("stages.table", values.text("table"), STAGES, context.references())
    if rows is None:
        return None
    years = rows.numbers["year"]
    for at in range(1, rows.size):
        if years[at] <= years[at - 1]:
            message = f"the year {years[at]:g} does not come after {years[at - 1]:g}."
            context.faults.add(
                rows.file, message, "List the years in rising order, each once.", row=rows.row(at), column="year"
            )
    if not rows.extra:
        context.faults.add(rows.file, "no load or group has a column.", "Add a column named as a load id or group.")
    _check_stage_columns(context, rows)
    mw = np.full((rows.size, len(rows.extra)), np.nan)
    for to, (name, cells) in enumerate(rows.extra.items()):
        for at, cell in enumerate(cells):
            value = as_number(cell)
            if value is None:
                message = f"'{cell}' is not a number." if cell else "the cell is blank."
                context.faults.add(rows.file, message, "Write the MW of that year.", row=rows.row(at), column=name)
            else:
                mw[at, to] = value
    if np.isnan(years).any() or np.isnan(mw).any():
        return None
    return Stages(
        tuple(int(year) for year in years),
        tuple(rows.extra),
        tuple(tuple(float(value) for value in row) for row in mw),
        values.number("discount_rate_pct") or 0.0,
        values.number("cost_escalation_pct") or 0.0,
    )


def _check_stage_columns(context: Context, rows: Columns) -> None:
    """Every column is a load or a group in service, and no load stands in two columns."""
    if context.draft is None or context.ids("loads") is None:
        return
    loads = context.draft.tables.loads
    members: dict[str, list[int]] = {}
    for at, group in enumerate(loads.group):
        if group and loads.status[at]:
            members.setdefault(group, []).append(at)
    index = {load: at for at, load in enumerate(loads.load) if load}
    taken: dict[int, str] = {}
    for name in rows.extra:
        message = remedy = ""
        if name in index and name in members and members[name] != [index[name]]:
            message, remedy = f"'{name}' is a load and also a group.", "Rename one of them."
        elif name in index and not loads.status[index[name]]:
            message, remedy = f"the load '{name}' is out of service.", "Switch it on in loads, or remove the column."
        elif name not in index and name not in members:
            message = f"there is no load or group '{name}' in service."
            remedy = nearest_id(name, [*index, *members], "load or group")
        else:
            inside = [index[name]] if name in index else members[name]
            if name not in index and math.fsum(float(loads.p_mw[at]) for at in inside) <= 0:
                message, remedy = f"the group '{name}' has no positive MW to share by.", "Give its loads columns."
            twice = [at for at in inside if at in taken]
            if twice:
                message = f"the load '{loads.load[twice[0]]}' stands in the columns '{taken[twice[0]]}' and '{name}'."
                remedy = "Let every load grow by one column only."
            taken.update(dict.fromkeys(inside, name))
        if message:
            context.faults.add(rows.file, message, remedy, column=name)


def read_voltage(context: Context, values: Values, given: bool) -> VoltageLimits:
    """Voltage conditions."""
    for low, high in (("intact_min_pu", "intact_max_pu"), ("post_outage_min_pu", "post_outage_max_pu")):
        least, most = values.number(low), values.number(high)
        if least is not None and most is not None and least > most:
            context.fault(f"voltage.{low}", f"{low} is above {high}.", "Exchange or correct the two limits.")
    return VoltageLimits(
        intact_min_pu=values.number("intact_min_pu"),
        intact_max_pu=values.number("intact_max_pu"),
        post_outage_min_pu=values.number("post_outage_min_pu"),
        post_outage_max_pu=values.number("post_outage_max_pu"),
        post_outage_change_max_pct=values.number("post_outage_change_max_pct"),
        switching_step_max_pct=values.number("switching_step_max_pct"),
        switching_step_outage_max_pct=values.number("switching_step_outage_max_pct"),
        light_load_pct=values.number("light_load_pct"),
        existing_violations=cast(Literal["report", "enforce"], values.text("existing_violations")),
        given=given,
    )


def read_report(values: Values) -> ReportText:
    """Words for the report."""
    names = ("project", "author", "currency", "price_year", "notes")
    return ReportText(*(values.text(name) for name in names))
