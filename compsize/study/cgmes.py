"""Reading CGMES 2.4.15: the EQ, SSH and TP files of one or several models, with SV and boundary.

A set is a folder of XML files or a zip of them. What has no counterpart in the tables is decided here
and in the modules of its parts:

- A bus is a topological node; nodes joined by a closed switch are one bus. Names are kept; a name that is
  taken is followed by the start of the identifier. The area is the subgeographical region.
- A solved state (SV), where there is one, gives the starting voltages, the positions of tap changers and
  shunts, and the power of the slack; everything else is the hypothesis (SSH).
- The set carries no power base and frequency: 100 MVA and 50 Hz are taken.
- Parts that are cut off from the slack and hold neither load nor generation are left out.
"""

from __future__ import annotations

import os
from pathlib import Path

from compsize.study.build_network import MadeTables, NetworkDraft, draft_from_raw
from compsize.study.cgmes_branches import add_branches
from compsize.study.cgmes_buses import Grid
from compsize.study.cgmes_model import Model, read_model
from compsize.study.cgmes_units import add_loads, add_shunts, add_svcs, add_units
from compsize.study.check_network import check_network
from compsize.study.files import Faults, FileReader
from compsize.study.records import NetworkTables

__all__ = ["draft_cgmes", "read_cgmes"]

BASE_MVA = 100.0
FREQUENCY_HZ = 50.0

# Equipment that carries nothing in a balanced steady state, or is read in its part.
_READ = {
    *("ACLineSegment", "AsynchronousMachine", "Breaker", "BusbarSection", "ConformLoad", "Connector", "CsConverter"),
    *("Disconnector", "EnergyConsumer", "EquivalentBranch", "EquivalentInjection", "EquivalentShunt"),
    *("ExternalNetworkInjection", "Fuse", "Ground", "GroundDisconnector", "GroundingImpedance", "Jumper", "Junction"),
    *("LinearShuntCompensator", "LoadBreakSwitch", "NonConformLoad", "NonlinearShuntCompensator", "PetersenCoil"),
    *("PowerTransformer", "ProtectedSwitch", "SeriesCompensator", "StaticVarCompensator", "StationSupply", "Switch"),
    *("SynchronousMachine", "VsConverter"),
}


def read_cgmes(path: str | os.PathLike[str]) -> NetworkTables:
    """Reads and checks a network from a CGMES folder or zip.

    :raises InputError: with every fault of the set at once.
    """
    place = Path(path)
    faults = Faults()
    draft = draft_cgmes(place, "" if place.is_dir() else place.name, FileReader(faults))
    faults.raise_if_any()
    assert draft is not None
    return draft.tables


def draft_cgmes(path: Path, label: str, reader: FileReader) -> NetworkDraft | None:
    """Reads a network, noting faults in ``reader.faults``; None where the set cannot be read at all."""
    model = read_model(path, label, reader)
    if model is None:
        return None
    made = MadeTables(model.label)
    grid = Grid(model, made, BASE_MVA)
    grid.build()
    _check_kinds(model, grid)
    add_units(grid)
    add_loads(grid)
    add_shunts(grid)
    add_svcs(grid)
    add_branches(grid)
    _leave_out_dead(grid)
    before = len(reader.faults)
    draft = draft_from_raw(
        made.raw(),
        model.label,
        reader.faults,
        base_mva=BASE_MVA,
        frequency_hz=FREQUENCY_HZ,
        title=path.stem if path.is_file() else path.name,
        source=f"CGMES set {path.name}",
    )
    if len(reader.faults) == before:
        check_network(draft, reader.faults)
    return draft


def _check_kinds(model: Model, grid: Grid) -> None:
    """Equipment of an unknown kind that is connected would be missing from the network."""
    for equipment, ports in grid.ports.items():
        thing = model.things.get(equipment)
        if thing is not None and thing.kind not in _READ and any(port.on for port in ports):
            model.fault(thing, "equipment of this kind is not read.", "Leave it out of the set, or replace it.")


def _leave_out_dead(grid: Grid) -> None:
    """Keeps the buses of the slack's part and of parts that hold load or generation; leaves out the rest."""
    rows = grid.made.rows
    near: dict[str, set[str]] = {}
    for branch in rows.get("branches", ()):
        if branch["status"] == "on":
            near.setdefault(branch["from_bus"], set()).add(branch["to_bus"])
            near.setdefault(branch["to_bus"], set()).add(branch["from_bus"])
    alive = {unit["bus"] for unit in rows.get("generators", ()) if unit["status"] == "on"}
    alive |= {
        load["bus"]
        for load in rows.get("loads", ())
        if load["status"] == "on" and (float(load["p_mw"]) or float(load["q_mvar"]))
    }
    stack = list(alive)
    while stack:
        for other in near.get(stack.pop(), ()):
            if other not in alive:
                alive.add(other)
                stack.append(other)
    for table in ("loads", "generators", "shunts", "svcs", "buses"):
        if table in rows:
            rows[table] = [row for row in rows[table] if row["bus"] in alive]
    if "branches" in rows:
        rows["branches"] = [row for row in rows["branches"] if {row["from_bus"], row["to_bus"]} <= alive]
    stars = rows.pop("buses", [])
    grid.add_buses(alive)
    rows.setdefault("buses", []).extend(stars)
