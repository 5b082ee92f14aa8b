"""The power-flow equations and their derivatives on the fixed pattern.

Unknowns of a bus are its angle [rad] and magnitude [pu]; its rows are the active and the reactive
balance: drawn by the network and the loads, less what units and devices supply (all in pu). A row's
content depends on the state, never its place:

* a slack bus keeps its angle: first row angle = constant;
* a bus whose device holds the voltage: second row magnitude = set-point, the reactive power floats;
* otherwise the devices supply q = a0 + a1 V + a2 V^2 (a unit at its limit, an SVC's constant
  susceptance, a STATCOM's constant current, a sloped characteristic between them);
* a bus that an outage cut off keeps both unknowns.

A tap changer is a node of its own: a dummy unknown and the ratio; second row: voltage of the regulated
bus = target, or ratio = limit.

A bus's devices form a chain of segments with falling voltage (see :mod:`compsize.network.devices`);
``seg`` holds the index of the segment in force, -1 where there is none.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from compsize.flow.jit import kernel
from compsize.flow.lu import eliminate_row

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

SLACK, DEAD, TAP, BESIDE_TAP = 1, 2, 4, 8


class Case(NamedTuple):
    """Values of one case (a network with an outage and added shunts), nodes in elimination order."""

    g: Floats
    """Conductances on A's pattern; zero at a tap changer's places."""
    b: Floats
    role: Ints
    """Bit set per node: SLACK, DEAD, TAP, BESIDE_TAP (an end of a tap-changing branch)."""
    load: Floats
    """12 per node: P then Q, each (base, growth) of the constant-power, current and impedance part."""
    gen: Floats
    """[piece, node, 2]: active supply at base and its growth, one piece per interval of ``gbreak``."""
    gbreak: Floats
    """Loadings where the pick-up changes; piece k holds from gbreak[k] to gbreak[k + 1]."""
    segptr: Ints
    hold: Ints
    """1 where the segment holds a set-point, 0 where it follows its polynomial."""
    coef: Floats
    """[segment, 3]: set-point, or a0, a1, a2."""
    low: Floats
    """Lower bound of what floats in the segment: reactive power of a held bus, else the voltage."""
    high: Floats
    taps: Ints
    """[tap, 11]: node, from, to, regulated bus, places of ff, ft, tf, tt, (from, tap), (to, tap), (tap, regulated)."""
    tapval: Floats
    """[tap, 14]: series g, series b, half charging, cos and sin of the shift, side (+1: a higher ratio raises the
    regulated voltage), then g and b of the four places without the branch."""
    tapof: Ints
    """Tap changer of a node, -1: a bus."""
    dev: Ints
    """Nodes whose segment can change."""
    stiff: Floats
    """Size of each bus's reactive diagonal entry, -b [pu]: the scale of what keeps the matrix regular."""


class State(NamedTuple):
    """A point: angles, magnitudes (ratios), segments, net reactive demand left to devices, and sums per bus."""

    th: Floats
    v: Floats
    seg: Ints
    qdev: Floats
    e: Floats
    f: Floats
    p: Floats
    q: Floats
    tapcol: Floats
    """[tap, 4]: derivative of P and Q at the from bus, P and Q at the to bus, by the ratio."""


def new_state(count: int, taps: int) -> State:
    th, v, qdev, e, f, p, q = (np.zeros(count) for _ in range(7))
    return State(th, v, np.full(count, -1, dtype=np.int64), qdev, e, f, p, q, np.zeros((taps, 4)))


@kernel
def apply_taps(case, state):  # type: ignore[no-untyped-def]
    """Write the admittances of the tap-changing branches at their present ratios, and the ratio columns."""
    for k in range(case.taps.shape[0]):
        val = case.tapval[k]
        for m in range(4):
            place = case.taps[k, 4 + m]
            case.g[place] = val[6 + 2 * m]
            case.b[place] = val[7 + 2 * m]
    for k in range(case.taps.shape[0]):
        row = case.taps[k]
        val = case.tapval[k]
        t = state.v[row[0]]
        yg, yb, bc, cs, sn = val[0], val[1], val[2], val[3], val[4]
        inv = 1.0 / t
        # y / (t e^-js) and y / (t e^js)
        ftg, ftb = (yg * cs - yb * sn) * inv, (yb * cs + yg * sn) * inv
        tfg, tfb = (yg * cs + yb * sn) * inv, (yb * cs - yg * sn) * inv
        case.g[row[4]] += yg * inv * inv
        case.b[row[4]] += (yb + bc) * inv * inv
        case.g[row[5]] -= ftg
        case.b[row[5]] -= ftb
        case.g[row[6]] -= tfg
        case.b[row[6]] -= tfb
        case.g[row[7]] += yg
        case.b[row[7]] += yb + bc
        f, o = row[1], row[2]
        ef, ff = state.v[f] * np.cos(state.th[f]), state.v[f] * np.sin(state.th[f])
        eo, fo = state.v[o] * np.cos(state.th[o]), state.v[o] * np.sin(state.th[o])
        a, c = ef * eo + ff * fo, ff * eo - ef * fo
        vf2 = state.v[f] ** 2
        pft, qft = -(ftg * a + ftb * c), -(ftg * c - ftb * a)
        ptf, qtf = -(tfg * a - tfb * c), -(-tfg * c - tfb * a)
        state.tapcol[k, 0] = (-2.0 * yg * inv * inv * vf2 - pft) * inv
        state.tapcol[k, 1] = (2.0 * (yb + bc) * inv * inv * vf2 - qft) * inv
        state.tapcol[k, 2] = -ptf * inv
        state.tapcol[k, 3] = -qtf * inv


@kernel
def residual(pattern, case, state, lam, piece, out):  # type: ignore[no-untyped-def]
    """Fill ``out`` (2 per node) with the rows at loading ``lam``; returns the largest magnitude."""
    th, v = state.th, state.v
    e, f = state.e, state.f
    n = th.size
    for i in range(n):
        e[i] = v[i] * np.cos(th[i])
        f[i] = v[i] * np.sin(th[i])
    if case.taps.shape[0] > 0:
        apply_taps(case, state)
    worst = 0.0
    for i in range(n):
        role = case.role[i]
        if role & TAP:
            out[2 * i] = 0.0
            continue
        re = 0.0
        im = 0.0
        for p in range(pattern.aptr[i], pattern.aptr[i + 1]):
            j = pattern.aidx[p]
            re += case.g[p] * e[j] - case.b[p] * f[j]
            im += case.g[p] * f[j] + case.b[p] * e[j]
        vi = v[i]
        state.p[i] = e[i] * re + f[i] * im
        state.q[i] = f[i] * re - e[i] * im
        if role & DEAD:
            out[2 * i] = 0.0
            out[2 * i + 1] = 0.0
            continue
        ld = case.load[i]
        pl = ld[0] + lam * ld[1] + (ld[2] + lam * ld[3] + (ld[4] + lam * ld[5]) * vi) * vi
        ql = ld[6] + lam * ld[7] + (ld[8] + lam * ld[9] + (ld[10] + lam * ld[11]) * vi) * vi
        need = state.q[i] + ql
        state.qdev[i] = need
        out[2 * i] = 0.0 if role & SLACK else state.p[i] + pl - case.gen[piece, i, 0] - lam * case.gen[piece, i, 1]
        s = state.seg[i]
        if s >= 0:
            s += case.segptr[i]
            c = case.coef[s]
            out[2 * i + 1] = vi - c[0] if case.hold[s] else need - c[0] - (c[1] + c[2] * vi) * vi
        else:
            out[2 * i + 1] = need
        worst = max(worst, max(abs(out[2 * i]), abs(out[2 * i + 1])))
    for k in range(case.taps.shape[0]):
        i = case.taps[k, 0]
        s = case.segptr[i] + state.seg[i]
        # Oriented like a held voltage, so that the determinant keeps its sign when the ratio reaches its limit.
        if case.hold[s]:
            out[2 * i + 1] = case.tapval[k, 5] * (v[case.taps[k, 3]] - case.coef[s, 0])
        else:
            out[2 * i + 1] = v[i] - case.coef[s, 0]
        worst = max(worst, abs(out[2 * i + 1]))
    return worst if np.isfinite(worst) else np.inf


@kernel
def factorise(pattern, case, state, lam, factors, pin, alpha):  # type: ignore[no-untyped-def]
    """Assemble the Jacobian at the state of the last :func:`residual` and factorise it.

    ``alpha`` is added to the entry (reactive row, magnitude) of node ``pin``, which keeps the matrix regular
    at a fold. Returns the sign of the determinant (0: singular).
    """
    e, f, v = state.e, state.f, state.v
    row = factors.row
    n = v.size
    sign = 1.0
    for i in range(n):
        for p in range(pattern.lptr[i], pattern.lptr[i + 1]):
            k = pattern.lidx[p]
            row[k, 0] = row[k, 1] = row[k, 2] = row[k, 3] = 0.0
        for p in range(pattern.uptr[i], pattern.uptr[i + 1]):
            k = pattern.uidx[p]
            row[k, 0] = row[k, 1] = row[k, 2] = row[k, 3] = 0.0
        row[i, 0] = row[i, 1] = row[i, 2] = row[i, 3] = 0.0
        role = case.role[i]
        if role & DEAD:
            row[i, 0] = row[i, 3] = 1.0
            sign *= eliminate_row(i, pattern, factors)
            continue
        s = state.seg[i]
        if s >= 0:
            s += case.segptr[i]
        if role & TAP:
            row[i, 0] = 1.0
            if case.hold[s]:
                for k in range(case.taps.shape[0]):
                    if case.taps[k, 0] == i:
                        row[case.taps[k, 3], 3] = case.tapval[k, 5]
            else:
                row[i, 3] = 1.0
            sign *= eliminate_row(i, pattern, factors)
            continue
        held = s >= 0 and case.hold[s] == 1
        slack = (role & SLACK) != 0
        if not (held and slack):
            ei, fi = e[i], f[i]
            for p in range(pattern.aptr[i], pattern.aptr[i + 1]):
                j = pattern.aidx[p]
                g, b = case.g[p], case.b[p]
                a = ei * e[j] + fi * f[j]
                c = fi * e[j] - ei * f[j]
                pij = a * g + b * c
                qij = g * c - b * a
                row[j, 0] += qij
                row[j, 1] += pij / v[j]
                row[j, 2] -= pij
                row[j, 3] += qij / v[j]
            vi = v[i]
            # The loop treated the diagonal as a branch to itself: it left q_ii = -b V^2 and p_ii = g V^2.
            ld = case.load[i]
            row[i, 0] -= state.q[i]
            row[i, 1] += state.p[i] / vi + ld[2] + lam * ld[3] + 2.0 * (ld[4] + lam * ld[5]) * vi
            row[i, 2] += state.p[i]
            row[i, 3] += state.q[i] / vi + ld[8] + lam * ld[9] + 2.0 * (ld[10] + lam * ld[11]) * vi
            if s >= 0:
                row[i, 3] -= case.coef[s, 1] + 2.0 * case.coef[s, 2] * vi
            for k in range(case.taps.shape[0] if role & BESIDE_TAP else 0):
                if case.taps[k, 1] == i:
                    row[case.taps[k, 0], 1] += state.tapcol[k, 0]
                    row[case.taps[k, 0], 3] += state.tapcol[k, 1]
                elif case.taps[k, 2] == i:
                    row[case.taps[k, 0], 1] += state.tapcol[k, 2]
                    row[case.taps[k, 0], 3] += state.tapcol[k, 3]
        if held or slack:
            for p in range(pattern.aptr[i], pattern.aptr[i + 1]):
                j = pattern.aidx[p]
                if slack:
                    row[j, 0] = row[j, 1] = 0.0
                if held:
                    row[j, 2] = row[j, 3] = 0.0
            if slack:
                row[i, 0] = 1.0
            if held:
                row[i, 3] = 1.0
        if i == pin:
            row[i, 3] += alpha
        sign *= eliminate_row(i, pattern, factors)
        if sign == 0.0:
            return 0.0
    return sign


@kernel
def loading_column(case, state, piece, out):  # type: ignore[no-untyped-def]
    """Derivative of the rows by the loading, into ``out``."""
    v = state.v
    for i in range(v.size):
        out[2 * i] = 0.0
        out[2 * i + 1] = 0.0
        role = case.role[i]
        if role & (DEAD | TAP):
            continue
        ld = case.load[i]
        vi = v[i]
        if not role & SLACK:
            out[2 * i] = ld[1] + (ld[3] + ld[5] * vi) * vi - case.gen[piece, i, 1]
        s = state.seg[i]
        if s < 0 or case.hold[case.segptr[i] + s] == 0:
            out[2 * i + 1] = ld[7] + (ld[9] + ld[11] * vi) * vi


@kernel
def reactive_slope(pattern, case, state, lam, i, y, dlam):  # type: ignore[no-untyped-def]
    """Derivative of the reactive demand left to the devices of bus ``i`` along the direction (``y``, ``dlam``)."""
    ei, fi, vi = state.e[i], state.f[i], state.v[i]
    total = 0.0
    for p in range(pattern.aptr[i], pattern.aptr[i + 1]):
        j = pattern.aidx[p]
        g, b = case.g[p], case.b[p]
        a = ei * state.e[j] + fi * state.f[j]
        c = fi * state.e[j] - ei * state.f[j]
        total += (g * c - b * a) / state.v[j] * y[2 * j + 1] - (a * g + b * c) * y[2 * j]
    ld = case.load[i]
    total += state.p[i] * y[2 * i]
    total += (state.q[i] / vi + ld[8] + lam * ld[9] + 2.0 * (ld[10] + lam * ld[11]) * vi) * y[2 * i + 1]
    total += dlam * (ld[7] + (ld[9] + ld[11] * vi) * vi)
    for k in range(case.taps.shape[0] if case.role[i] & BESIDE_TAP else 0):
        if case.taps[k, 1] == i:
            total += state.tapcol[k, 1] * y[2 * case.taps[k, 0] + 1]
        elif case.taps[k, 2] == i:
            total += state.tapcol[k, 3] * y[2 * case.taps[k, 0] + 1]
    return total
