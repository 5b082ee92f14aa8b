"""Power-flow equations of a model, their Jacobian, and Newton's method with limits switched outside it.

Unknowns y = [angles (rad), voltages (pu), controls u (pu), loading], 2n + m + 1 of them; equations
F(y) = [P mismatch, Q mismatch, device equations], 2n + m. The P equation of the slack bus reads "its
angle is 0". ``modes`` says for every device whether it regulates (0) or sits at its high (1) or low (-1)
limit. The loading unknown is MW divided by ``Model.scale_mw``.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import csc_array
from scipy.sparse.linalg import splu

from compsize.verify.devices import GENERATOR, STATCOM, SVC, TAP
from compsize.verify.model import Complex, Model
from compsize.verify.pickup import Floats

Modes = NDArray[np.int8]

TOLERANCE = 1e-10
"""Largest mismatch [pu] of an accepted solution."""
SLACKNESS = 1e-9
"""How far [pu] a control or a voltage may be on the wrong side before a limit counts as violated."""


class Singular(Exception):
    """The linear system has no unique solution."""


@dataclass(frozen=True, eq=False)
class State:
    """A solution: unknowns, device modes, and the piece of the pick-up schedule it is on."""

    y: Floats
    modes: Modes
    segment: int


class Equations:
    """F and its Jacobian for one model. ``factorisations`` counts the LU factorisations made."""

    def __init__(self, model: Model) -> None:
        self.model = model
        self.n = len(model.buses)
        self.m = len(model.devices)
        self.size = 2 * self.n + self.m
        self.factorisations = 0
        d = model.devices
        self.bus = np.array([x.bus for x in d], dtype=np.int64)
        self.kind = np.array([x.kind for x in d], dtype=np.int64)
        self._is = tuple((self.kind == kind).astype(float) for kind in (GENERATOR, SVC, STATCOM))
        self.low = np.array([x.low for x in d], dtype=float)
        self.high = np.array([x.high for x in d], dtype=float)
        self.set = np.array([x.set_pu for x in d], dtype=float)
        self.gain = np.array([x.gain for x in d], dtype=float)
        self.neutral = np.array([x.neutral for x in d], dtype=float)
        self.ease(0.0)
        self.fixed = self.high - self.low <= 1e-12
        self._moving = np.flatnonzero(model.entries.device >= 0)
        self._ratios = 2 * self.n + np.flatnonzero(self.kind == TAP)
        self._layout()

    def ease(self, extra: float) -> None:
        """Give every device but generators so much more slope [pu per pu of its control]; 0 is the model itself.

        A base state that Newton does not find at once is found by taking the extra slope away little by little.
        """
        devices = [
            x if x.kind == GENERATOR or not extra else replace(x, slope=x.slope + extra * x.rating)
            for x in self.model.devices
        ]
        self.droop = np.array([x.slope / x.rating for x in devices], dtype=float)
        self.corner_high = np.array([x.corner(x.high) if np.isfinite(x.high) else np.nan for x in devices], dtype=float)
        self.corner_low = np.array([x.corner(x.low) if np.isfinite(x.low) else np.nan for x in devices], dtype=float)

    def _layout(self) -> None:
        """Make the sparsity pattern once: every entry that any mode may need."""
        n, m, e = self.n, self.m, self.model.entries
        i = np.arange(n)
        device = np.arange(m)
        move = self._moving
        owner = 2 * n + e.device[move]
        slack = self.model.slack_bus
        rows = [e.row, e.row, n + e.row, n + e.row, i, i, n + i, n + i]
        cols = [e.col, n + e.col, e.col, n + e.col, i, n + i, i, n + i]
        rows += [n + self.bus, 2 * n + device, 2 * n + device, e.row[move], n + e.row[move], i, n + i]
        cols += [2 * n + device, n + self.bus, 2 * n + device, owner, owner]
        cols += [np.full(n, self.size), np.full(n, self.size)]
        rows.append(np.array([slack]))
        cols.append(np.array([slack]))
        row, col = np.concatenate(rows), np.concatenate(cols)
        key = col * self.size + row
        unique, self._slot = np.unique(key, return_inverse=True)
        self._indices = (unique % self.size).astype(np.int32)
        counts = np.bincount(unique // self.size, minlength=self.size + 1)
        self._indptr = np.concatenate([[0], np.cumsum(counts)]).astype(np.int32)
        self._keep = (row != slack).astype(float)
        self._keep[-1] = 1.0

    def voltages(self, y: Floats) -> Complex:
        return np.asarray(y[self.n : 2 * self.n] * np.exp(1j * y[: self.n]))

    def controls(self, y: Floats) -> Floats:
        return y[2 * self.n : self.size]

    def _admittance(self, u: Floats) -> Complex:
        e = self.model.entries
        value = e.value.copy()
        move = self._moving
        value[move] = value[move] / u[e.device[move]] ** e.power[move]
        return value

    def _injection(self, v: Floats, u: Floats) -> tuple[Floats, Floats, Floats]:
        """Q [pu] each device injects, and its derivatives by V and u."""
        vd = v[self.bus]
        generator, svc, statcom = self._is
        q = (generator + svc * vd**2 + statcom * vd) * u
        by_v = (2.0 * svc * vd + statcom) * u
        by_u = generator + svc * vd**2 + statcom * vd
        return q, by_v, by_u

    def _rule(self, v: Floats, u: Floats, modes: Modes) -> tuple[Floats, Floats, Floats]:
        """Device equations and their derivatives by V and u."""
        vd = v[self.bus]
        svc = self._is[1]
        linear = (1.0 - svc) * self.gain * self.droop * (u - self.neutral)
        excess = vd * (1.0 + svc * self.droop * u) + linear - self.set
        by_v = 1.0 + svc * self.droop * u
        by_u = self.droop * (svc * vd + (1.0 - svc) * self.gain)
        free = modes == 0
        limit = np.where(modes > 0, self.high, self.low)
        value = np.where(free, excess, u - np.where(free, 0.0, limit))
        return value, np.where(free, by_v, 0.0), np.where(free, by_u, 1.0)

    def residual(self, y: Floats, modes: Modes, segment: int) -> Floats:
        """F(y), pu."""
        model, n = self.model, self.n
        v, u = y[n : 2 * n], self.controls(y)
        t = y[-1] * model.scale_mw
        vc = self.voltages(y)
        e = model.entries
        flow = vc[e.row] * np.conj(self._admittance(u) * vc[e.col])
        s = np.zeros(n, dtype=complex)
        np.add.at(s, e.row, flow)
        load = model.load_base + t * model.load_growth
        s += load[0] + load[1] * v + load[2] * v**2
        np.subtract.at(s, model.unit_bus, model.schedule.power(t, segment)[0] / model.base_mva)
        np.subtract.at(s, self.bus, 1j * self._injection(v, u)[0])
        p = s.real.copy()
        p[model.slack_bus] = y[model.slack_bus]
        return np.concatenate([p, s.imag, self._rule(v, u, modes)[0]])

    def jacobian(self, y: Floats, modes: Modes, segment: int) -> csc_array:
        """dF/dy, (2n + m) x (2n + m + 1).

        With T_ij = V_i conj(Y_ij V_j) and S_i = sum_j T_ij: dS_i/dangle_j = -j T_ij, dS_i/d|V_j| = T_ij / |V_j|, and
        on the diagonal j S_i and S_i / |V_i| besides.
        """
        model, n = self.model, self.n
        v, u = y[n : 2 * n], self.controls(y)
        t = y[-1] * model.scale_mw
        vc = self.voltages(y)
        e = model.entries
        flow = vc[e.row] * np.conj(self._admittance(u) * vc[e.col])
        s = np.bincount(e.row, flow.real, n) + 1j * np.bincount(e.row, flow.imag, n)
        by_angle, by_v = -1j * flow, flow / v[e.col]
        load = model.load_base + t * model.load_growth
        own_angle, own_v = 1j * s, s / v + load[1] + 2.0 * load[2] * v
        _, q_by_v, q_by_u = self._injection(v, u)
        own_v_q = own_v.imag - np.bincount(self.bus, q_by_v, n)
        _, rule_v, rule_u = self._rule(v, u, modes)
        move = self._moving
        by_ratio = -e.power[move] * flow[move] / u[e.device[move]]
        growth = model.load_growth[0] + model.load_growth[1] * v + model.load_growth[2] * v**2
        slope = model.schedule.power(t, segment)[1]
        p_by_t = (growth.real - np.bincount(model.unit_bus, slope, n) / model.base_mva) * model.scale_mw
        parts = [by_angle.real, by_v.real, by_angle.imag, by_v.imag]
        parts += [own_angle.real, own_v.real, own_angle.imag, own_v_q]
        parts += [-q_by_u, rule_v, rule_u, by_ratio.real, by_ratio.imag, p_by_t, growth.imag * model.scale_mw]
        parts.append(np.ones(1))
        data = np.bincount(self._slot, np.concatenate(parts) * self._keep, len(self._indices))
        return csc_array((data, self._indices, self._indptr), shape=(self.size, self.size + 1))

    def factor(self, jacobian: csc_array, k: int) -> Factor:
        """LU of the Jacobian without the column of unknown ``k``."""
        self.factorisations += 1
        a, b = jacobian.indptr[k], jacobian.indptr[k + 1]
        keep = np.ones(len(jacobian.data), dtype=bool)
        keep[a:b] = False
        indptr = np.concatenate([jacobian.indptr[:k], jacobian.indptr[k + 1 :] - (b - a)])
        square = csc_array((jacobian.data[keep], jacobian.indices[keep], indptr), shape=(self.size, self.size))
        column = np.zeros(self.size)
        column[jacobian.indices[a:b]] = jacobian.data[a:b]
        return Factor(square, column, k)

    def solve(
        self, y: Floats, modes: Modes, segment: int, k: int = -1, *, rounds: int = 20, cap: float = np.inf
    ) -> Floats | None:
        """Newton with unknown ``k`` (default: the loading) kept as it is; None where it does not converge.

        ``cap`` bounds the change of any voltage and angle in one step.
        """
        k = self.size if k < 0 else k
        y = y.copy()
        previous = np.inf
        for _ in range(rounds):
            f = self.residual(y, modes, segment)
            worst = float(np.abs(f).max())
            if not np.isfinite(worst) or worst > 1e8:
                return None
            if worst < TOLERANCE and (worst < 1e-12 or worst > 0.1 * previous):
                return y
            previous = worst
            try:
                step = self.factor(self.jacobian(y, modes, segment), k).step(f)
            except Singular:
                return None
            largest = float(np.abs(step[: 2 * self.n]).max())
            y -= step * min(1.0, cap / largest) if largest > cap else step
            if (y[self.n : 2 * self.n] <= 0.0).any() or (self._moving.size and (y[self._ratios] <= 0.0).any()):
                return None
        return y if float(np.abs(self.residual(y, modes, segment)).max()) < TOLERANCE else None

    def violations(self, y: Floats, modes: Modes) -> list[tuple[int, int, float]]:
        """Devices on the wrong side of a limit: (device, mode to take, by how much [pu])."""
        u = self.controls(y)
        v = y[self.n + self.bus]
        found: list[tuple[int, int, float]] = []
        above = np.where(modes == 0, u - self.high, -np.inf)
        below = np.where(modes == 0, self.low - u, -np.inf)
        back_high = np.where((modes > 0) & ~self.fixed, self.gain * (v - self.corner_high), -np.inf)
        back_low = np.where((modes < 0) & ~self.fixed, self.gain * (self.corner_low - v), -np.inf)
        for excess, mode in ((above, 1), (below, -1), (back_high, 0), (back_low, 0)):
            found += [(int(j), mode, float(excess[j])) for j in np.flatnonzero(excess > SLACKNESS)]
        return found

    def start(self) -> Floats:
        """Unknowns to start Newton from: the model's voltages, controls in the middle of their range."""
        y = np.zeros(self.size + 1)
        turn = np.angle(self.model.start[self.model.slack_bus])
        y[: self.n] = np.angle(self.model.start * np.exp(-1j * turn))
        y[self.n : 2 * self.n] = np.abs(self.model.start)
        y[self.n + self.bus] = np.where(self.kind == TAP, y[self.n + self.bus], self.set)
        y[2 * self.n : self.size] = np.where(self.kind == TAP, self.neutral, 0.0)
        return y

    def free_modes(self) -> Modes:
        """All devices regulating, but those without a range."""
        return np.where(self.fixed, 1, 0).astype(np.int8)


class Factor:
    """LU of a square cut of the Jacobian: without the column of unknown ``k``, which is kept as ``column``."""

    def __init__(self, square: csc_array, column: Floats, k: int) -> None:
        self.k = k
        self.column = column
        try:
            self._lu = splu(square)
        except RuntimeError as error:
            raise Singular from error

    def _widen(self, x: Floats, value: float) -> Floats:
        if not np.isfinite(x).all():
            raise Singular
        return np.insert(x, self.k, value)

    def step(self, f: Floats) -> Floats:
        """Change of all unknowns that accounts for F, unknown ``k`` staying."""
        return self._widen(self._lu.solve(f), 0.0)

    def tangent(self) -> Floats:
        """Direction along F = 0 in which unknown ``k`` grows by 1."""
        return self._widen(self._lu.solve(-self.column), 1.0)

    def sign(self) -> int:
        """Sign of the determinant of the cut Jacobian."""
        sign = _parity(self._lu.perm_r) * _parity(self._lu.perm_c)
        diagonal = self._lu.U.diagonal()
        return -sign if int((diagonal < 0.0).sum()) % 2 else sign

    def orientation(self) -> int:
        """Sign of det [J; tangent] for the tangent above: constant along a smooth path followed one way."""
        return -self.sign() if (len(self.column) + self.k) % 2 else self.sign()


def _parity(permutation: NDArray[np.signedinteger]) -> int:
    """+1 for an even permutation, -1 for an odd one."""
    order = permutation.tolist()
    seen = [False] * len(order)
    sign = 1
    for first in range(len(order)):
        k, length = first, 0
        while not seen[k]:
            seen[k] = True
            k = order[k]
            length += 1
        if length and length % 2 == 0:
            sign = -sign
    return sign


def settle(equations: Equations, y: Floats, modes: Modes, rounds: int = 60) -> State | None:
    """Solve at the loading in ``y``, limits respected: converge, then switch, until no limit is violated.

    The first rounds switch every violated device, later ones the worst alone. A device at its limit goes
    back to regulating as soon as its voltage asks for it. None where no such solution was found, be it that
    the same modes come back a third time.
    """
    segment = equations.model.schedule.segment(float(y[-1]) * equations.model.scale_mw)
    modes = modes.copy()
    seen: dict[bytes, int] = {}
    for number in range(rounds):
        seen[modes.tobytes()] = seen.get(modes.tobytes(), 0) + 1
        if seen[modes.tobytes()] > 3:
            return None
        solved = equations.solve(y, modes, segment, rounds=30, cap=0.5)
        if solved is None:
            return None
        y = solved
        violated = equations.violations(y, modes)
        if not violated:
            return State(y, modes, segment)
        if number >= 4:
            violated = [max(violated, key=lambda item: item[2])]
        for device, mode, _ in violated:
            modes[device] = mode
    return None
