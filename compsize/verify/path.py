"""Noses of a case from its operating point, proof that a margin is held, and a check of a given nose."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.sparse.linalg import splu

from compsize.verify.devices import GENERATOR, TAP, Device
from compsize.verify.flow import Equations, Singular, State, settle
from compsize.verify.follow import Nose, Path, PathKind, mismatch_mva
from compsize.verify.model import Complex, Model
from compsize.verify.pickup import Floats

__all__ = ["Held", "Nose", "PathKind", "PointCheck", "check_point", "holds", "operating_point", "trace", "upper"]

_SEARCH = (-0.02, -0.05, -0.1, -0.2, -0.35, -0.5, -0.75, -1.0, 0.1, 0.25, 0.5, 0.75, 1.0, 1.5, 2.0, 3.0)
"""Loadings, as parts of the base, at which a start is sought where the base load has none."""


def operating_point(equations: Equations, t_mw: float = 0.0) -> State | None:
    """The settled state at a loading on the upper branch, or None.

    Started from the model's voltages with all devices regulating, then from a flat profile, then with devices
    eased, their slopes brought back to what they are step by step.
    """
    first = equations.start()
    flat = first.copy()
    flat[: equations.n] = 0.0
    flat[equations.n : 2 * equations.n] = 1.0
    flat[equations.n + equations.bus] = first[equations.n + equations.bus]
    for y in (first, flat):
        y[-1] = t_mw / equations.model.scale_mw
        state = settle(equations, y, equations.free_modes())
        if state is not None and upper(equations, state):
            return state
    return _eased(equations, first)


def _eased(equations: Equations, y: Floats) -> State | None:
    """The settled state by way of devices with more slope; None where that way ends."""
    if all(d.kind == GENERATOR for d in equations.model.devices):
        return None
    modes = equations.free_modes()
    state = None
    for extra in (1.0, 0.3, 0.1, 0.03, 0.01, 0.003, 0.0):
        equations.ease(extra)
        state = settle(equations, y, modes)
        if state is None:
            break
        y, modes = state.y, state.modes
    equations.ease(0.0)
    return state if state is not None and upper(equations, state) else None


def upper(equations: Equations, state: State) -> bool:
    """True where the Jacobian's determinant has the sign that it has on a flat profile with the same modes."""
    flat = np.zeros_like(state.y)
    flat[equations.n : 2 * equations.n] = 1.0
    flat[2 * equations.n : equations.size] = equations.neutral
    signs = []
    try:
        for y in (state.y, flat):
            signs.append(equations.factor(equations.jacobian(y, state.modes, state.segment), equations.size).sign())
    except Singular:
        return False
    return signs[0] == signs[1]


def trace(model: Model, stop_mw: float = np.inf, limit_mw: float | None = None) -> Nose:
    """Nose of a case, from the operating point at base load, exact and event by event.

    ``stop_mw`` ends the path there (``reached``); ``limit_mw`` is the loading up to which a turn is sought
    (default: 50 times all load). Where the base load has no solution the path starts at a lower loading, so
    the margin may come out negative; failing that, at a higher one.
    """
    equations = Equations(model)
    limit = 50.0 * model.scale_mw if limit_mw is None else limit_mw
    state = operating_point(equations)
    for part in _SEARCH if state is None else ():
        state = operating_point(equations, part * model.base_mw)
        if state is not None:
            break
    if state is None:
        return Nose("unresolved", float("nan"), model.start, reason="no solution was found at any loading")
    return Path(equations, stop_mw, limit).follow(state)


@dataclass(frozen=True, eq=False)
class Held:
    """Whether a case has a margin.

    ``reached_mw`` is the loading reached, the nose where that is short; ``v`` [buses, pu] and ``worst_mva`` (the
    largest mismatch on the way, recomputed from the admittances) belong to it. ``nose`` is None where load steps
    were enough, and the exact path up to the requirement or the nose where they left a doubt.
    """

    held: bool
    reached_mw: float
    v: Complex
    worst_mva: float
    factorisations: int
    nose: Nose | None = None


_WALK_STEPS, _HALVINGS = 4, 5
_WALK_V, _WALK_ANGLE = 0.04, 0.25


def holds(model: Model, required_mw: float) -> Held:
    """Walk from the operating point up to a loading in steps, every limit respected at every step.

    A step counts if the state moved little (voltages by less than 0.04 pu, angles by less than 0.25 rad against
    their neighbours' mean) and the Jacobian's determinant kept its sign; otherwise it is halved. Any doubt that
    halving does not settle is left to ``trace``, as is a base load without a solution. A path that cannot be
    followed counts as not held.
    """
    equations = Equations(model)
    state = operating_point(equations)
    if state is not None and required_mw >= 0.0:
        end = _walk(equations, state, required_mw)
        if end is not None:
            state, worst = end
            return Held(True, required_mw, equations.voltages(state.y), worst, equations.factorisations)
    nose = trace(model, stop_mw=required_mw)
    held = nose.kind == "reached" or (nose.kind == "none" and nose.t_mw >= required_mw)
    return Held(held, nose.t_mw, nose.v, nose.worst_mva, equations.factorisations + nose.factorisations, nose)


def _walk(equations: Equations, state: State, required_mw: float) -> tuple[State, float] | None:
    """The state at the required loading and the largest mismatch [MVA]; None where a step leaves a doubt."""
    n, scale = equations.n, equations.model.scale_mw
    worst = mismatch_mva(equations, state)
    at, step = 0.0, required_mw / _WALK_STEPS
    while at < required_mw:
        target = min(at + step, required_mw)
        if required_mw - target < 1e-9 * max(required_mw, 1.0):
            target = required_mw
        guess = state.y.copy()
        guess[-1] = target / scale
        found = settle(equations, guess, state.modes)
        if found is not None:
            change = found.y - state.y
            turn = change[:n] - change[:n].mean()
            near = np.abs(change[n : 2 * n]).max() <= _WALK_V and np.abs(turn).max() <= _WALK_ANGLE
            if near and upper(equations, found):
                at, state = target, found
                worst = max(worst, mismatch_mva(equations, state))
                continue
        step *= 0.5
        if step < required_mw / _WALK_STEPS * 0.5**_HALVINGS:
            return None
    return state, worst


@dataclass(frozen=True)
class PointCheck:
    """What a given point is. ``residual_mva`` counts the nearest output that its voltage allows each device.

    ``smallest_singular`` is the least singular value of the Jacobian (0 at a fold); ``on_corner`` names the devices
    that sit on a limit and at their set-point at once, one of which a limit-induced nose must have.
    """

    residual_mva: float
    smallest_singular: float
    on_corner: tuple[str, ...]
    limited: tuple[str, ...]


def check_point(
    model: Model, t_mw: float, v: Complex, ratios: dict[str, float] | None = None, tolerance: float = 1e-6
) -> PointCheck:
    """Judge a point by its voltages [pu] alone: device outputs follow from the power balance.

    ``ratios`` are those of moving tap changers, by name; ``tolerance`` [pu] tells at a limit from near it.
    """
    eq = Equations(model)
    n = eq.n
    size = np.abs(v)
    y = np.zeros(eq.size + 1)
    y[:n] = np.angle(v * np.exp(-1j * np.angle(v[model.slack_bus])))
    y[n : 2 * n] = size
    y[-1] = t_mw / model.scale_mw
    for j, d in enumerate(model.devices):
        y[2 * n + j] = (ratios or {}).get(d.name, d.neutral) if d.kind == TAP else 0.0
    segment = model.schedule.segment(t_mw)
    balance = eq.residual(y, eq.free_modes(), segment)[: 2 * n]
    need = balance[n:].copy()
    spans = [_span(d, float(size[d.bus]), tolerance) for d in model.devices]
    for bus in {d.bus for d in model.devices if d.kind != TAP}:
        mine = [j for j, d in enumerate(model.devices) if d.bus == bus and d.kind != TAP]
        least, most = (sum(model.devices[j].output(float(size[bus]), spans[j][e]) for j in mine) for e in (0, 1))
        if len(mine) == 1 or not np.isfinite(most - least):
            part = None
        else:
            part = (need[bus] - least) / (most - least) if most > least else 0.0
        for j in mine:
            low, high = spans[j]
            wanted = _control(model.devices[j], float(size[bus]), float(need[bus])) if part is None else None
            u = wanted if wanted is not None else low + float(part or 0.0) * (high - low)
            y[2 * n + j] = min(max(u, low), high)
    modes = eq.free_modes()
    corner: list[str] = []
    for j, d in enumerate(model.devices):
        u = y[2 * n + j]
        for limit, mode, at in ((d.high, 1, eq.corner_high[j]), (d.low, -1, eq.corner_low[j])):
            if abs(u - limit) <= tolerance:
                if abs(size[d.bus] - at) <= tolerance:
                    corner.append(d.name)
                else:
                    modes[j] = mode
    state = State(y, modes, segment)
    return PointCheck(
        residual_mva=mismatch_mva(eq, state),
        smallest_singular=_least_singular(eq, state),
        on_corner=tuple(corner),
        limited=tuple(d.name for d, mode in zip(model.devices, modes, strict=True) if mode),
    )


def _control(d: Device, v: float, q: float) -> float:
    """Control that gives an output (the inverse of ``Device.output``)."""
    return q / d.output(v, 1.0)


def _span(d: Device, v: float, tolerance: float) -> tuple[float, float]:
    """Controls that a device may have at a voltage known to ``tolerance``."""

    def at(voltage: float) -> float:
        if d.slope <= 1e-7:
            return d.high if voltage < d.set_pu else d.low
        value = (d.set_pu - voltage) * d.rating / d.slope / (voltage if d.output(2.0, 1.0) > 2.0 else 1.0)
        return min(max(value, d.low), d.high)

    return at(v + tolerance), at(v - tolerance)


def _least_singular(eq: Equations, state: State) -> float:
    """Least singular value of the Jacobian, by inverse iteration with its transpose."""
    square = eq.jacobian(state.y, state.modes, state.segment)[:, : eq.size].tocsc()
    try:
        lu, turned = splu(square), splu(square.T.tocsc())
    except RuntimeError:
        return 0.0
    x: Floats = np.ones(eq.size) / np.sqrt(eq.size)
    value = np.inf
    for _ in range(30):
        w = lu.solve(turned.solve(x))
        norm = float(np.linalg.norm(w))
        if not np.isfinite(norm):
            return 0.0
        previous, value = value, 1.0 / np.sqrt(norm)
        x = w / norm
        if abs(value - previous) <= 1e-6 * value:
            break
    return float(value)
