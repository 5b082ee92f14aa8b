"""What must not change a margin: names, order, direction, base, and one thing told as two."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from margin_studies import single, study_of
from verify_networks import everything, read

from compsize.api import margins
from compsize.plan.records import CaseMargin
from compsize.study.records import Event, NetworkTables

TABLES = ("buses", "loads", "branches", "generators", "shunts", "svcs")
LOST = {"ieee14": ("10", "15", "3"), "ieee30": ("2", "5", "36"), "ieee118": ("7", "36", "51")}
Changed = tuple[NetworkTables, dict[str, tuple[tuple[str, str], ...]]]
"""A network told otherwise, and what an outage of a branch loses in it (where that is not the branch itself)."""


def computed(net: NetworkTables, events: Sequence[Event], limits: bool) -> tuple[CaseMargin, ...]:
    return margins(study_of(net, events, everything(net, generator_limits=limits)), workers=1).cases


def taken(record: Any, rows: Sequence[int], **changes: Any) -> Any:
    """A table with these rows in this order (a row may come twice), then with columns replaced."""
    values = {
        name: tuple(column[k] for k in rows) if isinstance(column, tuple) else column[list(rows)]
        for name, column in vars(record).items()
    }
    return replace(record, **(values | changes))


def renamed(net: NetworkTables) -> Changed:
    """Buses with other names, every table in another order."""
    rng = np.random.default_rng(5)
    names = dict(zip(net.buses.bus, rng.permutation([f"bus {k}" for k in range(len(net.buses.bus))]), strict=True))
    tables: dict[str, Any] = {}
    for name in TABLES:
        record = getattr(net, name)
        count = len(next(iter(vars(record).values())))
        table = taken(record, [int(k) for k in rng.permutation(count)])
        for column in ("bus", "from_bus", "to_bus"):
            if hasattr(table, column):
                table = replace(table, **{column: tuple(str(names[bus]) for bus in getattr(table, column))})
        tables[name] = table
    return replace(net, **tables), {}


def reversed_branches(net: NetworkTables) -> Changed:
    """Every branch from its other end: ratio 1 / t and shift -s there, r and x times t^2, b through t^2."""
    br = net.branches
    t2 = br.tap**2
    other = replace(
        br,
        from_bus=br.to_bus,
        to_bus=br.from_bus,
        r_pu=br.r_pu * t2,
        x_pu=br.x_pu * t2,
        b_pu=br.b_pu / t2,
        tap=1.0 / br.tap,
        shift_deg=-br.shift_deg,
    )
    assert (br.tap != 1.0).any()
    return replace(net, branches=other), {}


def other_base(net: NetworkTables) -> Changed:
    """The same network on 37 MVA."""
    scale = 37.0 / net.base_mva
    br = net.branches
    other = replace(br, r_pu=br.r_pu * scale, x_pu=br.x_pu * scale, b_pu=br.b_pu / scale)
    return replace(net, base_mva=37.0, branches=other), {}


def split_unit(net: NetworkTables) -> Changed:
    """The second unit as two, of one and of two thirds of its MW and limits."""
    units = net.generators
    count = len(units.generator)
    part = np.ones(count + 1)
    part[1], part[count] = 1.0 / 3.0, 2.0 / 3.0
    split = taken(units, [*range(count), 1])
    other = replace(
        split,
        generator=(*units.generator, "twin"),
        p_mw=split.p_mw * part,
        q_min_mvar=split.q_min_mvar * part,
        q_max_mvar=split.q_max_mvar * part,
        p_max_mw=split.p_max_mw * part,
    )
    return replace(net, generators=other), {}


def split_branches(net: NetworkTables) -> Changed:
    """Every branch as two in parallel, of twice the r and x and half the b; an outage loses both."""
    br = net.branches
    count = len(br.branch)
    twice = taken(br, [*range(count), *range(count)])
    other = replace(
        twice,
        branch=(*br.branch, *(f"{name} twin" for name in br.branch)),
        r_pu=2.0 * twice.r_pu,
        x_pu=2.0 * twice.x_pu,
        b_pu=0.5 * twice.b_pu,
    )
    return replace(net, branches=other), {name: (("branch", name), ("branch", f"{name} twin")) for name in br.branch}


def split_loads(net: NetworkTables) -> Changed:
    """Every load as two, of a quarter and of three quarters."""
    count = len(net.loads.load)
    twice = taken(net.loads, [*range(count), *range(count)])
    part = np.repeat([0.25, 0.75], count)
    names = (*net.loads.load, *(f"{name} twin" for name in net.loads.load))
    return replace(net, loads=replace(twice, load=names, p_mw=twice.p_mw * part, q_mvar=twice.q_mvar * part)), {}


def out_of_service(net: NetworkTables) -> Changed:
    """Rows that are out of service beside those that are in: a unit, a load, a branch and a shunt."""
    off: dict[str, Any] = {}
    for name, key in (("generators", "generator"), ("loads", "load"), ("branches", "branch"), ("shunts", "shunt")):
        record = getattr(net, name)
        count = len(getattr(record, key))
        twice = taken(record, [*range(count), 0])
        status = np.append(record.status, False)
        off[name] = replace(twice, **{key: (*getattr(record, key), "off"), "status": status})
    units = off["generators"]
    off["generators"] = replace(units, slack=np.append(net.generators.slack, False))
    return replace(net, **off), {}


CHANGES: list[Callable[[NetworkTables], Changed]] = [
    renamed,
    reversed_branches,
    other_base,
    split_unit,
    split_branches,
    split_loads,
    out_of_service,
]


@pytest.mark.parametrize("change", CHANGES)
@pytest.mark.parametrize("limits", [True, False])
@pytest.mark.parametrize("name", list(LOST))
def test_same_margin(name: str, limits: bool, change: Callable[[NetworkTables], Changed]) -> None:
    """The network told otherwise has the same margins within 1e-7 of the base, and noses of the same kind."""
    net = read(name)
    events = [single("branch", branch) for branch in LOST[name]]
    other, lost = change(net)
    same = [replace(event, elements=lost.get(event.elements[0][1], event.elements)) for event in events]
    for one, two in zip(computed(net, events, limits), computed(other, same, limits), strict=True):
        assert one.margin_mw is not None
        assert two.base_mw == pytest.approx(one.base_mw, rel=1e-12)
        assert two.margin_mw == pytest.approx(one.margin_mw, abs=1e-7 * one.base_mw), one.case
        assert two.nose_kind == one.nose_kind
        assert two.lowest_v_pu == pytest.approx(one.lowest_v_pu, abs=1e-5)


def test_a_change_is_noticed() -> None:
    """One ohm more is seen: a reactance changed by a hundredth moves the margins by more than the comparison allows."""
    net = read("ieee14")
    x = net.branches.x_pu.copy()
    x[0] *= 1.01
    (one,), (two,) = computed(net, (), True), computed(replace(net, branches=replace(net.branches, x_pu=x)), (), True)
    assert one.margin_mw is not None
    assert two.margin_mw is not None
    assert abs(one.margin_mw - two.margin_mw) > 1e-4 * one.base_mw
