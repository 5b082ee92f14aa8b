"""Loads, units, shunts and compensators of a CGMES set."""

from __future__ import annotations

import math
from itertools import pairwise

from compsize.study.cgmes_buses import Grid, Port
from compsize.study.cgmes_model import Thing

__all__ = ["add_loads", "add_shunts", "add_svcs", "add_units"]

_LOADS = ("EnergyConsumer", "ConformLoad", "NonConformLoad", "StationSupply", "AsynchronousMachine")
_CONVERTERS = ("CsConverter", "VsConverter")


def _single(grid: Grid, thing: Thing) -> Port | None:
    ports = grid.ports.get(thing.id, [])
    return ports[0] if ports else None


def _status(grid: Grid, thing: Thing, port: Port) -> str:
    return "on" if port.on and grid.model.flag(thing, "inService", True) else "off"


def add_loads(grid: Grid) -> None:
    """Adds consumers, and injections without voltage control.

    Where active and reactive power depend on voltage differently, a load becomes two: one of its MW, one
    of its Mvar. Injections at a boundary point where two or more branches meet stand for the neighbouring
    model, which is there itself, and are left out.
    """
    meeting: dict[str, int] = {}
    for line in grid.model.of("ACLineSegment", "EquivalentBranch", "SeriesCompensator"):
        for end in grid.ports.get(line.id, ()):
            meeting[end.bus] = meeting.get(end.bus, 0) + 1
    for thing in grid.model.of(*_LOADS, "EquivalentInjection", *_CONVERTERS):
        port = _single(grid, thing)
        if port is None or (thing.kind == "EquivalentInjection" and _holds(grid, thing)):
            continue
        if thing.kind == "EquivalentInjection" and grid.is_boundary(port.bus) and meeting.get(port.bus, 0) > 1:
            continue
        p, q = grid.model.number(thing, "p"), grid.model.number(thing, "q")
        response = grid.model.link(thing, "LoadResponse")
        by_p, by_q = (_shares(grid, response, which) for which in "pq")
        status = _status(grid, thing, port)
        if by_p == by_q or p == 0 or q == 0:
            shares = by_q if p == 0 else by_p
            name = grid.name("loads", thing)
            _add_load(grid, name, port, p, q, shares=shares, status=status)
        else:
            _add_load(grid, grid.name("loads", thing), port, p, 0.0, shares=by_p, status=status)
            _add_load(grid, grid.name("loads", thing, " Mvar"), port, 0.0, q, shares=by_q, status=status)


def _add_load(
    grid: Grid, name: str, port: Port, p_mw: float, q_mvar: float, *, shares: tuple[float, float], status: str
) -> None:
    z, i = shares
    grid.made.add(
        "loads",
        None,
        load=name,
        bus=port.bus,
        p_mw=p_mw,
        q_mvar=q_mvar,
        status=status,
        z_share_pct=100 * z,
        i_share_pct=100 * i,
    )


def _shares(grid: Grid, response: Thing | None, which: str) -> tuple[float, float]:
    """Constant-impedance and constant-current shares of active (p) or reactive (q) power.

    An exponent becomes the mix of the same value and slope at 1 pu.
    """
    if response is None:
        return 0.0, 0.0
    number = grid.model.number
    if grid.model.flag(response, "exponentModel", False):
        exponent = number(response, f"{which}VoltageExponent")
        if not 0 <= exponent <= 2:
            grid.model.fault(response, f"the voltage exponent {exponent:g} is not from 0 to 2.", "Change it.")
            return 0.0, 0.0
        return (exponent - 1, 2 - exponent) if exponent > 1 else (0.0, exponent)
    z, i = number(response, f"{which}ConstantImpedance"), number(response, f"{which}ConstantCurrent")
    total = z + i + number(response, f"{which}ConstantPower", 1.0 - z - i)
    return (z / total, i / total) if total > 0 else (0.0, 0.0)


def _holds(grid: Grid, thing: Thing) -> bool:
    """Whether a machine or injection holds a voltage."""
    if thing.kind == "EquivalentInjection":
        return grid.model.flag(thing, "regulationStatus", False) and grid.model.number(thing, "regulationTarget") > 0
    control = grid.model.link(thing, "RegulatingControl")
    return (
        control is not None
        and control.text("mode") == "voltage"
        and grid.model.flag(control, "enabled", False)
        and grid.model.flag(thing, "controlEnabled", False)
        and grid.model.number(control, "targetValue") > 0
    )


def add_units(grid: Grid) -> None:
    """Adds synchronous machines, external networks and injections that hold a voltage.

    The slack is the machine of the highest reference priority, else a machine at the angle reference of
    the solved state. A unit without voltage control is held at its Mvar by equal limits. A unit that
    holds the voltage of another bus holds its own bus at the solved voltage instead; without a solved
    state that is a fault.
    """
    things = [
        (thing, port)
        for thing in grid.model.of("SynchronousMachine", "ExternalNetworkInjection", "EquivalentInjection")
        if (port := _single(grid, thing)) is not None and (thing.kind != "EquivalentInjection" or _holds(grid, thing))
    ]
    slack = _slack(grid, things)
    if slack is None:
        remedy = "Give one SynchronousMachine the referencePriority 1 in SSH, or add the solved state (SV)."
        message = "no machine in service is the reference of the angles."
        grid.model.faults.add(grid.model.label, message, remedy, column="slack")
    for thing, port in things:
        if thing is slack or _holds(grid, thing):
            target = _target(grid, thing, port, thing is slack)
            if port.on:
                grid.held.setdefault(port.bus, target)
    for thing, port in things:
        _add_unit(grid, thing, port, thing is slack)


def _slack(grid: Grid, things: list[tuple[Thing, Port]]) -> Thing | None:
    on = [(thing, port) for thing, port in things if port.on]
    ranked = [(grid.model.number(thing, "referencePriority"), at) for at, (thing, _) in enumerate(on)]
    ranked = [entry for entry in ranked if entry[0] > 0]
    if ranked:
        return on[min(ranked)[1]][0]
    for island in grid.model.of("TopologicalIsland"):
        bus = grid.bus_of(island.text("AngleRefTopologicalNode"))
        at_reference = [thing for thing, port in on if port.bus == bus]
        if at_reference:
            return at_reference[0]
    return None


def _target(grid: Grid, thing: Thing, port: Port, slack: bool) -> float:
    """Voltage [pu] that a unit holds at its own bus."""
    solved = grid.start.get(port.bus)
    if thing.kind == "EquivalentInjection":
        return grid.model.number(thing, "regulationTarget") / port.kv
    control = grid.model.link(thing, "RegulatingControl")
    target = 0.0 if control is None or control.text("mode") != "voltage" else grid.model.number(control, "targetValue")
    terminal = grid.model.link(control, "Terminal")
    place = None if terminal is None else grid.port(terminal)
    if target > 0 and (place is None or place.bus == port.bus):
        return target / port.kv
    if solved is not None:
        return solved[0]
    if target > 0 and place is not None:
        message = f"the unit holds the voltage of bus '{place.bus}'; a unit can hold its own bus only."
        grid.model.fault(thing, message, "Add the solved state (SV), of which the own bus's voltage is held.")
    elif slack:
        grid.model.fault(
            thing, "the slack has no voltage to hold.", "Add a RegulatingControl or the solved state (SV)."
        )
    return 1.0


def _add_unit(grid: Grid, thing: Thing, port: Port, slack: bool) -> None:
    number = grid.model.number
    p_mw, q_mvar = -number(thing, "p"), -number(thing, "q")
    if slack:
        # The solved power of the slack; it balances the network in any case.
        for flow in grid.model.of("SvPowerFlow"):
            if flow.text("Terminal") == port.terminal.id:
                p_mw = -number(flow, "p")
    holds = slack or _holds(grid, thing)
    own = _target(grid, thing, port, slack) if holds else math.nan
    v_set = own if holds else grid.held.get(port.bus, grid.start.get(port.bus, (1.0, 0.0))[0])
    cells: dict[str, float | str] = {"v_set_pu": v_set}
    if holds:
        cells |= _reactive_limits(grid, thing, p_mw)
    else:
        cells |= {"q_min_mvar": q_mvar + 0.0, "q_max_mvar": q_mvar + 0.0}
    unit = grid.model.link(thing, "GeneratingUnit")
    most = number(thing, "maxP") if unit is None else number(unit, "maxOperatingP")
    if most > 0:
        cells["p_max_mw"] = most
    share = 0.0 if unit is None else number(unit, "normalPF")
    if share > 0:
        cells["pickup"] = share
    grid.made.add(
        "generators",
        None,
        generator=grid.name("generators", thing),
        bus=port.bus,
        p_mw=p_mw + 0.0,
        slack="yes" if slack else "no",
        status=_status(grid, thing, port),
        **cells,
    )


def _reactive_limits(grid: Grid, thing: Thing, p_mw: float) -> dict[str, float | str]:
    """Limits by the capability curve at the unit's MW where it has one, else minQ and maxQ; empty: unlimited."""
    number = grid.model.number
    curve = thing.text("InitialReactiveCapabilityCurve")
    points = sorted(
        (number(point, "xvalue"), number(point, "y1value"), number(point, "y2value"))
        for point in grid.model.of("CurveData")
        if curve and point.text("Curve") == curve
    )
    if points:
        low, high = (_interpolate([(x, y[at]) for x, *y in points], p_mw) for at in (0, 1))
        return {"q_min_mvar": low, "q_max_mvar": high}
    limits: dict[str, float | str] = {}
    for cell, key in (("q_min_mvar", "minQ"), ("q_max_mvar", "maxQ")):
        if thing.text(key):
            limits[cell] = number(thing, key)
    return limits


def _interpolate(points: list[tuple[float, float]], x: float) -> float:
    if x <= points[0][0]:
        return points[0][1]
    for (x0, y0), (x1, y1) in pairwise(points):
        if x <= x1:
            return y1 if x1 == x0 else y0 + (y1 - y0) * (x - x0) / (x1 - x0)
    return points[-1][1]


def add_shunts(grid: Grid) -> None:
    """Adds shunt compensators with the sections that are on; one without is out of service with all of them."""
    number = grid.model.number
    solved = {
        state.text("ShuntCompensator"): number(state, "sections")
        for state in grid.model.of("SvShuntCompensatorSections")
    }
    for thing in grid.model.of("LinearShuntCompensator", "NonlinearShuntCompensator", "EquivalentShunt"):
        port = _single(grid, thing)
        if port is None:
            continue
        on = solved.get(thing.id, number(thing, "sections", number(thing, "normalSections", 1.0)))
        sections = on if on > 0 else number(thing, "maximumSections", 1.0)
        if thing.kind == "LinearShuntCompensator":
            b, g = number(thing, "bPerSection") * sections, number(thing, "gPerSection") * sections
        elif thing.kind == "EquivalentShunt":
            b, g, on = number(thing, "b"), number(thing, "g"), 1.0
        else:
            rows = [
                row
                for row in grid.model.of("NonlinearShuntCompensatorPoint")
                if row.text("NonlinearShuntCompensator") == thing.id and number(row, "sectionNumber") <= sections
            ]
            b, g = sum(number(row, "b") for row in rows), sum(number(row, "g") for row in rows)
        grid.made.add(
            "shunts",
            None,
            shunt=grid.name("shunts", thing),
            bus=port.bus,
            b_mvar=b * port.kv**2,
            g_mw=g * port.kv**2,
            status=_status(grid, thing, port) if on > 0 else "off",
        )


def add_svcs(grid: Grid) -> None:
    """Adds static var compensators; one that does not hold the voltage of its own bus is a fixed shunt.

    The ratings are reactances [ohm] at the limits, the slope is in kV per Mvar.
    """
    number = grid.model.number
    for thing in grid.model.of("StaticVarCompensator"):
        port = _single(grid, thing)
        if port is None:
            continue
        control = grid.model.link(thing, "RegulatingControl")
        terminal = grid.model.link(control, "Terminal")
        place = None if terminal is None else grid.port(terminal)
        target = number(thing, "voltageSetPoint") if control is None else number(control, "targetValue")
        capacitive, inductive = number(thing, "capacitiveRating"), number(thing, "inductiveRating")
        own = place is None or place.bus == port.bus
        holds = thing.text("sVCControlMode") == "voltage" and grid.model.flag(thing, "controlEnabled", False)
        status = _status(grid, thing, port)
        if holds and own and target > 0:
            q_max = port.kv**2 / abs(capacitive) if capacitive else 0.0
            q_min = -(port.kv**2) / abs(inductive) if inductive else 0.0
            slope = 100 * number(thing, "slope") * (q_max or -q_min) / port.kv
            grid.made.add(
                "svcs",
                None,
                svc=grid.name("svcs", thing),
                bus=port.bus,
                kind="svc",
                q_min_mvar=q_min,
                q_max_mvar=q_max,
                v_ref_pu=target / port.kv,
                slope_pct=slope,
                status=status,
            )
        elif holds and not own:
            grid.model.fault(thing, "the device holds the voltage of another bus.", "Let it hold its own bus.")
        else:
            v = grid.start.get(port.bus, (1.0, 0.0))[0]
            grid.made.add(
                "shunts",
                None,
                shunt=grid.name("shunts", thing),
                bus=port.bus,
                b_mvar=-number(thing, "q") / v**2,
                status=status,
            )
