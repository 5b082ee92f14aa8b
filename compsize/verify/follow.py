"""Following the branch of solutions from the operating point to its nose, event by event.

Local parametrisation throughout: one unknown is kept at a value and Newton finds the others, the loading
among them. A limit event is the same with the control (or the voltage) kept at its limit, so events are
located exactly. At an event the device changes its mode, and the path goes on in the direction in which
the new mode is allowed; if the loading falls that way, the nose is limit-induced.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Literal

import numpy as np

from compsize.verify.flow import Equations, Modes, Singular, State
from compsize.verify.model import Complex
from compsize.verify.pickup import Floats

PathKind = Literal["fold", "limit", "none", "reached", "unresolved"]

FIRST_STEP, LARGEST_STEP, SMALLEST_STEP = 0.02, 0.1, 1e-9
MOST_STEPS = 5000


@dataclass(frozen=True, eq=False)
class Nose:
    """Where the path ends. ``t_mw`` is the loading there, which is the margin.

    ``kind``: ``fold``, ``limit`` (at the limit of ``device``), ``none`` (no turn up to ``t_mw``), ``reached``
    (the loading asked for) or ``unresolved`` (``reason`` says why; ``t_mw`` is NaN). ``v`` [buses, pu] and
    ``limited`` (devices at a limit) are the state at ``t_mw``; ``start_mw`` is where the path started.
    ``worst_mva`` is the largest mismatch over all points of the path, recomputed from the admittances.
    """

    kind: PathKind
    t_mw: float
    v: Complex
    limited: tuple[str, ...] = ()
    device: str = ""
    start_mw: float = 0.0
    events: int = 0
    steps: int = 0
    factorisations: int = 0
    worst_mva: float = 0.0
    reason: str = ""


@dataclass(frozen=True, eq=False)
class _Point:
    """A point of the path with its oriented tangent, the longest part of which is 1."""

    state: State
    tangent: Floats


@dataclass(frozen=True)
class _Event:
    """Unknown ``k`` reaches ``value``: device ``device`` takes mode ``mode``; -1 a pick-up piece, -2 the stop."""

    k: int
    value: float
    device: int
    mode: int = 0


class PathError(Exception):
    """The path could not be followed on."""


@dataclass
class Path:
    """A path along one model's solutions; ``follow`` runs it to its end."""

    equations: Equations
    stop_mw: float = np.inf
    limit_mw: float = np.inf
    events: int = 0
    steps: int = 0
    worst_mva: float = 0.0
    _orientation: int = field(default=0, init=False)

    def follow(self, start: State) -> Nose:
        """From a settled state upwards until the loading turns, or reaches ``stop_mw`` or ``limit_mw``."""
        try:
            return self._follow(start)
        except (PathError, Singular) as error:
            return self._end("unresolved", start, start, reason=str(error) or "singular equations")

    def _follow(self, start: State) -> Nose:
        if self._loading(start.y) >= min(self.stop_mw, self.limit_mw):
            return self._end("reached" if self.stop_mw <= self.limit_mw else "none", start, start)
        a = _Point(start, self._tangent(start, upwards=True))
        self._note(start)
        h = FIRST_STEP
        while self.steps < MOST_STEPS:
            b, h = self._advance(a, h)
            event, b = self._first_event(a, b)
            if b.tangent[-1] < 0.0:
                fold = self._fold(a, b)
                event, end = self._first_event(a, fold)
                if event is None:
                    self._note(fold.state)
                    return self._end("fold", start, fold.state)
                b = end
            self._note(b.state)
            if event is None:
                a = b
                continue
            if event.device == -2:
                kind: PathKind = "reached" if self.stop_mw <= self.limit_mw else "none"
                return self._end(kind, start, b.state)
            a = self._switch(b, event)
            self.events += 1
            if a.tangent[-1] < 0.0:
                return self._end("limit", start, b.state, device=self.equations.model.devices[event.device].name)
        raise PathError("too many steps")

    def _advance(self, a: _Point, h: float) -> tuple[_Point, float]:
        """One step with the modes of ``a``: the new point, and the step to take next."""
        eq = self.equations
        while h >= SMALLEST_STEP:
            self.steps += 1
            k = int(np.argmax(np.abs(self._weigh(a.tangent))))
            guess = a.state.y + h * a.tangent
            before = eq.factorisations
            y = eq.solve(guess, a.state.modes, a.state.segment, k, rounds=7)
            if y is not None and float(np.abs(self._weigh(y - guess)).max()) <= 0.25 * h:
                state = State(y, a.state.modes, a.state.segment)
                tangent = self._tangent(state, hint=k)
                turn = float(self._weigh(a.tangent) @ self._weigh(tangent))
                size = np.linalg.norm(self._weigh(a.tangent)) * np.linalg.norm(self._weigh(tangent))
                if turn >= 0.7 * size:
                    quick = eq.factorisations - before <= 4 and turn > 0.9 * size
                    return _Point(state, tangent), min(1.6 * h if quick else h, LARGEST_STEP)
            h *= 0.5
        raise PathError("the step became too small")

    def _tangent(self, state: State, hint: int = -1, upwards: bool = False) -> Floats:
        """Tangent by the orientation that the path keeps, or the one in which the loading grows."""
        factor, tangent = self._raw_tangent(state, hint)
        if upwards:
            sign = 1.0 if tangent[-1] > 0.0 else -1.0
            self._orientation = int(sign) * factor
        elif factor != self._orientation:
            sign = -1.0
        else:
            sign = 1.0
        return sign * tangent

    def _raw_tangent(self, state: State, hint: int) -> tuple[int, Floats]:
        """A tangent of weighted length 1, one way or the other, and its orientation."""
        eq = self.equations
        k = eq.size if hint < 0 else hint
        for attempt in range(3):
            try:
                factor = eq.factor(eq.jacobian(state.y, state.modes, state.segment), k)
                tangent = factor.tangent()
            except Singular:
                k = eq.n if attempt else eq.size
                continue
            weighted = np.abs(self._weigh(tangent))
            best = int(np.argmax(weighted))
            if weighted[best] <= 20.0 * weighted[k] or attempt == 2:
                return factor.orientation(), tangent / weighted[best]
            k = best
        raise PathError("no tangent")

    def _weigh(self, y: Floats) -> Floats:
        """Changes in comparable size: angles count a third, controls not at all."""
        eq = self.equations
        w = y.copy()
        w[: eq.n] *= 1.0 / 3.0
        w[2 * eq.n : eq.size] = 0.0
        return w

    def _watched(self, device: int, mode: int, modes: Modes) -> _Event:
        """The event by which a device leaves its present mode for ``mode``."""
        eq = self.equations
        if modes[device] == 0:
            value = eq.high[device] if mode > 0 else eq.low[device]
            return _Event(2 * eq.n + device, float(value), device, mode)
        corner = eq.corner_high[device] if modes[device] > 0 else eq.corner_low[device]
        return _Event(eq.n + int(eq.bus[device]), float(corner), device, mode)

    def _first_event(self, a: _Point, b: _Point) -> tuple[_Event | None, _Point]:
        """The first event between two points of one smooth piece, and the point at it (else ``b``)."""
        eq = self.equations
        found: _Event | None = None
        tried: set[tuple[int, int]] = set()
        for _ in range(50):
            events = [self._watched(j, mode, a.state.modes) for j, mode, _ in eq.violations(b.state.y, a.state.modes)]
            t = b.state.y[-1]
            schedule = eq.model.schedule.start_mw
            following = a.state.segment + 1
            if following < len(schedule) and t > schedule[following] / eq.model.scale_mw + 1e-12:
                events.append(_Event(eq.size, float(schedule[following]) / eq.model.scale_mw, -1))
            end = min(self.stop_mw, self.limit_mw) / eq.model.scale_mw
            if t > end + 1e-12:
                events.append(_Event(eq.size, end, -2))
            events = [e for e in events if (e.k, e.mode) not in tried]
            if not events:
                return found, b
            share = {e: _share(a.state.y[e.k], b.state.y[e.k], e.value) for e in events}
            event = min(events, key=lambda e: share[e])
            tried.add((event.k, event.mode))
            guess = a.state.y + share[event] * (b.state.y - a.state.y)
            guess[event.k] = event.value
            y = eq.solve(guess, a.state.modes, a.state.segment, event.k)
            reach = float(np.abs(self._weigh(b.state.y - a.state.y)).max())
            if y is None or float(np.abs(self._weigh(y - guess)).max()) > 0.5 * reach + 1e-9:
                y = self._bisect(a, b, event)
            state = State(y, a.state.modes, a.state.segment)
            found, b = event, _Point(state, self._tangent(state))
        raise PathError("limit events could not be put in order")

    def _bisect(self, a: _Point, b: _Point, event: _Event) -> Floats:
        """Locate an event inside one step by halving, where Newton on the whole step fails."""
        eq = self.equations
        k = int(np.argmax(np.abs(self._weigh(b.state.y - a.state.y))))
        low, high = a.state.y, b.state.y
        for _ in range(60):
            if abs(high[event.k] - low[event.k]) == 0.0 or float(np.abs(high - low).max()) < 1e-13:
                break
            y = eq.solve(0.5 * (low + high), a.state.modes, a.state.segment, k)
            if y is None:
                raise PathError("a limit event could not be located")
            if abs(y[event.k] - event.value) < 1e-6:
                exact = eq.solve(y, a.state.modes, a.state.segment, event.k)
                if exact is not None:
                    return exact
            if (y[event.k] - event.value) * (high[event.k] - event.value) > 0.0:
                high = y
            else:
                low = y
        return high

    def _switch(self, at: _Point, event: _Event) -> _Point:
        """Change the mode at an event; the new tangent points where the new mode is allowed."""
        eq = self.equations
        if event.device < 0:
            state = State(at.state.y, at.state.modes, at.state.segment + 1)
            return _Point(state, self._tangent(state))
        modes = at.state.modes.copy()
        old, modes[event.device] = int(modes[event.device]), event.mode
        state = State(at.state.y, modes, at.state.segment)
        factor, tangent = self._raw_tangent(state, -1)
        if event.mode == 0:
            allowed = -old * tangent[2 * eq.n + event.device]
        else:
            allowed = -event.mode * eq.gain[event.device] * tangent[eq.n + eq.bus[event.device]]
        if allowed == 0.0:
            raise PathError("the path touches a limit without crossing it")
        sign = 1 if allowed > 0.0 else -1
        self._orientation = sign * factor
        return _Point(state, sign * tangent)

    def _fold(self, a: _Point, b: _Point) -> _Point:
        """The point between ``a`` (loading grows) and ``b`` (it falls) where the loading stands still.

        Root of d loading / d s along the unknown that changes most; the loading at it is right to second order.
        """
        eq = self.equations
        change = self._weigh(b.state.y - a.state.y)
        change[-1] = 0.0
        k = int(np.argmax(np.abs(change)))
        low, high = a, b
        g_low, g_high = (p.tangent[-1] / abs(p.tangent[k]) for p in (low, high))
        point = b
        for number in range(80):
            span = abs(high.state.y[k] - low.state.y[k])
            if span < 1e-11:
                break
            x = g_low / (g_low - g_high)
            x = 0.5 if number % 4 == 3 else min(max(x, 0.02), 0.98) if span > 1e-5 else x
            guess = low.state.y + x * (high.state.y - low.state.y)
            y = eq.solve(guess, a.state.modes, a.state.segment, k)
            if y is None:
                raise PathError("the fold could not be located")
            state = State(y, a.state.modes, a.state.segment)
            point = _Point(state, self._tangent(state, hint=k))
            g = point.tangent[-1] / abs(point.tangent[k])
            if abs(g) * span < 1e-14 and abs(g) < 1e-6:
                break
            if g > 0.0:
                low, g_low = point, g
            else:
                high, g_high = point, g
        return point

    def _loading(self, y: Floats) -> float:
        return float(y[-1]) * self.equations.model.scale_mw

    def _note(self, state: State) -> None:
        self.worst_mva = max(self.worst_mva, mismatch_mva(self.equations, state))

    def _end(self, kind: PathKind, start: State, end: State, device: str = "", reason: str = "") -> Nose:
        eq = self.equations
        return Nose(
            kind=kind,
            t_mw=self._loading(end.y) if kind != "unresolved" else float("nan"),
            v=eq.voltages(end.y),
            limited=tuple(d.name for d, mode in zip(eq.model.devices, end.modes, strict=True) if mode),
            device=device,
            start_mw=self._loading(start.y),
            events=self.events,
            steps=self.steps,
            factorisations=eq.factorisations,
            worst_mva=self.worst_mva,
            reason=reason,
        )


def _share(a: float, b: float, value: float) -> float:
    """How far along from ``a`` to ``b`` a value lies, within 0 and 1."""
    return float(min(max((value - a) / (b - a), 0.0), 1.0)) if b != a else 0.0


def mismatch_mva(equations: Equations, state: State) -> float:
    """Largest bus mismatch [MVA] of a state, from the currents of every admittance, apart from F."""
    model = equations.model
    v, u = equations.voltages(state.y), equations.controls(state.y)
    t = float(state.y[-1]) * model.scale_mw
    e = model.entries
    ratio = np.where(e.device >= 0, u[np.maximum(e.device, 0)] if len(u) else 1.0, 1.0)
    current = np.zeros(len(v), dtype=complex)
    np.add.at(current, e.row, e.value / ratio**e.power * v[e.col])
    size = np.abs(v)
    s = v * current.conj() + sum((model.load_base[k] + t * model.load_growth[k]) * size**k for k in range(3))
    np.subtract.at(s, model.unit_bus, model.schedule.power(t, state.segment)[0] / model.base_mva)
    for d, control in zip(model.devices, u, strict=True):
        s[d.bus] -= 1j * d.output(float(size[d.bus]), float(control))
    s[model.slack_bus] = 1j * s[model.slack_bus].imag
    return float(np.abs(s).max()) * model.base_mva
