"""The network of one case as complex admittances, loads along a direction, and devices that hold a voltage.

Per unit on ``base_mva``. Buses are numbered in table order, without those that an outage cut off.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from compsize.errors import UsageError
from compsize.study.records import Growth, NetworkTables
from compsize.verify.devices import GENERATOR, STATCOM, SVC, Added, Device, devices
from compsize.verify.parts import InService, NotEvaluable, in_service
from compsize.verify.pickup import Floats, Schedule, fill

__all__ = ["GENERATOR", "STATCOM", "SVC", "Added", "Device", "Model", "NotEvaluable", "build_model"]

Complex = NDArray[np.complex128]
Ints = NDArray[np.int64]


@dataclass(frozen=True, eq=False)
class Entries:
    """Admittance entries: ``value`` [pu] at (``row``, ``col``), to be divided by ratio**``power``.

    ``device`` is the number of the moving tap changer that owns the ratio, -1 for none.
    """

    row: Ints
    col: Ints
    value: Complex
    power: Floats
    device: Ints


@dataclass(frozen=True, eq=False)
class Model:
    """One case, ready to be solved. Loads are S [pu, drawn] = sum of (base + t x growth) x |V|**k, k = 0, 1, 2."""

    buses: tuple[str, ...]
    base_mva: float
    entries: Entries
    load_base: Complex
    """Nominal load today [3 (power, current, impedance), buses], pu."""
    load_growth: Complex
    """The same, per MW of loading."""
    schedule: Schedule
    unit_bus: Ints
    """Bus of each unit in the schedule, which leaves the slack out."""
    devices: tuple[Device, ...]
    slack_bus: int
    base_mw: float
    """Nominal MW of the growing load that is left in service."""
    total_mw: float
    """Nominal MW of all loads in service."""
    start: Complex
    """A voltage to start from."""
    notes: tuple[str, ...] = ()

    @property
    def scale_mw(self) -> float:
        """A round size of the loading, MW."""
        return max(abs(self.base_mw), abs(self.total_mw), 1e-3 * self.base_mva)


def build_model(
    network: NetworkTables,
    growth: Growth,
    lost: Iterable[tuple[str, str]] = (),
    added: Iterable[Added] = (),
    load_factor: float = 1.0,
) -> Model | NotEvaluable:
    """Model of the network with an outage and with added equipment.

    ``lost`` are pairs of a kind (branch, generator, load, shunt, svc) and an id. ``load_factor`` scales all
    loads today (light load), and the pick-up shares take the difference. The loading is counted in MW of the growing
    loads left in service, so that a margin is the loading at the nose. Raises UsageError for unknown names.
    """
    left = in_service(network, lost)
    if isinstance(left, NotEvaluable):
        return left
    kept = np.flatnonzero(left.buses)
    number = {network.buses.bus[k]: i for i, k in enumerate(kept)}
    n = len(kept)
    base = network.base_mva

    loads = network.loads
    drawn = np.where(left.loads, loads.p_mw + 1j * loads.q_mvar, 0.0)
    row_of = {name: k for k, name in enumerate(loads.load)}
    direction = np.zeros(len(drawn), dtype=complex)
    for name, dp, dq in zip(growth.loads, growth.dp_mw, growth.dq_mvar, strict=True):
        if name not in row_of:
            raise UsageError(f"the network has no load {name!r}")
        if left.loads[row_of[name]]:
            direction[row_of[name]] += dp + 1j * dq
    step = float(direction.real.sum())
    if step <= 0.0:
        return NotEvaluable("no growing load is left in service")
    direction = direction / step
    shares = np.array([100.0 - loads.z_share_pct - loads.i_share_pct, loads.i_share_pct, loads.z_share_pct]) / 100.0
    load_base = np.zeros((3, n), dtype=complex)
    load_growth = np.zeros((3, n), dtype=complex)
    for k in np.flatnonzero(left.loads):
        load_base[:, number[loads.bus[k]]] += load_factor * drawn[k] * shares[:, k] / base
        load_growth[:, number[loads.bus[k]]] += direction[k] * shares[:, k] / base
    total_mw = float(drawn.real.sum())

    schedule, units = _pickup(network, growth, left, total_mw, (load_factor - 1.0) * total_mw)
    held = devices(network, growth, left, number, tuple(added))
    start = np.ones(n, dtype=complex)
    v, angle = network.buses.v_pu[kept], network.buses.angle_deg[kept]
    known = ~(np.isnan(v) | np.isnan(angle))
    start[known] = (v * np.exp(1j * np.deg2rad(angle)))[known]
    return Model(
        buses=tuple(network.buses.bus[k] for k in kept),
        base_mva=base,
        entries=_entries(network, left, number, held, tuple(added)),
        load_base=load_base,
        load_growth=load_growth,
        schedule=schedule,
        unit_bus=np.array([number[network.generators.bus[k]] for k in units], dtype=np.int64),
        devices=held,
        slack_bus=number[network.generators.bus[left.slack]],
        base_mw=float(sum(drawn[row_of[name]].real for name in dict.fromkeys(growth.loads))),
        total_mw=total_mw,
        start=start,
        notes=left.notes,
    )


def _pickup(
    network: NetworkTables, growth: Growth, left: InService, total_mw: float, change_mw: float
) -> tuple[Schedule, list[int]]:
    """Schedule of all units in service but the slack, and their table rows.

    Lost generation is shared first, like added load of the same MW.
    """
    table = network.generators
    units = [int(k) for k in np.flatnonzero(left.generators) if k != left.slack]
    everyone = [*units, left.slack]
    p = table.p_mw[units]
    intact = in_service(network, ())
    before = table.status if isinstance(intact, NotEvaluable) else intact.generators
    lost_mw = float(table.p_mw[before & ~left.generators].sum())
    if growth.pickup == "proportional":
        weight = p / total_mw if total_mw else np.zeros(len(p))
    elif growth.pickup == "slack":
        weight = np.zeros(len(p))
    else:
        size = table.p_max_mw - table.p_mw if growth.pickup == "headroom" else table.pickup
        size = np.where(np.isnan(size), 0.0, size)
        total = float(size[everyone].sum())
        weight = size[units] / total if total else np.zeros(len(p))
    p_max = np.full(len(p), np.inf)
    if growth.pickup_limits:
        p_max = np.where(np.isnan(table.p_max_mw[units]), np.inf, table.p_max_mw[units])
    if lost_mw:
        first = fill(p, weight, p_max)
        p = first.power(lost_mw, first.segment(lost_mw))[0]
    if change_mw:
        first = fill(p, weight, p_max)
        p = first.power(change_mw, first.segment(change_mw))[0]
    return fill(p, weight, p_max), units


def _entries(
    network: NetworkTables,
    left: InService,
    number: dict[str, int],
    held: tuple[Device, ...],
    added: tuple[Added, ...],
) -> Entries:
    """Branches, shunts and added banks as admittance entries.

    I_from = (y + jb/2) V_from / t^2 - y V_to / (t e^(-js)),  I_to = (y + jb/2) V_to - y V_from / (t e^(js)).
    """
    rows: list[int] = []
    cols: list[int] = []
    values: list[complex] = []
    powers: list[float] = []
    owners: list[int] = []

    def add(row: int, col: int, value: complex, power: float = 0.0, owner: int = -1) -> None:
        rows.append(row)
        cols.append(col)
        values.append(value)
        powers.append(power)
        owners.append(owner)

    moving = {d.branch: k for k, d in enumerate(held) if d.branch >= 0}
    table = network.branches
    for k in np.flatnonzero(left.branches):
        f, t = number[table.from_bus[k]], number[table.to_bus[k]]
        y = 1.0 / complex(table.r_pu[k], table.x_pu[k])
        end = y + 0.5j * float(table.b_pu[k])
        turn = np.exp(1j * np.deg2rad(table.shift_deg[k]))
        owner = moving.get(int(k), -1)
        ratio = 1.0 if owner >= 0 else float(table.tap[k])
        add(f, f, end / ratio**2, 2.0, owner)
        add(f, t, -y * turn / ratio, 1.0, owner)
        add(t, f, -y / turn / ratio, 1.0, owner)
        add(t, t, end, 0.0, -1)
    for k in np.flatnonzero(left.shunts):
        i = number[network.shunts.bus[k]]
        add(i, i, complex(network.shunts.g_mw[k], network.shunts.b_mvar[k]) / network.base_mva)
    for item in added:
        if item.kind == "bank" and item.bus in number:
            add(number[item.bus], number[item.bus], 1j * item.mvar / network.base_mva)
    return Entries(
        np.array(rows, dtype=np.int64),
        np.array(cols, dtype=np.int64),
        np.array(values, dtype=complex),
        np.array(powers, dtype=float),
        np.array(owners, dtype=np.int64),
    )
