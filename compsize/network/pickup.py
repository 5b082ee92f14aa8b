"""Who generates the MW that are added: pieces linear in the loading.

With total added load D: ``proportional``: each unit but the slack adds D p / (base MW of all loads in
service); ``headroom``, ``table``: shares of D; ``slack``: none. The slack takes the remainder and the
losses. With limits a unit stops at its maximum and its part goes to the units that still can, in
proportion to their shares.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]


def shares(rule: str, p: Floats, p_max: Floats, table: Floats, slack: int, total_load: float) -> Floats:
    """Share of D of each unit (the slack's is 0: it takes the remainder). ``p`` etc. in one unit, shape (units,)."""
    if rule == "proportional":
        out = p / total_load if total_load > 0.0 else np.zeros_like(p)
    elif rule == "headroom":
        room = np.where(np.isfinite(p_max), np.maximum(p_max - p, 0.0), 0.0)
        out = room / room.sum() if room.sum() > 0.0 else np.zeros_like(p)
    elif rule == "table":
        weight = np.nan_to_num(table, nan=0.0)
        out = weight / weight.sum() if weight.sum() > 0.0 else np.zeros_like(p)
    else:
        out = np.zeros_like(p)
    out = out.copy()
    if slack >= 0:
        out[slack] = 0.0
    return out


def pieces(
    p: Floats, p_max: Floats, share: Floats, start: float, rate: float, limits: bool, lowest: float
) -> tuple[Floats, Floats, Floats]:
    """Supply of each unit as pieces of the loading: breaks (k + 1,), base (k, units), growth (k, units).

    Added MW at loading l are ``start`` + ``rate`` l (``start``: generation that an outage lost). Below D = 0
    nothing is limited. ``lowest`` is the first break.
    """
    if not limits or rate <= 0.0:
        return (
            np.array([lowest, np.inf]),
            (p + share * start)[None, :],
            (share * rate)[None, :],
        )
    cap = np.where(np.isfinite(p_max), np.maximum(p_max, p), np.inf)
    cap = np.where(share > 0.0, cap, np.inf)
    total = share[share > 0.0].sum()
    negative = np.where(share < 0.0, share, 0.0)
    at = p.copy()
    d = 0.0
    free = share > 0.0
    breaks, base, growth = [lowest], [], []
    while True:
        weight = np.where(free, share, 0.0)
        slope = negative + (weight * (total / weight.sum()) if weight.sum() > 0.0 else weight)
        room = np.where(slope > 0.0, (cap - at) / np.where(slope > 0.0, slope, 1.0), np.inf)
        step = float(room.min()) if room.size else math.inf
        # p(D) = at + slope (D - d), D = start + rate l
        base.append(at + slope * (start - d))
        growth.append(slope * rate)
        if not math.isfinite(step):
            break
        d += step
        at = at + slope * step
        free = free & ~(cap - at <= 1e-12 * np.maximum(1.0, np.abs(cap)))
        breaks.append((d - start) / rate)
    breaks.append(math.inf)
    return np.array(breaks), np.array(base), np.array(growth)
