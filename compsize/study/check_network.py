"""The checks of a network that look at several cells or tables at once."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from compsize.study.build_network import NetworkDraft
from compsize.study.files import Faults
from compsize.study.records import Bools, Floats, Ids
from compsize.study.topology import components

__all__ = ["check_network", "connected_ends"]

_ROUND = 1e-9


def check_network(draft: NetworkDraft, faults: Faults) -> None:
    """Adds every fault of the tables taken together. NaN and empty ids stand for faults noted before."""
    _check_rows(draft, faults)
    _check_tap_changers(draft, faults)
    if not {"buses", "generators"} & draft.unreadable:
        _check_slack(draft, faults)
        _check_set_points(draft, faults)
        if "branches" not in draft.unreadable:
            _check_connected(draft, faults)


def _at_rows(draft: NetworkDraft, table: str, faults: Faults) -> Callable[[Bools, str | None, str, str], None]:
    columns = draft.columns[table]

    def report(wrong: Bools, column: str | None, message: str, remedy: str) -> None:
        for at in np.flatnonzero(wrong):
            faults.add(columns.place(int(at)), message, remedy, row=columns.row(int(at)), column=column)

    return report


def _check_rows(draft: NetworkDraft, faults: Faults) -> None:
    tables = draft.tables
    report = _at_rows(draft, "buses", faults)
    remedy = "Exchange or correct the two limits."
    report(tables.buses.v_min_pu > tables.buses.v_max_pu, "v_min_pu", "v_min_pu is above v_max_pu.", remedy)
    report = _at_rows(draft, "loads", faults)
    over = tables.loads.z_share_pct + tables.loads.i_share_pct > 100 + _ROUND
    report(over, "z_share_pct", "z_share_pct and i_share_pct exceed 100 together.", "Lower one of them.")
    branches = tables.branches
    report = _at_rows(draft, "branches", faults)
    same = np.array([a == b != "" for a, b in zip(branches.from_bus, branches.to_bus, strict=True)], dtype=np.bool_)
    report(same, "to_bus", "from_bus and to_bus are the same.", "Correct one end or remove the branch.")
    none = (branches.r_pu == 0) & (branches.x_pu == 0)
    remedy = "Give its impedance, or merge the two buses where it is a closed switch."
    report(none, "x_pu", "the branch has neither resistance nor reactance.", remedy)
    report = _at_rows(draft, "generators", faults)
    wrong = tables.generators.q_min_mvar > tables.generators.q_max_mvar
    remedy = "Exchange or correct the two limits."
    report(wrong, "q_min_mvar", "q_min_mvar is above q_max_mvar.", remedy)
    wrong = tables.svcs.q_min_mvar > tables.svcs.q_max_mvar
    _at_rows(draft, "svcs", faults)(wrong, "q_min_mvar", "q_min_mvar is above q_max_mvar.", remedy)


def _check_tap_changers(draft: NetworkDraft, faults: Faults) -> None:
    branches = draft.tables.branches
    columns = draft.columns["branches"]
    if "branches" in draft.unreadable or not columns.given & {
        "regulated_bus",
        "v_target_pu",
        "tap_min",
        "tap_max",
        "tap_steps",
    }:
        return
    numbers = {
        "v_target_pu": branches.v_target_pu,
        "tap_min": branches.tap_min,
        "tap_max": branches.tap_max,
        "tap_steps": branches.tap_steps,
    }
    faulty = {(fault.file, fault.row, fault.column) for fault in faults}
    for at, regulated in enumerate(branches.regulated_bus):
        row = columns.row(at)
        blank = [name for name, values in numbers.items() if np.isnan(values[at])]
        if not regulated:
            blank.insert(0, "regulated_bus")
        missing = [name for name in blank if (columns.place(at), row, name) not in faulty]
        if missing and len(blank) < 5:
            faults.add(
                columns.place(at),
                f"the tap changer lacks {', '.join(missing)}.",
                "Give all of regulated_bus, v_target_pu, tap_min, tap_max and tap_steps, or none.",
                row=row,
                column=missing[0],
            )
    report = _at_rows(draft, "branches", faults)
    reverse = branches.tap_min > branches.tap_max
    report(reverse, "tap_min", "tap_min is above tap_max.", "Exchange or correct the two.")
    outside = (branches.tap < branches.tap_min - _ROUND) | (branches.tap > branches.tap_max + _ROUND)
    report(outside & ~reverse, "tap", "tap lies outside tap_min and tap_max.", "Correct the tap or the two limits.")
    held = [bus if on else "" for bus, on in zip(branches.regulated_bus, branches.status, strict=True)]
    _check_one_value(
        draft, "branches", held, branches.branch, branches.v_target_pu, column="v_target_pu", faults=faults
    )


def _check_slack(draft: NetworkDraft, faults: Faults) -> None:
    units = draft.tables.generators
    columns = draft.columns["generators"]
    if not units.generator or any(fault.file == columns.file and fault.column == "slack" for fault in faults):
        return
    marked = np.flatnonzero(units.slack & units.status)
    if len(marked) == 0:
        on = np.where(units.status & ~np.isnan(units.p_mw), units.p_mw, -np.inf)
        if units.slack.any():
            name = units.generator[int(np.flatnonzero(units.slack)[0])]
            message = f"the slack unit '{name}' is out of service."
        else:
            message = "no unit in service is marked as slack."
        hint = f"'{units.generator[int(np.argmax(on))]}', the largest" if np.isfinite(on).any() else "one"
        faults.add(
            columns.file,
            message,
            f"Write yes in the column slack of a unit in service (such as {hint}).",
            column="slack",
        )
    elif len(marked) > 1:
        names = ", ".join(f"'{units.generator[at]}'" for at in marked[:5])
        more = f" and {len(marked) - 5} more" if len(marked) > 5 else ""
        faults.add(
            columns.file,
            f"{len(marked)} units in service are marked as slack: {names}{more}.",
            "Write yes for one of them and no for the others.",
            row=columns.row(int(marked[1])),
            column="slack",
        )


def _check_set_points(draft: NetworkDraft, faults: Faults) -> None:
    units, svcs = draft.tables.generators, draft.tables.svcs
    held = [bus if on else "" for bus, on in zip(units.bus, units.status, strict=True)]
    by_unit = _check_one_value(
        draft, "generators", held, units.generator, units.v_set_pu, column="v_set_pu", faults=faults
    )
    if "svcs" in draft.unreadable:
        return
    rigid = svcs.status & (svcs.slope_pct == 0)
    held = [bus if on else "" for bus, on in zip(svcs.bus, rigid, strict=True)]
    _check_one_value(draft, "svcs", held, svcs.svc, svcs.v_ref_pu, column="v_ref_pu", faults=faults)
    columns = draft.columns["svcs"]
    for at, bus in enumerate(held):
        if bus in by_unit and by_unit[bus][1] != svcs.v_ref_pu[at] and not np.isnan(svcs.v_ref_pu[at]):
            unit, value = by_unit[bus]
            faults.add(
                columns.place(at),
                f"without slope, '{svcs.svc[at]}' holds {svcs.v_ref_pu[at]:g} pu at bus '{bus}', "
                f"where generator '{unit}' holds {value:g} pu.",
                "Give the device a slope or the same voltage.",
                row=columns.row(at),
                column="v_ref_pu",
            )


def _check_one_value(
    draft: NetworkDraft, table: str, held: list[str], ids: Ids, values: Floats, *, column: str, faults: Faults
) -> dict[str, tuple[str, float]]:
    """Reports rows that hold one bus at different values; returns the first holder and value of each bus."""
    columns = draft.columns[table]
    first: dict[str, tuple[str, float]] = {}
    for at, bus in enumerate(held):
        value = float(values[at])
        if not bus or np.isnan(value):
            continue
        holder, earlier = first.setdefault(bus, (ids[at], value))
        if earlier != value:
            faults.add(
                columns.place(at),
                f"'{ids[at]}' holds bus '{bus}' at {value:g} pu, but '{holder}' holds it at {earlier:g} pu.",
                "Give both the same value.",
                row=columns.row(at),
                column=column,
            )
    return first


def first_places(ids: Ids) -> dict[str, int]:
    """Where each id stands first; blank ids, which are faults, are left out."""
    index: dict[str, int] = {}
    for at, name in enumerate(ids):
        if name:
            index.setdefault(name, at)
    return index


def connected_ends(draft: NetworkDraft) -> tuple[np.ndarray[tuple[int, ...], np.dtype[np.int64]], list[int]]:
    """Bus indices of the ends of every branch in service whose ends exist, and the branches' indices."""
    index = first_places(draft.tables.buses.bus)
    branches = draft.tables.branches
    used: list[int] = []
    ends: list[tuple[int, int]] = []
    states = branches.status.tolist()
    for at, (start, end, on) in enumerate(zip(branches.from_bus, branches.to_bus, states, strict=True)):
        if on and start in index and end in index:
            used.append(at)
            ends.append((index[start], index[end]))
    return np.array(ends, dtype=np.int64).reshape(-1, 2), used


def _check_connected(draft: NetworkDraft, faults: Faults) -> None:
    """Every bus must hang together with the slack over branches in service."""
    tables = draft.tables
    columns = draft.columns["buses"]
    index = first_places(tables.buses.bus)
    slack = np.flatnonzero(tables.generators.slack & tables.generators.status)
    if len(slack) == 0 or tables.generators.bus[int(slack[0])] not in index:
        return
    ends, _ = connected_ends(draft)
    # A branch with a faulty end would make its neighbourhood look cut off.
    branches = tables.branches
    if any(not a or not b or a == b for a, b in zip(branches.from_bus, branches.to_bus, strict=True)):
        return
    number = components(len(tables.buses.bus), ends)
    away = number != number[index[tables.generators.bus[int(slack[0])]]]
    # A bus without a name, or that stands twice, has a fault already.
    away &= np.array([index.get(bus) == at for at, bus in enumerate(tables.buses.bus)], dtype=np.bool_)
    if not away.any():
        return
    used = {bus for bus, on in zip(tables.loads.bus, tables.loads.status, strict=True) if on}
    used |= {bus for bus, on in zip(tables.generators.bus, tables.generators.status, strict=True) if on}
    serving = {int(number[index[bus]]) for bus in used if bus in index and away[index[bus]]}
    loaded = away & np.isin(number, list(serving))
    for wanted, what in ((loaded, "with load or generation "), (away & ~loaded, "")):
        found = np.flatnonzero(wanted)
        if len(found) == 0:
            continue
        names = ", ".join(f"'{tables.buses.bus[at]}'" for at in found[:5])
        more = f" and {len(found) - 5} more" if len(found) > 5 else ""
        count = "1 bus" if len(found) == 1 else f"{len(found)} buses"
        faults.add(
            columns.file,
            f"{count} {what}not connected to the slack by branches in service: {names}{more}.",
            "Connect or remove them.",
            row=columns.row(int(found[0])),
            column="bus",
        )
