"""Devices that hold a voltage by moving one control between two limits.

| kind      | control u          | injects Q [pu] | holds                                  |
|-----------|--------------------|----------------|----------------------------------------|
| generator | reactive power     | u              | V = set                                |
| svc       | susceptance        | u V^2          | V + slope u V / rating = set           |
| statcom   | current            | u V            | V + slope u / rating = set             |
| tap       | ratio              | -              | V = set at the regulated bus           |
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np

from compsize.errors import UsageError
from compsize.study.records import Growth, NetworkTables
from compsize.verify.parts import InService

GENERATOR, SVC, STATCOM, TAP = 0, 1, 2, 3

TIE = 1e-8
"""Least slope where several devices hold one bus: it settles which of them gives how much (V off by 1e-8)."""


@dataclass(frozen=True)
class Added:
    """New equipment at a bus: Mvar at 1 pu of the bus kv, all steps that are on together.

    ``absorb_mvar`` >= 0 and ``slope_pct``, ``v_ref_pu`` [pu] concern svc and statcom only.
    """

    bus: str
    kind: Literal["bank", "svc", "statcom"]
    mvar: float
    absorb_mvar: float = 0.0
    slope_pct: float = 0.0
    v_ref_pu: float = 1.0
    name: str = ""


@dataclass(frozen=True)
class Device:
    """One control. ``bus`` is the bus held, ``low`` and ``high`` bound u [pu], ``rating`` is u at rated output.

    ``gain`` is +1 where more u raises the voltage held, -1 where it lowers it. ``branch`` is the table row of
    a tap changer (else -1), ``neutral`` the ratio from which its slope counts.
    """

    name: str
    kind: int
    bus: int
    low: float
    high: float
    set_pu: float
    slope: float = 0.0
    rating: float = 1.0
    gain: int = 1
    branch: int = -1
    neutral: float = 0.0

    def excess(self, v: float, u: float) -> tuple[float, float, float]:
        """e = V + slope x I - set [pu], zero while regulating, and its derivatives by V and u."""
        a = self.slope / self.rating
        if self.kind == SVC:
            return v + a * u * v - self.set_pu, 1.0 + a * u, a * v
        return v + self.gain * a * (u - self.neutral) - self.set_pu, 1.0, self.gain * a

    def output(self, v: float, u: float) -> float:
        """Reactive power injected [pu] at voltage ``v`` and control ``u``."""
        return {GENERATOR: u, SVC: u * v * v, STATCOM: u * v, TAP: 0.0}[self.kind]

    def corner(self, u: float) -> float:
        """Voltage [pu] at which a device with its control at ``u`` would just regulate."""
        a = self.slope / self.rating
        if self.kind == SVC:
            return self.set_pu / (1.0 + a * u)
        return self.set_pu - self.gain * a * (u - self.neutral)


def devices(
    network: NetworkTables, growth: Growth, left: InService, number: dict[str, int], added: tuple[Added, ...]
) -> tuple[Device, ...]:
    """All controls in service: generators of one bus as one, then svc and statcom, then moving tap changers."""
    found = [*_generators(network, growth, left, number), *_compensators(network, left, number, added)]
    generator_buses = {d.bus for d in found if d.kind == GENERATOR}
    if growth.taps == "moving":
        found += [d for d in _taps(network, left, number) if d.bus not in generator_buses]
    holders: dict[int, int] = {}
    for d in found:
        holders[d.bus] = holders.get(d.bus, 0) + 1
    return tuple(_tied(d) if holders[d.bus] > 1 and d.kind != GENERATOR else d for d in found)


def _tied(d: Device) -> Device:
    return d if d.slope >= TIE else Device(**{**d.__dict__, "slope": TIE})


def _generators(network: NetworkTables, growth: Growth, left: InService, number: dict[str, int]) -> list[Device]:
    table = network.generators
    groups: dict[int, list[int]] = {}
    for k in np.flatnonzero(left.generators):
        groups.setdefault(number[table.bus[k]], []).append(int(k))
    found = []
    for bus, rows in groups.items():
        free = left.slack in rows and not growth.slack_limits
        free = free or (left.slack not in rows and not growth.generator_limits)
        found.append(
            Device(
                name="+".join(table.generator[k] for k in rows),
                kind=GENERATOR,
                bus=bus,
                low=-np.inf if free else float(table.q_min_mvar[rows].sum()) / network.base_mva,
                high=np.inf if free else float(table.q_max_mvar[rows].sum()) / network.base_mva,
                set_pu=float(table.v_set_pu[rows[0]]),
            )
        )
    return found


def _compensators(
    network: NetworkTables, left: InService, number: dict[str, int], added: tuple[Added, ...]
) -> list[Device]:
    table, base = network.svcs, network.base_mva
    found = []
    for k in np.flatnonzero(left.svcs):
        low, high = float(table.q_min_mvar[k]) / base, float(table.q_max_mvar[k]) / base
        kind = SVC if table.kind[k] == "svc" else STATCOM
        slope = float(table.slope_pct[k]) / 100.0
        rating = high if high > 0.0 else max(-low, 1e-12)
        found.append(
            Device(table.svc[k], kind, number[table.bus[k]], low, high, float(table.v_ref_pu[k]), slope, rating)
        )
    for item in added:
        if item.kind not in ("bank", "svc", "statcom"):
            raise UsageError(f"{item.kind!r} is no kind of equipment")
        if item.kind == "bank" or item.bus not in number or item.mvar <= 0.0:
            continue
        found.append(
            Device(
                item.name or f"{item.kind}:{item.bus}",
                SVC if item.kind == "svc" else STATCOM,
                number[item.bus],
                -item.absorb_mvar / base,
                item.mvar / base,
                item.v_ref_pu,
                slope=item.slope_pct / 100.0,
                rating=item.mvar / base,
            )
        )
    return found


def _taps(network: NetworkTables, left: InService, number: dict[str, int]) -> list[Device]:
    """Moving tap changers, continuous. More ratio lowers the to side, and raises the from side."""
    table = network.branches
    found = []
    for k in np.flatnonzero(left.branches):
        regulated = table.regulated_bus[k]
        if not regulated or regulated not in number:
            continue
        found.append(
            Device(
                name=table.branch[k],
                kind=TAP,
                bus=number[regulated],
                low=float(min(table.tap_min[k], table.tap[k])),
                high=float(max(table.tap_max[k], table.tap[k])),
                set_pu=float(table.v_target_pu[k]),
                gain=1 if regulated == table.from_bus[k] else -1,
                branch=int(k),
                neutral=float(table.tap[k]),
            )
        )
    return found
