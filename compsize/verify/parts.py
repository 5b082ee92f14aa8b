"""Which elements are left after an outage: service flags, islands, and who is the slack."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components

from compsize.errors import UsageError
from compsize.study.records import Generators, NetworkTables

Bools = NDArray[np.bool_]


@dataclass(frozen=True)
class NotEvaluable:
    """An outage that leaves nothing to compute, and why."""

    reason: str


@dataclass(frozen=True, eq=False)
class InService:
    """What is left in service, per row of each table; ``slack`` is the generator row that balances."""

    buses: Bools
    loads: Bools
    branches: Bools
    generators: Bools
    shunts: Bools
    svcs: Bools
    slack: int
    notes: tuple[str, ...]


def largest_unit(generators: Generators, on: Bools) -> int | None:
    """Row of the unit in service that gives most MW today; the first of equals."""
    return int(np.argmax(np.where(on, generators.p_mw, -np.inf))) if on.any() else None


def in_service(network: NetworkTables, lost: Iterable[tuple[str, str]]) -> InService | NotEvaluable:
    """Apply an outage to the tables.

    The part of the network with the most buses goes on (the slack's, if parts are equal). Parts cut off
    from it are dropped, with their loads and units; if the slack is in one of them the case is not
    evaluable. A slack unit that is lost itself passes its duty to the largest unit left in service.
    """
    tables = {
        "branch": (network.branches.branch, network.branches.status.copy()),
        "generator": (network.generators.generator, network.generators.status.copy()),
        "load": (network.loads.load, network.loads.status.copy()),
        "shunt": (network.shunts.shunt, network.shunts.status.copy()),
        "svc": (network.svcs.svc, network.svcs.status.copy()),
    }
    slack = next((k for k, s in enumerate(network.generators.slack & network.generators.status) if s), None)
    for kind, element in lost:
        if kind not in tables or element not in tables[kind][0]:
            raise UsageError(f"the network has no {kind} {element!r}")
        tables[kind][1][tables[kind][0].index(element)] = False
    branches, units = tables["branch"][1], tables["generator"][1]
    notes: list[str] = []
    index = {bus: k for k, bus in enumerate(network.buses.bus)}

    part = _parts(network, branches, index)
    sizes = np.bincount(part)
    if slack is None or not units[slack]:
        successor = largest_unit(network.generators, units & _on_largest_part(network, part, sizes, index))
        if successor is None:
            return NotEvaluable("no unit is left that could balance the network")
        if slack is not None:
            notes.append(f"slack passes to {network.generators.generator[successor]}")
        slack = successor
    own = part[index[network.generators.bus[slack]]]
    if sizes[own] < sizes.max():
        return NotEvaluable("the lost part holds the slack")
    kept = part == own
    for number in range(len(sizes)):
        if number != own:
            names = [bus for bus, p in zip(network.buses.bus, part, strict=True) if p == number]
            notes.append("dropped: " + " ".join(names))

    def on(buses: tuple[str, ...], status: Bools) -> Bools:
        there: Bools = np.array([kept[index[bus]] for bus in buses], dtype=bool)
        return np.where(there, status, False)

    return InService(
        buses=kept,
        loads=on(network.loads.bus, tables["load"][1]),
        branches=on(network.branches.from_bus, branches),
        generators=on(network.generators.bus, units),
        shunts=on(network.shunts.bus, tables["shunt"][1]),
        svcs=on(network.svcs.bus, tables["svc"][1]),
        slack=slack,
        notes=tuple(notes),
    )


def _parts(network: NetworkTables, on: Bools, index: dict[str, int]) -> NDArray[np.int64]:
    """Number of the connected part of each bus."""
    n = len(network.buses.bus)
    rows = [index[bus] for bus, s in zip(network.branches.from_bus, on, strict=True) if s]
    cols = [index[bus] for bus, s in zip(network.branches.to_bus, on, strict=True) if s]
    graph = coo_array((np.ones(len(rows)), (rows, cols)), shape=(n, n)).tocsr()
    return np.asarray(connected_components(graph, directed=False)[1], dtype=np.int64)


def _on_largest_part(
    network: NetworkTables, part: NDArray[np.int64], sizes: NDArray[np.int64], index: dict[str, int]
) -> Bools:
    """Units whose bus lies on the part with the most buses."""
    return np.array([sizes[part[index[bus]]] == sizes.max() for bus in network.generators.bus], dtype=bool)
