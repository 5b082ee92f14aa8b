"""Buses of a CGMES set: topological nodes, joined over closed switches."""

from __future__ import annotations

import cmath
import math
from collections.abc import Iterable
from dataclasses import dataclass, field

from compsize.study.build_network import MadeTables
from compsize.study.cgmes_model import SMALLEST_KV, Model, Thing

__all__ = ["Grid", "Port"]

_SWITCHES = ("Breaker", "Disconnector", "LoadBreakSwitch", "Switch", "ProtectedSwitch", "Jumper", "Fuse")


@dataclass(frozen=True)
class Port:
    """Where a terminal meets the network: bus, its kV, and whether it is connected."""

    bus: str
    kv: float
    on: bool
    terminal: Thing


@dataclass
class Grid:
    """The model with its topology worked out, and the tables that are being made of it."""

    model: Model
    made: MadeTables
    base_mva: float
    ports: dict[str, list[Port]] = field(default_factory=dict)
    """Ports by equipment, in the order of the terminals' sequence numbers."""
    start: dict[str, tuple[float, float]] = field(default_factory=dict)
    """Solved voltage [pu] and angle [degrees] by bus, where the set has a solved state."""
    held: dict[str, float] = field(default_factory=dict)
    """Voltage [pu] that units with voltage control hold, by bus."""
    taken: set[tuple[str, str]] = field(default_factory=set)
    _bus_of: dict[str, str] = field(default_factory=dict)
    _kv: dict[str, float] = field(default_factory=dict)
    _nodes: dict[str, Thing] = field(default_factory=dict)

    def build(self) -> None:
        """Works out buses and ports."""
        terminals: dict[str, list[Thing]] = {}
        for terminal in self.model.of("Terminal"):
            terminals.setdefault(terminal.text("ConductingEquipment"), []).append(terminal)
        for found in terminals.values():
            found.sort(key=lambda terminal: self.model.number(terminal, "sequenceNumber", 1.0))
        self._check_complete(terminals)
        self._join(terminals)
        for equipment, found in terminals.items():
            ports = [port for port in map(self.port, found) if port is not None]
            if len(ports) == len(found):
                self.ports[equipment] = ports
        for state in self.model.of("SvVoltage"):
            bus = self._bus_of.get(state.text("TopologicalNode"))
            size = self.model.number(state, "v", math.nan)
            if bus is not None and size > 0:
                self.start.setdefault(bus, (size / self._kv[bus], self.model.number(state, "angle")))

    def _check_complete(self, terminals: dict[str, list[Thing]]) -> None:
        """A terminal that refers to nothing shows that a file of the set is missing."""
        things = self.model.things
        homeless = sum(len(found) for name, found in terminals.items() if name not in things)
        if homeless:
            remedy = "Add the equipment file (EQ) of every model, and the boundary's."
            message = f"{homeless} terminals belong to equipment that is not in the set."
            self.model.faults.add(self.model.label, message, remedy)
        for equipment, found in terminals.items():
            for terminal in found:
                lost = terminal.text("TopologicalNode") and terminal.text("TopologicalNode") not in things
                loose = self.model.flag(terminal, "connected", False) and self._node(terminal) is None
                if equipment in things and (lost or loose):
                    remedy = "Add the topology file (TP) of every model, and the boundary's."
                    self.model.fault(things[equipment], "a terminal is connected to no topological node.", remedy)

    def _node(self, terminal: Thing) -> Thing | None:
        node = self.model.link(terminal, "TopologicalNode")
        if node is None:
            node = self.model.link(self.model.link(terminal, "ConnectivityNode"), "TopologicalNode")
        return node if node is not None and node.kind == "TopologicalNode" else None

    def port(self, terminal: Thing) -> Port | None:
        """Where a terminal meets the network, None where it meets nothing."""
        node = self._node(terminal)
        if node is None:
            return None
        bus = self._bus_of[node.id]
        return Port(bus, self._kv[bus], self.model.flag(terminal, "connected", True), terminal)

    def _join(self, terminals: dict[str, list[Thing]]) -> None:
        """Joins the nodes of closed switches and names the buses."""
        nodes = {node.id: node for node in self.model.of("TopologicalNode")}
        head = {node: node for node in nodes}

        def top(node: str) -> str:
            while head[node] != node:
                head[node] = head[head[node]]
                node = head[node]
            return node

        for switch in self.model.of(*_SWITCHES):
            if self.model.flag(switch, "open", self.model.flag(switch, "normalOpen", False)):
                continue
            ends = terminals.get(switch.id, [])
            met = [self._node(end) for end in ends if self.model.flag(end, "connected", True)]
            if len(met) == 2 and met[0] is not None and met[1] is not None:
                head[top(met[1].id)] = top(met[0].id)
        for node, thing in nodes.items():
            if top(node) == node:
                bus = self.name("buses", thing)
                self._kv[bus] = self._nominal(thing)
                self._nodes[bus] = thing
                self._bus_of[node] = bus
        for node in nodes:
            self._bus_of[node] = self._bus_of[top(node)]

    def _nominal(self, node: Thing) -> float:
        base = self.model.link(node, "BaseVoltage")
        if base is None:
            base = self.model.link(self.model.link(node, "ConnectivityNodeContainer"), "BaseVoltage")
        kv = 0.0 if base is None else self.model.number(base, "nominalVoltage")
        if kv < SMALLEST_KV:
            self.model.fault(node, "there is no base voltage.", "Add the boundary's equipment file or BaseVoltage.")
            return 1.0
        return kv

    def name(self, table: str, thing: Thing, suffix: str = "") -> str:
        """A name that is unique in its table: the object's, with the start of its identifier where that is taken."""
        plain = "".join(letter for letter in thing.name if letter.isprintable()).strip() or thing.id
        name = f"{plain}{suffix}"
        if (table, name) in self.taken:
            name = f"{plain} {thing.id[:8]}{suffix}"
        while (table, name) in self.taken:
            name += "'"
        self.taken.add((table, name))
        return name

    def bus_of(self, node: str) -> str | None:
        """The bus of a topological node."""
        return self._bus_of.get(node)

    def kv(self, bus: str) -> float:
        """Nominal voltage of a bus."""
        return self._kv[bus]

    def is_boundary(self, bus: str) -> bool:
        """Whether the bus is a point of the boundary, where neighbouring models meet."""
        return self.model.flag(self._nodes[bus], "boundaryPoint", False) if bus in self._nodes else False

    def add_star(self, thing: Thing, kv: float, start: complex | None) -> str:
        """Adds the inner bus of a transformer of three windings; nobody looks at its voltage.

        ``start`` is a starting voltage [pu], None where there is none.
        """
        bus = self.name("buses", thing, " star")
        self._kv[bus] = kv
        cells = {} if start is None else {"v_pu": abs(start), "angle_deg": math.degrees(cmath.phase(start))}
        self.made.add("buses", None, bus=bus, kv=kv, v_min_pu=0.0, v_max_pu=10.0, monitored="no", **cells)
        return bus

    def add_buses(self, wanted: Iterable[str]) -> None:
        """Adds the rows of the buses that are named."""
        keep = set(wanted)
        for bus, node in self._nodes.items():
            if bus not in keep:
                continue
            level = self.model.link(node, "ConnectivityNodeContainer")
            region = self.model.link(self.model.link(level, "Substation"), "Region")
            cells: dict[str, float | str] = {"bus": bus, "kv": self._kv[bus]}
            cells["area"] = "" if region is None else " ".join(region.name.split())
            low = 0.0 if level is None else self.model.number(level, "lowVoltageLimit")
            high = 0.0 if level is None else self.model.number(level, "highVoltageLimit")
            if 0 < low < high:
                cells |= {"v_min_pu": low / self._kv[bus], "v_max_pu": high / self._kv[bus]}
            if bus in self.start:
                cells |= {"v_pu": self.start[bus][0], "angle_deg": self.start[bus][1]}
            self.made.add("buses", None, **cells)
