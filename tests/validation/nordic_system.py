"""The Nordic voltage-stability test system as network tables, and its noses at the operating points A and B.

IEEE PES Task Force report PES-TR19, "Test Systems for Voltage Stability Analysis and Security Assessment" (2015;
journal version IEEE Trans. Power Systems 35(5), 2020). Its figures lie beside the repository and are
no part of it.
"""

from __future__ import annotations

import csv
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from margin_studies import single, study_of
from numpy.typing import NDArray
from verify_networks import network

from compsize.api import margins
from compsize.plan.records import CaseMargin
from compsize.study.records import Growth, NetworkTables
from compsize.verify.model import NotEvaluable, build_model
from compsize.verify.path import trace

NORDIC = Path(__file__).parents[3] / "shared" / "data" / "nordic"
ABSENT = "the figures of the report are not here: ../shared/data/nordic"
BASE_MVA = 100.0
POINTS = ("A", "B")
TAPS = ("locked", "moving")
PUBLISHED_SLACK, PUBLISHED_LOSSES = 2137.4 + 377.4j, 445.8
"""Output of g20 [MVA] and losses [MW] of point A as published."""
HALF_SIZE = ("g15", "g15b", "g18", "g18b")
"""In B two plants are split into units of half the size, which still list the whole plant's Qmax."""


def rows(name: str) -> list[dict[str, str]]:
    with (NORDIC / f"{name}.csv").open(newline="", encoding="utf-8") as handle:
        return list(csv.DictReader(handle))


def _line(row: dict[str, str], kv: float) -> dict[str, Any]:
    """Ohm and microsiemens at each end to per unit."""
    z_base = kv**2 / BASE_MVA
    return {
        "branch": row["line"],
        "from_bus": row["from_bus"],
        "to_bus": row["to_bus"],
        "r_pu": float(row["R_ohm"]) / z_base,
        "x_pu": float(row["X_ohm"]) / z_base,
        "b_pu": 2e-6 * float(row["half_charging_uS"]) * z_base,
        "rating_mva": float(row["rating_MVA"]),
    }


def _transformer(row: dict[str, str]) -> dict[str, Any]:
    """The ends change places, since the ideal ratio of the report is at its to side and ours at the from side."""
    assert float(row["B_pct"]) == 0.0, row
    size = float(row["rating_MVA"])
    branch: dict[str, Any] = {
        "branch": f"T{row['transformer']}",
        "from_bus": row["to_bus"],
        "to_bus": row["from_bus"],
        "r_pu": float(row["R_pct"]) / 100.0 * BASE_MVA / size,
        "x_pu": float(row["X_pct"]) / 100.0 * BASE_MVA / size,
        "tap": float(row["ratio_pct"]) / 100.0,
        "rating_mva": size,
    }
    if row["controlled_bus"]:
        branch |= {
            "regulated_bus": row["controlled_bus"],
            "v_target_pu": float(row["V_target_pu"]),
            "tap_min": float(row["ratio_min_pct"]) / 100.0,
            "tap_max": float(row["ratio_max_pct"]) / 100.0,
            "tap_steps": int(row["tap_positions"]) - 1,
        }
    return branch


def _transformers(point: str, joined: bool) -> list[dict[str, Any]]:
    """All transformers; ``joined``: two equal ones side by side that hold the same bus are one of twice the rating."""
    found = rows(f"transformer_{point}")
    twins = {name for row in found if (name := row["transformer"].removesuffix("-2")) != row["transformer"]}
    if joined:
        found = [
            row | {"rating_MVA": str(2.0 * float(row["rating_MVA"]))} if row["transformer"] in twins else row
            for row in found
            if row["transformer"].removesuffix("-2") == row["transformer"]
        ]
    return [_transformer(row) for row in found]


def tables(point: str, joined: bool = False) -> NetworkTables:
    """Operating point A or B. No Qmin is published: units are unlimited below.

    A lower limit at a fixed part of the rating would contradict the published state of B, in which g13 absorbs
    0.39 of its rating. ``joined``: tap changers side by side, which move together, are one.
    """
    buses = rows(f"bus_{point}")
    kv = {row["bus"]: float(row["nominal_kV"]) for row in buses}
    loads, shunts, units = [], [], []
    for row in buses:
        if float(row["load_MW"]) or float(row["load_Mvar"]):
            group = "central" if row["central_area_load"] == "1" else ""
            load = {"load": f"L{row['bus']}", "bus": row["bus"], "p_mw": float(row["load_MW"])}
            loads.append(load | {"q_mvar": float(row["load_Mvar"]), "group": group})
        if float(row["shunt_Mvar_at_1pu"]):
            shunts.append({"shunt": f"S{row['bus']}", "bus": row["bus"], "b_mvar": float(row["shunt_Mvar_at_1pu"])})
    for row in rows(f"generator_{point}"):
        halved = point == "B" and row["generator"] in HALF_SIZE
        unit = {"generator": row["generator"], "bus": row["bus"], "p_mw": float(row["P_MW"])}
        unit |= {"v_set_pu": float(row["V_setpoint_pu"]), "slack": row["slack"] == "1"}
        units.append(unit | {"q_max_mvar": float(row["Qmax_Mvar_listed"]) * (0.5 if halved else 1.0)})
    return network(
        BASE_MVA,
        buses=[
            {"bus": row["bus"], "kv": kv[row["bus"]], "v_pu": float(row["published_V_pu"])}
            | {"angle_deg": np.rad2deg(float(row["published_angle_rad"]))}
            for row in buses
        ],
        loads=loads,
        branches=[_line(row, kv[row["from_bus"]]) for row in rows(f"line_{point}")] + _transformers(point, joined),
        generators=units,
        shunts=shunts,
    )


def published_voltages(point: str) -> NDArray[np.complex128]:
    """Voltages [pu] of the published state, in table order."""
    buses = rows(f"bus_{point}")
    size = np.array([float(row["published_V_pu"]) for row in buses])
    return np.asarray(size * np.exp(1j * np.array([float(row["published_angle_rad"]) for row in buses])))


def injections(net: NetworkTables, v: NDArray[np.complex128]) -> NDArray[np.complex128]:
    """MVA that flow from each bus into branches and shunts at voltages ``v`` [pu], branch by branch."""
    number = {name: k for k, name in enumerate(net.buses.bus)}
    current = np.zeros(v.size, dtype=complex)
    br = net.branches
    for k in range(len(br.branch)):
        f, t = number[br.from_bus[k]], number[br.to_bus[k]]
        inside = v[f] / (br.tap[k] * np.exp(1j * np.deg2rad(br.shift_deg[k])))
        series = (inside - v[t]) / complex(br.r_pu[k], br.x_pu[k])
        half = 0.5j * br.b_pu[k]
        current[f] += (series + half * inside) / (br.tap[k] * np.exp(-1j * np.deg2rad(br.shift_deg[k])))
        current[t] += half * v[t] - series
    for k, bus in enumerate(net.shunts.bus):
        current[number[bus]] += complex(net.shunts.g_mw[k], net.shunts.b_mvar[k]) / net.base_mva * v[number[bus]]
    return np.asarray(v * current.conj() * net.base_mva)


@dataclass(frozen=True)
class PublishedFit:
    """How the published state fits the tables; units but the slack give their MW and whatever Mvar they need."""

    worst_mva: float
    """Largest mismatch of all buses but the slack's."""
    slack_mva: complex
    losses_mw: float


def published_fit(point: str) -> PublishedFit:
    """Mismatch of the published state in the tables."""
    net, v = tables(point), published_voltages(point)
    number = {name: k for k, name in enumerate(net.buses.bus)}
    s = injections(net, v)
    need = s.copy()
    for k, bus in enumerate(net.loads.bus):
        need[number[bus]] += complex(net.loads.p_mw[k], net.loads.q_mvar[k])
    gens = net.generators
    (slack,) = [gens.bus[k] for k in range(len(gens.bus)) if gens.slack[k]]
    left = need.copy()
    for k, bus in enumerate(gens.bus):
        left[number[bus]] = need[number[bus]].real - gens.p_mw[k]
    others = [k for name, k in number.items() if name != slack]
    return PublishedFit(float(np.abs(left[others]).max()), complex(need[number[slack]]), float(s.real.sum()))


def central_growth(net: NetworkTables, taps: Any) -> Growth:
    """Loads of the Central area grow at constant power and power factor; the slack g20 picks up, within its Qmax."""
    inside = [k for k, group in enumerate(net.loads.group) if group == "central"]
    p = [float(net.loads.p_mw[k]) for k in inside]
    return Growth(
        loads=tuple(net.loads.load[k] for k in inside),
        dp_mw=tuple(p),
        dq_mvar=tuple(float(net.loads.q_mvar[k]) for k in inside),
        base_mw=sum(p),
        description="loads of the Central area",
        power_factor="as base",
        pickup="slack",
        slack_limits=True,
        taps=taps,
    )


def lines_400(net: NetworkTables) -> list[str]:
    """The lines of the 400 kV network (both ends at 400 kV, no transformer)."""
    kv = dict(zip(net.buses.bus, net.buses.kv.tolist(), strict=True))
    br = net.branches
    return [
        name
        for name, f, t in zip(br.branch, br.from_bus, br.to_bus, strict=True)
        if kv[f] == kv[t] == 400.0 and not name.startswith("T")
    ]


def noses(point: str, taps: str) -> dict[str, CaseMargin]:
    """Noses of the intact network and of the loss of each 400 kV line, by name of the line."""
    net = tables(point, joined=taps == "moving")
    events = [single("branch", name) for name in lines_400(net)]
    result = margins(study_of(net, events, central_growth(net, taps)), workers=2)
    return {case.case.removeprefix("branch:"): case for case in result.cases}


def path_mw(point: str, taps: str, line: str) -> tuple[str, float]:
    """Kind and margin [MW] of a nose by the path follower that shares no code with the engine."""
    net = tables(point, joined=taps == "moving")
    lost = () if line == "intact" else (("branch", line),)
    model = build_model(net, central_growth(net, taps), lost)
    assert not isinstance(model, NotEvaluable)
    nose = trace(model)
    return nose.kind, nose.t_mw
