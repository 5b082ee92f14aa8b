"""Cases for tests of the engine: from tables to a nose in MW, and a network with one of everything."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from verify_networks import everything, network

from compsize.network.cases import Addition, CaseModel, build_case
from compsize.network.devices import compensator
from compsize.network.grid import Grid, build_grid
from compsize.nose.engine import Engine, Nose
from compsize.study.records import Growth, NetworkTables

Lost = tuple[tuple[str, str], ...]


@dataclass(frozen=True)
class Case:
    """A case with its nose."""

    grid: Grid
    model: CaseModel
    nose: Nose

    @property
    def margin_mw(self) -> float:
        return self.nose.loading * self.model.mw_per_loading

    @property
    def nose_mw(self) -> float:
        return self.model.base_mw + self.margin_mw

    def v(self, bus: str) -> float:
        """Voltage [pu] of a bus at the nose."""
        assert self.nose.point is not None
        return float(self.nose.point.v[self.grid.node[self.grid.bus_index[bus]]])

    def complex_v(self) -> NDArray[np.complex128]:
        """Voltages [pu] of all buses at the nose, in the order of the tables."""
        assert self.nose.point is not None
        node = self.grid.node
        return np.asarray(self.nose.point.v[node] * np.exp(1j * self.nose.point.th[node]))


@dataclass(frozen=True)
class Added:
    """Equipment beside the network: a bank of ``mvar``, or a device with limits [Mvar] and a slope [%]."""

    bus: str
    mvar: float
    kind: str = "bank"
    absorb: float = 0.0
    v_ref: float = 1.0
    slope: float = 0.0


def find(net: NetworkTables, growth: Growth | None = None, lost: Lost = (), added: tuple[Added, ...] = ()) -> Case:
    """The nose of a case, traced from its operating point; all loads grow, if nothing else is said."""
    grid = build_grid(net, growth or everything(net))
    additions = []
    for item in added:
        bus, pu = grid.bus_index[item.bus], item.mvar / net.base_mva
        if item.kind == "bank":
            additions.append(Addition(bus, b_pu=pu))
        else:
            low = -item.absorb / net.base_mva
            device = compensator("new", item.kind, low, pu, item.v_ref, item.slope / 100.0)
            additions.append(Addition(bus, devices=(device,)))
    model = build_case(grid, lost, additions)
    assert model.evaluable, model.status
    return Case(grid, model, Engine(grid).nose(model))


def of_everything(**changes: Any) -> NetworkTables:
    """Seven buses: tap changers that hold either side, a shift, mixed loads, units with limits, SVC and STATCOM."""
    return network(
        buses=[{"bus": str(k)} for k in range(1, 8)],
        loads=[
            {"load": "a", "bus": "3", "p_mw": 60.0, "q_mvar": 20.0, "z_share_pct": 30.0, "i_share_pct": 20.0},
            {"load": "b", "bus": "4", "p_mw": 40.0, "q_mvar": 10.0},
            {"load": "c", "bus": "5", "p_mw": 30.0, "q_mvar": 12.0, "i_share_pct": 100.0},
            {"load": "d", "bus": "7", "p_mw": 8.0, "q_mvar": 3.0, "z_share_pct": 100.0},
        ],
        branches=[
            {"branch": "1", "from_bus": "1", "to_bus": "2", "r_pu": 0.01, "x_pu": 0.1, "b_pu": 0.05},
            {"branch": "2", "from_bus": "2", "to_bus": "3", "r_pu": 0.02, "x_pu": 0.15, "b_pu": 0.03},
            {"branch": "3", "from_bus": "1", "to_bus": "3", "r_pu": 0.01, "x_pu": 0.2, "tap": 0.98, "shift_deg": 4.0},
            {"branch": "4", "from_bus": "3", "to_bus": "4", "r_pu": 0.005, "x_pu": 0.1, "b_pu": 0.02, "tap": 0.97}
            | {"regulated_bus": "4", "v_target_pu": 1.01, "tap_min": 0.85, "tap_max": 1.1, "tap_steps": 20}
            | {"shift_deg": -2.0},
            {"branch": "5", "from_bus": "3", "to_bus": "5", "r_pu": 0.02, "x_pu": 0.2},
            {"branch": "6", "from_bus": "6", "to_bus": "2", "r_pu": 0.0, "x_pu": 0.12, "tap": 1.02}
            | {"regulated_bus": "6", "v_target_pu": 1.0, "tap_min": 0.9, "tap_max": 1.1, "tap_steps": 20},
            {"branch": "7", "from_bus": "6", "to_bus": "7", "r_pu": 0.02, "x_pu": 0.1},
        ],
        generators=[
            {"generator": "A", "bus": "1", "p_mw": 80.0, "v_set_pu": 1.04, "slack": True},
            {"generator": "B", "bus": "2", "p_mw": 30.0, "v_set_pu": 1.02, "q_min_mvar": -10.0, "q_max_mvar": 20.0},
            {"generator": "C", "bus": "2", "p_mw": 20.0, "v_set_pu": 1.02, "q_min_mvar": -5.0, "q_max_mvar": 10.0},
        ],
        shunts=[{"shunt": "s", "bus": "5", "b_mvar": 5.0, "g_mw": 1.0}],
        svcs=[
            {"svc": "v", "bus": "3", "kind": "svc", "q_min_mvar": -20.0, "q_max_mvar": 30.0, "v_ref_pu": 1.0}
            | {"slope_pct": 3.0},
            {"svc": "w", "bus": "5", "kind": "statcom", "q_min_mvar": -10.0, "q_max_mvar": 10.0, "v_ref_pu": 0.99}
            | {"slope_pct": 2.0},
        ],
        **changes,
    )
