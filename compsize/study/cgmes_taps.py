"""Tap changers of a CGMES set: complex ratio at a position, range, and what they control.

The position is that of the solved state where the set has one, else that of the hypothesis. The ratio n is that of
V_terminal = n V_inside, so a positive angle is a positive shift of the tables.
"""

from __future__ import annotations

import cmath
import math
from collections.abc import Callable
from dataclasses import dataclass, replace

from compsize.study.cgmes_buses import Grid, Port
from compsize.study.cgmes_model import Thing

__all__ = ["Changer", "changers"]

_KINDS = (
    "RatioTapChanger",
    "PhaseTapChangerLinear",
    "PhaseTapChangerSymmetrical",
    "PhaseTapChangerAsymmetrical",
    "PhaseTapChangerTabular",
)


@dataclass(frozen=True)
class Changer:
    """A tap changer at its position."""

    ratio: complex
    lowest: float
    """Size of the ratio at the lowest step."""
    highest: float
    steps: int
    controlled: bool = False
    regulated: Port | None = None
    target_kv: float = 0.0
    r_factor: float = 1.0
    x_factor: float = 1.0
    x_ohm: float | None = None
    """Reactance of the winding at this position, where the position sets it."""

    def times(self, other: Changer) -> Changer:
        """Two tap changers of one winding; the control of the first one is kept."""
        return replace(
            self,
            ratio=self.ratio * other.ratio,
            lowest=self.lowest * abs(other.ratio),
            highest=self.highest * abs(other.ratio),
            r_factor=self.r_factor * other.r_factor,
            x_factor=self.x_factor * other.x_factor,
            x_ohm=other.x_ohm if self.x_ohm is None else self.x_ohm,
        )


def changers(grid: Grid) -> dict[str, list[Changer]]:
    """Tap changers by the identifier of their winding, those that control a voltage first."""
    positions = {state.text("TapChanger"): grid.model.number(state, "position") for state in grid.model.of("SvTapStep")}
    found: dict[str, list[Changer]] = {}
    for thing in grid.model.of(*_KINDS):
        at = positions.get(thing.id, grid.model.number(thing, "step", grid.model.number(thing, "normalStep")))
        found.setdefault(thing.text("TransformerEnd"), []).append(_changer(grid, thing, at))
    for made in found.values():
        made.sort(key=lambda changer: not changer.controlled)
    return found


def _changer(grid: Grid, thing: Thing, at: float) -> Changer:
    low, high = grid.model.number(thing, "lowStep"), grid.model.number(thing, "highStep")
    points = _table(grid, thing)
    ratio_at = _ratio_of(grid, thing, points)
    made = Changer(ratio_at(at), abs(ratio_at(low)), abs(ratio_at(high)), max(1, round(high - low)))
    if points:
        row = points[_nearest(points, at)]
        return _control(
            grid,
            thing,
            replace(
                made,
                r_factor=1 + grid.model.number(row, "r") / 100,
                x_factor=1 + grid.model.number(row, "x") / 100,
            ),
        )
    if thing.kind.startswith("Phase"):
        return replace(made, x_ohm=_reactance(grid, thing, ratio_at, made.ratio))
    return _control(grid, thing, made)


def _table(grid: Grid, thing: Thing) -> dict[float, Thing]:
    """Rows by step of a tabular tap changer, empty where it has none."""
    if thing.kind == "RatioTapChanger":
        wanted, kind, key = thing.text("RatioTapChangerTable"), "RatioTapChangerTablePoint", "RatioTapChangerTable"
    else:
        wanted, kind, key = thing.text("PhaseTapChangerTable"), "PhaseTapChangerTablePoint", "PhaseTapChangerTable"
    if not wanted:
        return {}
    return {grid.model.number(row, "step"): row for row in grid.model.of(kind) if row.text(key) == wanted}


def _nearest(points: dict[float, Thing], at: float) -> float:
    return min(points, key=lambda step: abs(step - at))


def _ratio_of(grid: Grid, thing: Thing, points: dict[float, Thing]) -> Callable[[float], complex]:
    """The complex ratio as a function of the step."""
    number = grid.model.number
    neutral = number(thing, "neutralStep")
    if points:

        def by_table(step: float) -> complex:
            row = points[_nearest(points, step)]
            return (number(row, "ratio", 1.0) or 1.0) * cmath.exp(1j * math.radians(number(row, "angle")))

        return by_table
    if thing.kind == "RatioTapChanger":
        end = grid.model.link(thing, "TransformerEnd")
        rated = 0.0 if end is None else number(end, "ratedU")
        neutral_kv = number(thing, "neutralU") or rated
        step_size = number(thing, "stepVoltageIncrement") / 100 * (neutral_kv / rated if rated > 0 else 1.0)
        return lambda step: 1.0 + (step - neutral) * step_size + 0j
    if thing.kind == "PhaseTapChangerLinear":
        turn = math.radians(number(thing, "stepPhaseShiftIncrement"))
        return lambda step: cmath.exp(1j * (step - neutral) * turn)
    part = number(thing, "voltageStepIncrement") / 100
    if thing.kind == "PhaseTapChangerSymmetrical":
        return lambda step: cmath.exp(2j * math.atan((step - neutral) * part / 2))
    winding = cmath.exp(1j * math.radians(number(thing, "windingConnectionAngle", 90.0)))
    return lambda step: 1.0 + (step - neutral) * part * winding


def _reactance(grid: Grid, thing: Thing, ratio_at: Callable[[float], complex], ratio: complex) -> float | None:
    """Reactance at the angle of ``ratio`` (IEC 61970-301, PhaseTapChangerNonLinear); None: that of the winding."""
    least, most = grid.model.number(thing, "xMin"), grid.model.number(thing, "xMax")
    if not 0 < least < most:
        return None
    ends = (ratio_at(grid.model.number(thing, "lowStep")), ratio_at(grid.model.number(thing, "highStep")))
    largest = max(abs(cmath.phase(end)) for end in ends)
    angle = abs(cmath.phase(ratio))
    if largest == 0:
        return least
    if thing.kind == "PhaseTapChangerAsymmetrical":
        theta = math.radians(grid.model.number(thing, "windingConnectionAngle", 90.0))
        share = math.tan(angle) / math.tan(largest)
        share *= (math.sin(theta) - math.tan(largest) * math.cos(theta)) / (
            math.sin(theta) - math.tan(angle) * math.cos(theta)
        )
    else:
        share = math.sin(angle / 2) / math.sin(largest / 2)
    return least + (most - least) * share**2


def _control(grid: Grid, thing: Thing, made: Changer) -> Changer:
    """Adds the control of a ratio tap changer that holds a voltage."""
    control = grid.model.link(thing, "TapChangerControl")
    if thing.kind != "RatioTapChanger" or control is None or control.text("mode") != "voltage":
        return made
    if not (grid.model.flag(thing, "controlEnabled", False) and grid.model.flag(control, "enabled", False)):
        return made
    terminal = grid.model.link(control, "Terminal")
    port = None if terminal is None else grid.port(terminal)
    target = grid.model.number(control, "targetValue")
    # Where a unit holds the same bus, the two would work against each other; the unit is the faster one.
    if port is None or target <= 0 or port.bus in grid.held:
        return made
    return replace(made, controlled=True, regulated=port, target_kv=target)
