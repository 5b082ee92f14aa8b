"""Branches of a CGMES set: lines, transformers of two and three windings, tap changers, ratings.

Impedances are in ohm at the voltage of their end; a ratio belongs between the terminal and the impedance
of its end. With the end that has a tap changer as the from side that is the convention of the tables:
with z_from [ohm at U_from], z_to [ohm at U_to] and complex ratios n of the tap changers,

    t = (U_from n_from / kv_from) / (U_to n_to / kv_to),  z = (z_from (U_to / U_from)^2 + z_to) |n_to|^2.

Charging and magnetising admittances stand half at each end. Their conductance, for which branches have no
column, becomes fixed shunts at the two buses, which stay when the branch is lost. Vector-group clock
numbers turn whole parts of a network alike and are left out, as solved states leave them out.
"""

from __future__ import annotations

import cmath
import math
from dataclasses import dataclass

from compsize.study.cgmes_buses import Grid, Port
from compsize.study.cgmes_model import SMALLEST_KV, Thing
from compsize.study.cgmes_taps import Changer, changers

__all__ = ["add_branches"]

SMALLEST_X_PU = 1e-5
"""Reactance [pu] of a branch that has no impedance."""


def add_branches(grid: Grid) -> None:
    """Adds all lines and transformers."""
    ratings = _ratings(grid)
    for line in grid.model.of("ACLineSegment", "SeriesCompensator", "EquivalentBranch"):
        ports = grid.ports.get(line.id, [])
        if len(ports) == 2:
            _add_line(grid, line, ports, ratings)
    ends: dict[str, list[Thing]] = {}
    for end in grid.model.of("PowerTransformerEnd"):
        ends.setdefault(end.text("PowerTransformer"), []).append(end)
    taps = changers(grid)
    for transformer in grid.model.of("PowerTransformer"):
        found = sorted(ends.get(transformer.id, []), key=lambda end: grid.model.number(end, "endNumber", 1.0))
        windings = [winding for winding in (_winding(grid, end, taps) for end in found) if winding is not None]
        if len(windings) != len(found):
            continue
        if len(windings) == 2:
            _add_two(grid, transformer, windings, ratings)
        elif len(windings) == 3:
            _add_three(grid, transformer, windings, ratings)
        else:
            message = f"the transformer has {len(windings)} windings."
            grid.model.fault(transformer, message, "Two and three windings are read.")


def _ratings(grid: Grid) -> dict[str, float]:
    """Lowest permanent current limit [A] by terminal."""
    found: dict[str, float] = {}
    for limit in grid.model.of("CurrentLimit"):
        kind = grid.model.link(limit, "OperationalLimitType")
        terminal = grid.model.link(grid.model.link(limit, "OperationalLimitSet"), "Terminal")
        value = grid.model.number(limit, "value")
        if kind is None or terminal is None or value <= 0 or kind.text("limitType") != "patl":
            continue
        found[terminal.id] = min(value, found.get(terminal.id, math.inf))
    return found


def _rating(ports: list[Port], ratings: dict[str, float]) -> dict[str, float | str]:
    mva = [math.sqrt(3) * port.kv * ratings[port.terminal.id] / 1e3 for port in ports if port.terminal.id in ratings]
    return {"rating_mva": min(mva)} if mva else {}


def _in_service(grid: Grid, thing: Thing, ports: list[Port]) -> str:
    """A branch that is open at one end counts as out of service."""
    return "on" if all(port.on for port in ports) and grid.model.flag(thing, "inService", True) else "off"


def _series(z_ohm: complex, kv: float, base_mva: float) -> dict[str, float | str]:
    z = z_ohm * base_mva / kv**2
    return {"r_pu": z.real, "x_pu": z.imag if z != 0 else SMALLEST_X_PU}


def _add_branch(grid: Grid, thing: Thing, y_pu: complex, cells: dict[str, float | str]) -> None:
    """Adds a row and, for the conductance of ``y_pu`` [pu of the to side], a shunt at each end."""
    grid.made.add("branches", None, **cells, b_pu=y_pu.imag)
    if y_pu.real == 0 or cells["status"] == "off":
        return
    half = y_pu.real / 2 * grid.base_mva
    for bus, g in ((str(cells["from_bus"]), half / float(cells["tap"]) ** 2), (str(cells["to_bus"]), half)):
        shunt = grid.name("shunts", thing, f" conductance at {bus}")
        grid.made.add("shunts", None, shunt=shunt, bus=bus, b_mvar=0.0, g_mw=g)


def _add_line(grid: Grid, line: Thing, ports: list[Port], ratings: dict[str, float]) -> None:
    number = grid.model.number
    start, end = ports
    if start.bus == end.bus:
        return
    cells: dict[str, float | str] = {
        "branch": grid.name("branches", line),
        "from_bus": start.bus,
        "to_bus": end.bus,
        **_series(complex(number(line, "r"), number(line, "x")), end.kv, grid.base_mva),
        # Ends may differ in nominal voltage (220 and 225 kV): the ratio turns one per unit into the other.
        "tap": end.kv / start.kv,
        "status": _in_service(grid, line, ports),
        **_rating(ports, ratings),
    }
    _add_branch(grid, line, complex(number(line, "gch"), number(line, "bch")) * end.kv**2 / grid.base_mva, cells)


@dataclass(frozen=True)
class _Winding:
    port: Port
    rated_kv: float
    z_ohm: complex
    y_siemens: complex
    tap: Changer | None

    @property
    def ratio(self) -> complex:
        """Complex ratio of the tap changer at its position."""
        return 1.0 + 0j if self.tap is None else self.tap.ratio


def _winding(grid: Grid, end: Thing, taps: dict[str, list[Changer]]) -> _Winding | None:
    number = grid.model.number
    terminal = grid.model.link(end, "Terminal")
    if terminal is None:
        grid.model.fault(end, "the winding has no terminal.", "Add the equipment file (EQ) that holds it.")
    port = None if terminal is None else grid.port(terminal)
    if port is None:
        return None
    rated = number(end, "ratedU")
    if rated < SMALLEST_KV:
        grid.model.fault(end, "the winding has no rated voltage.", "Add ratedU.")
        rated = port.kv
    found = taps.get(end.id, [])
    tap = found[0] if found else None
    for other in found[1:]:
        tap = other if tap is None else tap.times(other)
    z = complex(number(end, "r"), number(end, "x"))
    if tap is not None:
        z = complex(z.real * tap.r_factor, z.imag * tap.x_factor)
        if tap.x_ohm is not None:
            z = complex(z.real, tap.x_ohm)
    return _Winding(port, rated, z, complex(number(end, "g"), number(end, "b")), tap)


def _add_two(grid: Grid, transformer: Thing, windings: list[_Winding], ratings: dict[str, float]) -> None:
    one, two = windings
    # The from side is the winding with the tap changer, or with the controlled one.
    turn = (one.tap is None and two.tap is not None) or (
        two.tap is not None and two.tap.controlled and not (one.tap is not None and one.tap.controlled)
    )
    start, end = (two, one) if turn else (one, two)
    if start.port.bus == end.port.bus:
        return
    ratio, inside = (end.rated_kv / start.rated_kv) ** 2, abs(end.ratio) ** 2
    _add_transformer(
        grid,
        transformer,
        start,
        end.rated_kv * end.ratio / end.port.kv,
        z_ohm=(start.z_ohm * ratio + end.z_ohm) * inside,
        y_siemens=(start.y_siemens / ratio + end.y_siemens) / inside,
        to_kv=end.port.kv,
        cells={
            "branch": grid.name("branches", transformer),
            "to_bus": end.port.bus,
            "status": _in_service(grid, transformer, [start.port, end.port]),
            **_rating([start.port, end.port], ratings),
        },
    )


def _add_three(grid: Grid, transformer: Thing, windings: list[_Winding], ratings: dict[str, float]) -> None:
    star_kv = windings[0].rated_kv
    star = grid.add_star(transformer, star_kv, _start(grid, windings, star_kv))
    for winding, at in zip(windings, (1, 2, 3), strict=True):
        ratio = (star_kv / winding.rated_kv) ** 2
        _add_transformer(
            grid,
            transformer,
            winding,
            1.0 + 0j,
            z_ohm=winding.z_ohm * ratio,
            y_siemens=winding.y_siemens / ratio,
            to_kv=star_kv,
            cells={
                "branch": grid.name("branches", transformer, f" w{at}"),
                "to_bus": star,
                "status": _in_service(grid, transformer, [winding.port]),
                **_rating([winding.port], ratings),
            },
        )


def _start(grid: Grid, windings: list[_Winding], star_kv: float) -> complex | None:
    """Voltage [pu] of the star point from the solved voltage behind the smallest impedance."""
    known = [winding for winding in windings if winding.port.on and winding.port.bus in grid.start]
    if not known:
        return None
    winding = min(known, key=lambda winding: abs(winding.z_ohm) * (star_kv / winding.rated_kv) ** 2)
    size, degrees = grid.start[winding.port.bus]
    return cmath.rect(size * winding.port.kv / winding.rated_kv, math.radians(degrees)) / winding.ratio


def _add_transformer(
    grid: Grid,
    transformer: Thing,
    start: _Winding,
    inner: complex,
    *,
    z_ohm: complex,
    y_siemens: complex,
    to_kv: float,
    cells: dict[str, float | str],
) -> None:
    """Adds one branch from the winding ``start``; ``inner`` is what the ratio of the from side is divided by.

    Impedance and admittance are seen from the to side, of nominal voltage ``to_kv``.
    """
    per_ratio = start.rated_kv / start.port.kv / abs(inner)
    tap = abs(start.ratio) * per_ratio
    cells = {**cells, "from_bus": start.port.bus, "tap": tap, **_series(z_ohm, to_kv, grid.base_mva)}
    angle = cmath.phase(start.ratio) - cmath.phase(inner)
    if angle:
        cells["shift_deg"] = math.degrees(angle)
    changer = start.tap
    if changer is not None and changer.controlled and changer.regulated is not None:
        ends = (changer.lowest * per_ratio, changer.highest * per_ratio)
        cells |= {
            "regulated_bus": changer.regulated.bus,
            "v_target_pu": changer.target_kv / changer.regulated.kv,
            "tap_min": min(*ends, tap),
            "tap_max": max(*ends, tap),
            "tap_steps": float(changer.steps),
        }
    _add_branch(grid, transformer, y_siemens * to_kv**2 / grid.base_mva, cells)
