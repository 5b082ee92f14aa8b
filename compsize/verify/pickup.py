"""Who generates what the load adds: piecewise linear schedules of active power."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Schedule:
    """Active power of every unit against the added load.

    ``start_mw`` [breakpoints, MW] is sorted; row k of ``p_mw`` [breakpoints, units] is the power at it,
    row k of ``slope`` [MW per MW] holds from there on. ``slope_before`` holds below the first one.
    """

    start_mw: Floats
    p_mw: Floats
    slope: Floats
    slope_before: Floats

    def segment(self, t_mw: float) -> int:
        """Number of the piece that ``t_mw`` lies on (-1 below the first breakpoint; its right side at one)."""
        return int(np.searchsorted(self.start_mw, t_mw, side="right")) - 1

    def power(self, t_mw: float, segment: int) -> tuple[Floats, Floats]:
        """Power [MW] and slope [MW per MW] of the units on a piece, extended as a straight line."""
        slope = self.slope_before if segment < 0 else self.slope[segment]
        k = max(segment, 0)
        return self.p_mw[k] + (t_mw - self.start_mw[k]) * slope, slope


def fill(p_mw: Floats, weight: Floats, p_max_mw: Floats) -> Schedule:
    """Let units share added load by ``weight`` until they reach ``p_max_mw`` (inf: never).

    ``weight`` [MW per MW] may be negative. A unit at its maximum stops, and the units that are left share
    what all of them took together in proportion to their weights; what no unit takes is the slack's,
    which is not in the list. Below the start all units give way by their weights.
    """
    total = float(weight.sum())
    p = p_mw.astype(float).copy()
    active = ~((p >= p_max_mw) & (weight > 0.0))
    at = 0.0
    starts, powers, slopes = [], [], []
    while True:
        left = float(weight[active].sum())
        slope = np.where(active, weight * (total / left), 0.0) if left > 0.0 < total else np.where(active, weight, 0.0)
        starts.append(at)
        powers.append(p.copy())
        slopes.append(slope)
        room = np.full(p.shape, np.inf)
        rising = slope > 0.0
        room[rising] = (p_max_mw[rising] - p[rising]) / slope[rising]
        step = float(room.min(initial=np.inf))
        if not np.isfinite(step):
            break
        at += step
        p = p + step * slope
        full = rising & (room <= step * (1.0 + 1e-12) + 1e-12)
        p[full] = p_max_mw[full]
        active &= ~full
    return Schedule(np.array(starts), np.array(powers), np.array(slopes), weight.astype(float))
