"""Small networks for tests, built in memory, and those that the tests carry."""

from __future__ import annotations

from dataclasses import fields
from pathlib import Path
from typing import Any

import numpy as np

from compsize.study.read_network import read_network
from compsize.study.records import (
    Branches,
    Buses,
    Generators,
    Growth,
    Loads,
    NetworkTables,
    Shunts,
    Svcs,
)

DATA = Path(__file__).parents[1] / "data" / "networks"
CDF = Path(__file__).parents[3] / "shared" / "data" / "ieee_cdf"

BLANK: dict[type, dict[str, Any]] = {
    Buses: {"kv": 1.0, "v_min_pu": 0.95, "v_max_pu": 1.05, "area": "", "monitored": True, "v_pu": np.nan}
    | {"angle_deg": np.nan, "fault_mva": np.nan},
    Loads: {"z_share_pct": 0.0, "i_share_pct": 0.0, "group": "", "status": True},
    Branches: {"b_pu": 0.0, "tap": 1.0, "shift_deg": 0.0, "rating_mva": np.nan, "status": True, "regulated_bus": ""}
    | {"v_target_pu": np.nan, "tap_min": np.nan, "tap_max": np.nan, "tap_steps": np.nan},
    Generators: {"q_min_mvar": -np.inf, "q_max_mvar": np.inf, "p_max_mw": np.nan, "pickup": np.nan, "slack": False}
    | {"status": True},
    Shunts: {"g_mw": 0.0, "status": True},
    Svcs: {"slope_pct": 0.0, "status": True},
}


def table(record: type, rows: list[dict[str, Any]]) -> Any:
    """A table from rows that leave out what is blank."""
    columns: dict[str, Any] = {}
    for f in fields(record):
        cells = [row.get(f.name, BLANK[record].get(f.name)) for row in rows]
        if f.type == "Ids":
            columns[f.name] = tuple(str(cell) for cell in cells)
        elif f.type == "Bools":
            columns[f.name] = np.array([cell in (True, "yes", "on", "1") for cell in cells], dtype=bool)
        else:
            columns[f.name] = np.array(cells, dtype=float)
    return record(**columns)


def network(base_mva: float = 100.0, **rows: list[dict[str, Any]]) -> NetworkTables:
    """Tables from lists of rows named buses, loads, branches, generators, shunts, svcs."""
    kinds = (Buses, Loads, Branches, Generators, Shunts, Svcs)
    tables = {kind.__name__.lower(): table(kind, rows.get(kind.__name__.lower(), [])) for kind in kinds}
    return NetworkTables(base_mva, 50.0, "", "", **tables)


def read(name: str) -> NetworkTables:
    """One of the networks that the tests carry."""
    return read_network(DATA / name)


def everything(net: NetworkTables, **options: Any) -> Growth:
    """Growth of all loads at their own power factor."""
    on = [k for k, s in enumerate(net.loads.status) if s]
    return Growth(
        loads=tuple(net.loads.load[k] for k in on),
        dp_mw=tuple(float(net.loads.p_mw[k]) for k in on),
        dq_mvar=tuple(float(net.loads.q_mvar[k]) for k in on),
        base_mw=float(sum(net.loads.p_mw[k] for k in on)),
        description="all loads",
        power_factor="as base",
        **options,
    )


def two_buses(
    x: tuple[float, ...] = (0.5,),
    r: float = 0.0,
    p: float = 10.0,
    power_factor: float = 1.0,
    e: float = 1.0,
    **load: Any,
) -> NetworkTables:
    """A source ``e`` [pu] at bus S behind parallel lines of reactance ``x`` [pu], a load of ``p`` MW at bus L."""
    q = p * np.sqrt(1.0 / power_factor**2 - 1.0)
    lines = [
        {"branch": f"line{k + 1}", "from_bus": "S", "to_bus": "L", "r_pu": r, "x_pu": value}
        for k, value in enumerate(x)
    ]
    return network(
        buses=[{"bus": "S"}, {"bus": "L"}],
        loads=[{"load": "D", "bus": "L", "p_mw": p, "q_mvar": q} | load],
        branches=lines,
        generators=[{"generator": "G", "bus": "S", "p_mw": p, "v_set_pu": e, "slack": True}],
    )
