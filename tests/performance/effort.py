"""Effort of noses, in counters that do not depend on the machine, and in seconds that do."""

from __future__ import annotations

import time
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from compsize.network.cases import Addition, CaseModel, build_case, vary
from compsize.network.grid import Grid, build_grid
from compsize.nose.engine import LEAP_NODES, Engine, Nose
from compsize.study.read_network import read_network
from compsize.study.records import Growth, NetworkTables

COMMITTED = Path(__file__).parents[1] / "data" / "networks"
OPEN = Path(__file__).parents[3] / "shared" / "networks"


def folder_of(name: str) -> Path | None:
    """Where a network of the open dataset lies, committed or beside the repository."""
    return next((base / name for base in (COMMITTED, OPEN) if (base / name).exists()), None)


def everything(tables: NetworkTables, limits: bool = True) -> Growth:
    """All loads grow in proportion."""
    loads = tables.loads
    on = np.flatnonzero(loads.status)
    return Growth(
        loads=tuple(loads.load[k] for k in on),
        dp_mw=tuple(float(loads.p_mw[k]) for k in on),
        dq_mvar=tuple(float(loads.q_mvar[k]) for k in on),
        base_mw=float(loads.p_mw[on].sum()),
        description="all loads",
        power_factor="as base",
        generator_limits=limits,
    )


@dataclass(frozen=True)
class Ready:
    """A network with its intact nose."""

    grid: Grid
    engine: Engine
    intact: CaseModel
    nose: Nose

    def outages(self, step: int = 1) -> list[CaseModel]:
        """Every ``step``-th single branch outage that leaves the network whole."""
        names = self.grid.tables.branches.branch
        keep = [k for k in range(self.grid.frm.size) if k not in self.grid.bridges][::step]
        found = (vary(self.grid, self.intact, [("branch", names[self.grid.branch_row[k]])], ()) for k in keep)
        return [model for model in found if model is not None]

    def with_step(self, model: CaseModel, bus: int, b_pu: float) -> CaseModel:
        found = vary(self.grid, model, (), [Addition(bus, b_pu=b_pu)])
        assert found is not None
        return found


def ready(folder: Path, limits: bool = True) -> Ready:
    tables = read_network(folder)
    grid = build_grid(tables, everything(tables, limits))
    engine = Engine(grid)
    model = build_case(grid)
    return Ready(grid, engine, model, engine.nose(model, fast=grid.count >= LEAP_NODES))


def least_seconds(task: object, repeats: int) -> float:
    """Shortest of several runs."""
    assert callable(task)
    best = float("inf")
    for _ in range(repeats):
        start = time.perf_counter()
        task()
        best = min(best, time.perf_counter() - start)
    return best
