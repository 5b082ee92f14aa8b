"""From a network's tables to per-unit arrays in elimination order, and the way back to names.

A :class:`Grid` is made once per network and growth. Outages and added devices become new
:class:`~compsize.flow.equations.Case` values on the same pattern (:mod:`compsize.network.cases`).
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from compsize.flow.pattern import Pattern, build_pattern, minimum_degree_order
from compsize.network.devices import Device, compensator, generator
from compsize.study.records import Growth, NetworkTables

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@dataclass(frozen=True, eq=False)
class Grid:
    """Per-unit arrays of a network; buses are numbered as in the tables, ``node`` gives the elimination order.

    Branch arrays have one entry per in-service branch row (``branch_row`` leads back to the table).
    """

    tables: NetworkTables
    growth: Growth
    pattern: Pattern
    node: Ints
    """Node of each bus."""
    count: int
    """Nodes: buses and tap changers."""
    bus_index: dict[str, int]
    v_start: Floats
    th_start: Floats
    # Branches in service.
    branch_row: Ints
    branch_of: dict[str, int]
    frm: Ints
    to: Ints
    y_series: NDArray[np.complex128]
    y_ends: NDArray[np.complex128]
    """[branch, 4]: admittances at ff, ft, tf, tt at the ratio of the tables."""
    places: Ints
    """[branch, 4]: places of these in the pattern (nodes of the ends)."""
    tap_branches: Ints
    """Branches whose ratio moves, in tap-node order."""
    tap_nodes: Ints
    g0: Floats
    b0: Floats
    # Loads and units in service, in per unit.
    scale_mw: float
    """MW along the direction at loading 1, nothing lost."""
    load_rows: Floats
    """[load, 12] as in Case.load; zero where out of service."""
    load_bus: Ints
    load_of: dict[str, int]
    load_p: Floats
    load_dp: Floats
    gen_p: Floats
    gen_pmax: Floats
    gen_table: Floats
    gen_bus: Ints
    gen_on: NDArray[np.bool_]
    gen_of: dict[str, int]
    slack_unit: int
    devices: dict[int, tuple[Device, ...]]
    """Per bus: generators in service by name, then SVCs."""
    shunt_of: dict[str, int]
    svc_of: dict[str, int]
    bridges: frozenset[int] = field(default=frozenset())
    """Branches (in-service numbers) whose loss alone splits the network."""


def _find_bridges(count: int, frm: Ints, to: Ints) -> frozenset[int]:
    """Branches that lie on no cycle (Tarjan 1974), iteratively; parallel branches are no bridges."""
    neighbours: list[list[tuple[int, int]]] = [[] for _ in range(count)]
    for k, (a, b) in enumerate(zip(frm.tolist(), to.tolist(), strict=True)):
        neighbours[a].append((b, k))
        neighbours[b].append((a, k))
    seen = [-1] * count
    low = [0] * count
    bridges: set[int] = set()
    clock = 0
    for root in range(count):
        if seen[root] >= 0:
            continue
        seen[root] = low[root] = clock
        clock += 1
        stack = [(root, -1, 0)]
        while stack:
            at, via, place = stack.pop()
            if place < len(neighbours[at]):
                stack.append((at, via, place + 1))
                other, k = neighbours[at][place]
                if k == via:
                    continue
                if seen[other] >= 0:
                    low[at] = min(low[at], seen[other])
                else:
                    seen[other] = low[other] = clock
                    clock += 1
                    stack.append((other, k, 0))
            elif stack:
                parent = stack[-1][0]
                low[parent] = min(low[parent], low[at])
                if low[at] > seen[parent]:
                    bridges.add(via)
    return frozenset(bridges)


def branch_admittances(r: Floats, x: Floats, b: Floats, tap: Floats, shift: Floats) -> NDArray[np.complex128]:
    """[branch, 4]: ff, ft, tf, tt of pi branches with ratio and shift [rad] at the from side."""
    y = 1.0 / (r + 1j * x)
    own = y + 0.5j * b
    turn = np.exp(1j * shift)
    return np.stack([own / tap**2, -y * turn / tap, -y / turn / tap, own], axis=1)


def build_grid(tables: NetworkTables, growth: Growth) -> Grid:
    """Per-unit arrays of ``tables`` with the load direction and pick-up of ``growth``."""
    base = tables.base_mva
    buses = tables.buses
    n = len(buses.bus)
    bus_index = {name: k for k, name in enumerate(buses.bus)}
    br = tables.branches
    row = np.flatnonzero(br.status)
    frm = np.array([bus_index[br.from_bus[k]] for k in row], dtype=np.int64)
    to = np.array([bus_index[br.to_bus[k]] for k in row], dtype=np.int64)
    moving = np.array(
        [k for k, r in enumerate(row) if growth.taps == "moving" and br.regulated_bus[r] != ""], dtype=np.int64
    )
    regulated = np.array([bus_index[br.regulated_bus[row[k]]] for k in moving], dtype=np.int64)
    tap_ids = n + np.arange(moving.size)
    rows = np.concatenate([frm, tap_ids, tap_ids, tap_ids])
    cols = np.concatenate([to, frm[moving], to[moving], regulated])
    total = n + moving.size
    order = minimum_degree_order(total, rows, cols, tap_ids)
    node = np.empty(total, dtype=np.int64)
    node[order] = np.arange(total)
    pattern = build_pattern(total, node[rows], node[cols])
    key = {
        (i, int(j)): p
        for i in range(total)
        for p, j in enumerate(pattern.aidx[pattern.aptr[i] : pattern.aptr[i + 1]], int(pattern.aptr[i]))
    }
    places = np.array(
        [
            [key[a, a], key[a, b], key[b, a], key[b, b]]
            for a, b in zip(node[frm].tolist(), node[to].tolist(), strict=True)
        ],
        dtype=np.int64,
    ).reshape(row.size, 4)
    ends = branch_admittances(br.r_pu[row], br.x_pu[row], br.b_pu[row], br.tap[row], np.deg2rad(br.shift_deg[row]))
    y = np.zeros(pattern.aidx.size, dtype=np.complex128)
    np.add.at(y, places.ravel(), ends.ravel())
    sh = tables.shunts
    for k, name in enumerate(sh.bus):
        if sh.status[k]:
            y[pattern.adiag[node[bus_index[name]]]] += complex(sh.g_mw[k], sh.b_mvar[k]) / base

    loads = tables.loads
    direction = dict(zip(growth.loads, zip(growth.dp_mw, growth.dq_mvar, strict=True), strict=True))
    on = loads.status
    total_load = float(loads.p_mw[on].sum())
    along = sum(growth.dp_mw)
    scale_mw = growth.base_mw if growth.base_mw > 0.0 else (total_load if total_load > 0.0 else base)
    factor = scale_mw / along
    load_rows = np.zeros((len(loads.load), 12))
    load_dp = np.zeros(len(loads.load))
    for k, name in enumerate(loads.load):
        if not on[k]:
            continue
        dp, dq = direction.get(name, (0.0, 0.0))
        dp, dq = dp * factor, dq * factor
        load_dp[k] = dp
        z, i = loads.z_share_pct[k] / 100.0, loads.i_share_pct[k] / 100.0
        for part, weight in enumerate((1.0 - z - i, i, z)):
            load_rows[k, 2 * part] = weight * loads.p_mw[k] / base
            load_rows[k, 2 * part + 1] = weight * dp / base
            load_rows[k, 6 + 2 * part] = weight * loads.q_mvar[k] / base
            load_rows[k, 7 + 2 * part] = weight * dq / base

    gens = tables.generators
    slack_unit = next(k for k in range(len(gens.generator)) if gens.slack[k] and gens.status[k])
    devices: dict[int, list[Device]] = {}
    for k, name in enumerate(gens.generator):
        if not gens.status[k]:
            continue
        free = not growth.generator_limits or (k == slack_unit and not growth.slack_limits)
        low = -math.inf if free else gens.q_min_mvar[k] / base
        high = math.inf if free else gens.q_max_mvar[k] / base
        devices.setdefault(bus_index[gens.bus[k]], []).append(generator(name, float(gens.v_set_pu[k]), low, high))
    svcs = tables.svcs
    for k, name in enumerate(svcs.svc):
        if svcs.status[k]:
            devices.setdefault(bus_index[svcs.bus[k]], []).append(
                compensator(
                    name,
                    svcs.kind[k],
                    float(svcs.q_min_mvar[k]) / base,
                    float(svcs.q_max_mvar[k]) / base,
                    float(svcs.v_ref_pu[k]),
                    float(svcs.slope_pct[k]) / 100.0,
                )
            )
    v_start = np.where(np.isnan(buses.v_pu), 1.0, buses.v_pu)
    for k in range(len(gens.generator)):
        if gens.status[k]:
            v_start[bus_index[gens.bus[k]]] = gens.v_set_pu[k]
    return Grid(
        tables=tables,
        growth=growth,
        pattern=pattern,
        node=node[:n],
        count=total,
        bus_index=bus_index,
        v_start=v_start,
        th_start=np.deg2rad(np.where(np.isnan(buses.angle_deg), 0.0, buses.angle_deg)),
        branch_row=row.astype(np.int64),
        branch_of={br.branch[r]: k for k, r in enumerate(row)},
        frm=frm,
        to=to,
        y_series=np.asarray(1.0 / (br.r_pu[row] + 1j * br.x_pu[row]), dtype=np.complex128),
        y_ends=ends,
        places=places,
        tap_branches=moving,
        tap_nodes=node[n:],
        g0=np.ascontiguousarray(y.real),
        b0=np.ascontiguousarray(y.imag),
        scale_mw=scale_mw,
        load_rows=load_rows,
        load_bus=np.array([bus_index[b] for b in loads.bus], dtype=np.int64),
        load_of={name: k for k, name in enumerate(loads.load)},
        load_p=np.where(on, loads.p_mw, 0.0),
        load_dp=load_dp,
        gen_p=gens.p_mw / base,
        gen_pmax=gens.p_max_mw / base,
        gen_table=gens.pickup,
        gen_bus=np.array([bus_index[b] for b in gens.bus], dtype=np.int64),
        gen_on=gens.status,
        gen_of={name: k for k, name in enumerate(gens.generator)},
        slack_unit=slack_unit,
        devices={bus: tuple(found) for bus, found in devices.items()},
        shunt_of={name: k for k, name in enumerate(sh.shunt)},
        svc_of={name: k for k, name in enumerate(svcs.svc)},
        bridges=_find_bridges(n, frm, to),
    )
