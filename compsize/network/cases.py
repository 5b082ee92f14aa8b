"""Outages and added devices as new values on a grid's pattern."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_matrix
from scipy.sparse.csgraph import connected_components

from compsize.flow.equations import BESIDE_TAP, DEAD, SLACK, TAP, Case
from compsize.network.devices import Device, Segment, chain
from compsize.network.grid import Grid
from compsize.network.pickup import pieces, shares

Floats = NDArray[np.float64]

LOWEST_LOADING = -1.0e6


@dataclass(frozen=True)
class Addition:
    """Something a plan adds at a bus: susceptance [pu, capacitor positive] and devices with a characteristic."""

    bus: int
    b_pu: float = 0.0
    devices: tuple[Device, ...] = ()


@dataclass(frozen=True, eq=False)
class CaseModel:
    """One case ready for the engine, with what is needed to speak about it in names and MW."""

    case: Case
    chains: dict[int, list[Segment]]
    """Segments per bus number, for those that have any."""
    first_segment: NDArray[np.int64]
    """Starting segment per node: set-points held where there are any."""
    base_mw: float
    """MW today of the load that grows, without what the outage lost."""
    mw_per_loading: float
    status: str
    """``ok``, what was dropped, or why the case cannot be evaluated."""
    evaluable: bool
    dead: NDArray[np.bool_]
    """Per bus: cut off by the outage."""
    total_mw: float
    """Positive MW today of all loads in service in this case."""


def lost_numbers(grid: Grid, elements: Iterable[tuple[str, str]]) -> dict[str, set[int]]:
    """Row numbers per kind of the elements an event loses (branches by their in-service number)."""
    lost: dict[str, set[int]] = {"branch": set(), "generator": set(), "load": set(), "shunt": set(), "svc": set()}
    tables = {
        "branch": grid.branch_of,
        "generator": grid.gen_of,
        "load": grid.load_of,
        "shunt": grid.shunt_of,
        "svc": grid.svc_of,
    }
    for kind, element in elements:
        number = tables[kind].get(element)
        if number is not None:
            lost[kind].add(number)
    return lost


def _parts(grid: Grid, lost: set[int]) -> NDArray[np.int32] | None:
    """Part number of each bus after the loss of branches; None while the network stays whole."""
    if not lost or (len(lost) == 1 and not (lost & grid.bridges)):
        return None
    keep = np.ones(grid.frm.size, dtype=bool)
    keep[list(lost)] = False
    n = len(grid.tables.buses.bus)
    graph = coo_matrix((np.ones(int(keep.sum())), (grid.frm[keep], grid.to[keep])), shape=(n, n))
    count, label = connected_components(graph, directed=False)
    return label if count > 1 else None


def vary(
    grid: Grid, base: CaseModel, elements: Sequence[tuple[str, str]], shunts: Sequence[Addition]
) -> CaseModel | None:
    """The case that differs from ``base`` by lost branches and added susceptance only; the rest is shared.

    None where more changes (a split, another kind of element, a moving tap changer, a device): then
    :func:`build_case` makes it.
    """
    if grid.tap_branches.size or any(kind != "branch" for kind, _ in elements) or any(a.devices for a in shunts):
        return None
    lost = lost_numbers(grid, elements)["branch"]
    if _parts(grid, lost) is not None:
        return None
    g, b = base.case.g, base.case.b.copy()
    if lost:
        g = g.copy()
        for k in lost:
            np.subtract.at(g, grid.places[k], grid.y_ends[k].real)
            np.subtract.at(b, grid.places[k], grid.y_ends[k].imag)
    for add in shunts:
        b[grid.pattern.adiag[grid.node[add.bus]]] += add.b_pu
    return replace(base, case=base.case._replace(g=g, b=b))


def build_case(grid: Grid, elements: Sequence[tuple[str, str]] = (), additions: Sequence[Addition] = ()) -> CaseModel:
    """The case with ``elements`` (pairs kind, id) lost and ``additions`` in service."""
    tables = grid.tables
    base = tables.base_mva
    n = len(tables.buses.bus)
    lost = lost_numbers(grid, elements)
    g, b = grid.g0.copy(), grid.b0.copy()
    tap_off = [False] * grid.tap_branches.size
    for k in lost["branch"]:
        np.subtract.at(g, grid.places[k], grid.y_ends[k].real)
        np.subtract.at(b, grid.places[k], grid.y_ends[k].imag)
        for m in np.flatnonzero(grid.tap_branches == k):
            tap_off[m] = True
    for k in lost["shunt"]:
        if tables.shunts.status[k]:
            place = grid.pattern.adiag[grid.node[grid.bus_index[tables.shunts.bus[k]]]]
            g[place] -= tables.shunts.g_mw[k] / base
            b[place] -= tables.shunts.b_mvar[k] / base
    for add in additions:
        b[grid.pattern.adiag[grid.node[add.bus]]] += add.b_pu

    unit_on = grid.gen_on.copy()
    unit_on[list(lost["generator"])] = False
    load_on = np.ones(grid.load_p.size, dtype=bool)
    load_on[list(lost["load"])] = False
    dead = np.zeros(n, dtype=bool)
    status, evaluable = "ok", True
    label = _parts(grid, lost["branch"])
    slack = grid.slack_unit
    if label is not None:
        size = np.bincount(label)
        # The part with most buses goes on; of equal ones that with the slack unit.
        main = int(np.argmax(2 * size + (np.arange(size.size) == label[grid.gen_bus[slack]])))
        if unit_on[slack] and label[grid.gen_bus[slack]] != main:
            status, evaluable = "not evaluable: the lost part holds the slack unit", False
        dead = label != main
        gone = float(grid.load_p[load_on & dead[grid.load_bus]].sum())
        gone_units = int((unit_on & dead[grid.gen_bus]).sum())
        if evaluable:
            names = [tables.buses.bus[k] for k in np.flatnonzero(dead)]
            shown = ", ".join(names[:4]) + (f" and {len(names) - 4} more" if len(names) > 4 else "")
            status = f"cut off and dropped: bus {shown} with {gone:g} MW of load"
            if gone_units:
                status += f" and {gone_units} unit{'s' if gone_units > 1 else ''}"
        load_on &= ~dead[grid.load_bus]
        unit_on &= ~dead[grid.gen_bus]
    if not unit_on.any():
        status, evaluable = "not evaluable: no unit is left in service", False
        unit_on = grid.gen_on.copy()
    if not unit_on[slack]:
        slack = int(np.argmax(np.where(unit_on, grid.gen_p, -np.inf)))
        if evaluable:
            said = f"slack passed to {tables.generators.generator[slack]}"
            status = said if status == "ok" else f"{status}; {said}"

    load = np.zeros((grid.count, 12))
    np.add.at(load, grid.node[grid.load_bus[load_on]], grid.load_rows[load_on])
    base_lookup = set(grid.growth.loads)
    grows = np.array([name in base_lookup for name in tables.loads.load], dtype=bool)
    base_mw = float(grid.load_p[load_on & grows].sum())
    mw_per_loading = float(grid.load_dp[load_on].sum())
    in_service = float(grid.load_p[load_on].sum())
    if evaluable and mw_per_loading <= 0.0:
        status, evaluable = "not evaluable: no load that grows is left", False

    left = np.flatnonzero(unit_on)
    p, p_max = grid.gen_p[left], grid.gen_pmax[left]
    slack_at = int(np.flatnonzero(left == slack)[0])
    share = shares(grid.growth.pickup, p, p_max, grid.gen_table[left], slack_at, in_service / base)
    gone_p = float(grid.gen_p[grid.gen_on & ~unit_on].sum())
    gbreak, p0, p1 = pieces(p, p_max, share, gone_p, mw_per_loading / base, grid.growth.pickup_limits, LOWEST_LOADING)
    gen = np.zeros((p0.shape[0], grid.count, 2))
    at = grid.node[grid.gen_bus[left]]
    for k in range(p0.shape[0]):
        np.add.at(gen[k, :, 0], at, p0[k])
        np.add.at(gen[k, :, 1], at, p1[k])

    role = np.zeros(grid.count, dtype=np.int64)
    role[grid.node[dead]] |= DEAD
    slack_bus = int(grid.gen_bus[slack])
    role[grid.node[slack_bus]] |= SLACK

    off_names = {tables.generators.generator[k] for k in range(unit_on.size) if not unit_on[k]}
    off_names |= {tables.svcs.svc[k] for k in lost["svc"]}
    on_bus: dict[int, list[Device]] = {
        bus: [d for d in found if d.name not in off_names] for bus, found in grid.devices.items() if not dead[bus]
    }
    for add in additions:
        if add.devices and not dead[add.bus]:
            on_bus.setdefault(add.bus, []).extend(add.devices)
    if slack != grid.slack_unit and not grid.growth.slack_limits:
        name = tables.generators.generator[slack]
        on_bus[slack_bus] = [
            Device(d.name, d.v_high, d.v_low, (-math.inf, 0, 0), (math.inf, 0, 0)) if d.name == name else d
            for d in on_bus[slack_bus]
        ]
    chains = {bus: found for bus, devs in on_bus.items() if (found := chain(devs))}
    case, first = _assemble(grid, g, b, role, load, gen, gbreak, chains, tap_off, dead)
    return CaseModel(
        case=case,
        chains=chains,
        first_segment=first,
        base_mw=base_mw,
        mw_per_loading=mw_per_loading,
        status=status,
        evaluable=evaluable,
        dead=dead,
        total_mw=float(np.maximum(grid.load_p, 0.0)[load_on].sum()),
    )


def _assemble(
    grid: Grid,
    g: Floats,
    b: Floats,
    role: NDArray[np.int64],
    load: Floats,
    gen: Floats,
    gbreak: Floats,
    chains: dict[int, list[Segment]],
    tap_off: list[bool],
    dead: NDArray[np.bool_],
) -> tuple[Case, NDArray[np.int64]]:
    """Flatten the chains, place the tap changers, and gather everything into one Case."""
    tables = grid.tables
    per_node: list[list[tuple[bool, tuple[float, float, float], float, float]]] = [[] for _ in range(grid.count)]
    first = np.full(grid.count, -1, dtype=np.int64)
    dev: list[int] = []
    for bus, segments in chains.items():
        node = int(grid.node[bus])
        per_node[node] = [(s.hold, s.coef, s.low, s.high) for s in segments]
        holds = [k for k, s in enumerate(segments) if s.hold]
        first[node] = holds[0] if holds else len(segments) // 2
        if len(segments) > 1:
            dev.append(node)
    count = grid.tap_branches.size
    taps = np.zeros((count, 11), dtype=np.int64)
    tapval = np.zeros((count, 14))
    tapof = np.full(grid.count, -1, dtype=np.int64)
    br = tables.branches
    stiff = np.abs(b[grid.pattern.adiag])
    for m, k in enumerate(grid.tap_branches.tolist()):
        r = int(grid.branch_row[k])
        node, f, o = int(grid.tap_nodes[m]), int(grid.node[grid.frm[k]]), int(grid.node[grid.to[k]])
        reg_bus = grid.bus_index[br.regulated_bus[r]]
        off = tap_off[m] or bool(dead[grid.frm[k]]) or bool(dead[grid.to[k]]) or bool(dead[reg_bus])
        taps[m, :4] = node, f, o, grid.node[reg_bus]
        taps[m, 4:8] = grid.places[k]
        if not tap_off[m]:
            # The branch's part leaves the fixed values and is added back at its ratio.
            np.subtract.at(g, grid.places[k], grid.y_ends[k].real)
            np.subtract.at(b, grid.places[k], grid.y_ends[k].imag)
            y = grid.y_series[k]
            shift = math.radians(float(br.shift_deg[r]))
            tapval[m, :5] = y.real, y.imag, 0.5 * br.b_pu[r], math.cos(shift), math.sin(shift)
        # A higher ratio lowers the voltage of the 'to' side, as seen from a stiff 'from' side.
        side = 1.0 if reg_bus == grid.frm[k] else -1.0
        tapval[m, 5] = side
        role[node] |= TAP
        role[f] |= BESIDE_TAP
        role[o] |= BESIDE_TAP
        tapof[node] = m
        low, high = float(br.tap_min[r]), float(br.tap_max[r])
        target = float(br.v_target_pu[r])
        if off:
            per_node[node] = [(False, (float(br.tap[r]), 0.0, 0.0), -math.inf, math.inf)]
            first[node] = 0
            continue
        weak, strong = (low, high) if side > 0.0 else (high, low)
        per_node[node] = [
            (False, (weak, 0.0, 0.0), target, math.inf),
            (True, (target, 0.0, 0.0), low, high),
            (False, (strong, 0.0, 0.0), -math.inf, target),
        ]
        first[node] = 1
        dev.append(node)
    for m in range(count):
        for q in range(4):
            tapval[m, 6 + 2 * q] = g[taps[m, 4 + q]]
            tapval[m, 7 + 2 * q] = b[taps[m, 4 + q]]
    flat = [s for segments in per_node for s in segments]
    segptr = np.zeros(grid.count + 1, dtype=np.int64)
    segptr[1:] = np.cumsum([len(segments) for segments in per_node])
    case = Case(
        g=g,
        b=b,
        role=role,
        load=load,
        gen=gen,
        gbreak=gbreak,
        segptr=segptr,
        hold=np.array([1 if s[0] else 0 for s in flat], dtype=np.int64),
        coef=np.array([s[1] for s in flat], dtype=np.float64).reshape(len(flat), 3),
        low=np.array([s[2] for s in flat], dtype=np.float64),
        high=np.array([s[3] for s in flat], dtype=np.float64),
        taps=taps,
        tapval=tapval,
        tapof=tapof,
        dev=np.array(sorted(dev), dtype=np.int64),
        stiff=stiff,
    )
    return case, first
