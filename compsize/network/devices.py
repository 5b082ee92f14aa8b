"""What the devices of one bus supply: a chain of segments with falling voltage.

Every device holds a quantity at its set-point between two limits, and at a limit its control is fixed:

* a generator: reactive power within its range at its set-point; at a limit constant reactive power;
* an SVC: V = v_ref - slope I between its limits, constant susceptance at a limit (Q = B V^2);
* a STATCOM: the same, constant current at a limit (Q = I V).

So each is a falling curve Q(V), and so is their sum. Between breakpoints the sum is a polynomial of second
degree in V; at a set-point without slope it is a vertical piece, a held voltage. One chain per bus serves
all of them, also several devices on one bus.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

Coef = tuple[float, float, float]


@dataclass(frozen=True)
class Device:
    """A falling curve Q(V), in pu: ``above`` for V > v_high, ``below`` for V < v_low, ``middle`` between them.

    v_high = v_low: the device holds that voltage. Coefficients are of 1, V and V^2.
    """

    name: str
    v_high: float
    v_low: float
    above: Coef
    below: Coef
    middle: Coef = (0.0, 0.0, 0.0)


@dataclass(frozen=True)
class Segment:
    """One piece of a bus's chain; ``low`` and ``high`` bound what floats (Q of a held bus, else V)."""

    hold: bool
    coef: Coef
    low: float
    high: float
    limited: tuple[str, ...]
    """Devices at a limit in this piece, as ``name:max`` or ``name:min``."""


def generator(name: str, v_set: float, q_min: float, q_max: float) -> Device:
    return Device(name, v_set, v_set, (q_min, 0.0, 0.0), (q_max, 0.0, 0.0))


def compensator(name: str, kind: str, q_min: float, q_max: float, v_ref: float, slope: float) -> Device:
    """An SVC or STATCOM; ``q_min``, ``q_max`` [pu at 1 pu voltage], ``slope`` [pu] on the capacitive rating.

    Where there is no capacitive side, the slope counts on the inductive rating.
    """
    rating = q_max if q_max > 0.0 else -q_min
    if kind == "svc":
        above, below = (0.0, 0.0, q_min), (0.0, 0.0, q_max)
        v_high = v_ref / (1.0 + slope * q_min / rating) if rating > 0.0 else v_ref
        v_low = v_ref / (1.0 + slope * q_max / rating) if rating > 0.0 else v_ref
    else:
        above, below = (0.0, q_min, 0.0), (0.0, q_max, 0.0)
        v_high = v_ref - slope * q_min / rating if rating > 0.0 else v_ref
        v_low = v_ref - slope * q_max / rating if rating > 0.0 else v_ref
    if slope == 0.0 or rating <= 0.0:
        return Device(name, v_ref, v_ref, above, below)
    gain = rating / slope
    return Device(name, v_high, v_low, above, below, (0.0, gain * v_ref, -gain))


def _add(one: Coef, other: Coef) -> Coef:
    return (one[0] + other[0], one[1] + other[1], one[2] + other[2])


def _value(coef: Coef, v: float) -> float:
    return coef[0] + (coef[1] + coef[2] * v) * v


def chain(devices: list[Device]) -> list[Segment]:
    """Segments of a bus from high to low voltage; empty where nothing on the bus can move or supplies anything."""
    fixed = [d for d in devices if d.above == d.below]
    moving = [d for d in devices if d.above != d.below]
    base: Coef = (0.0, 0.0, 0.0)
    for device in fixed:
        base = _add(base, device.above)
    if not moving:
        return [Segment(False, base, -math.inf, math.inf, ())] if fixed else []
    points = sorted({v for d in moving for v in (d.v_high, d.v_low)}, reverse=True)

    def interval(high: float, low: float) -> tuple[Coef, tuple[str, ...]]:
        total = base
        limited: list[str] = []
        for d in moving:
            if low >= d.v_high:
                total = _add(total, d.above)
                limited.append(f"{d.name}:min")
            elif high <= d.v_low:
                total = _add(total, d.below)
                limited.append(f"{d.name}:max")
            else:
                total = _add(total, d.middle)
        return total, tuple(limited)

    segments: list[Segment] = []
    edges = [math.inf, *points, -math.inf]
    for k in range(len(edges) - 1):
        high, low = edges[k], edges[k + 1]
        coef, limited = interval(high, low)
        segments.append(Segment(False, coef, low, high, limited))
        if k + 1 < len(edges) - 1:
            v = edges[k + 1]
            holders = [d for d in moving if d.v_high == d.v_low == v]
            if holders:
                after, _ = interval(v, edges[k + 2])
                others = tuple(
                    f"{d.name}:min" if v > d.v_high else f"{d.name}:max"
                    for d in moving
                    if d not in holders and (v > d.v_high or v < d.v_low)
                )
                segments.append(Segment(True, (v, 0.0, 0.0), _value(coef, v), _value(after, v), others))
    # Beyond an unlimited range nothing lies.
    first = max((k for k, s in enumerate(segments) if not s.hold and s.coef[0] == -math.inf), default=-1)
    last = min((k for k, s in enumerate(segments) if not s.hold and s.coef[0] == math.inf), default=len(segments))
    return segments[first + 1 : last]
