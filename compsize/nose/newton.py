"""One bordered Newton iteration for every kind of point on the curve.

The unknowns are the state and the loading; the extra equation says which point is wanted: a loading, a
magnitude, a device at its limit, or the fold. ``alpha``, added to the entry (reactive row, magnitude) of
the pinned bus k, keeps the matrix regular at a fold and is taken back exactly: with J_a = J + alpha e_k e_k',

    dx = y_F + alpha dx_k y_E - dl y_L,    y_F = J_a^-1(-F), y_E = J_a^-1 e_k, y_L = J_a^-1 F_l,

so that only dx_k and dl remain, found from row k of this and the extra equation. At the fold the extra
equation is g = 0 of the minimally augmented system [J e_k; e_k' 0][v; g] = [0; 1], for which
g = alpha - 1 / (y_E)_k, v = y_E / (y_E)_k, and dg = -w' F_xx v dx (Griewank and Reddien 1984; Govaerts 2000).
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from compsize.flow.equations import (
    factorise,
    loading_column,
    reactive_slope,
    residual,
)
from compsize.flow.jit import kernel
from compsize.flow.lu import clear, copy_into, solve, solve_transposed
from compsize.flow.second import live_weights, pulled_back

Floats = NDArray[np.float64]

LOADING, MAGNITUDE, CORNER, FOLD = 0, 1, 2, 3

# Places in the array of real scalars.
LAM, ALPHA, SIGN, WORST, CURVE, BRANCH, DOUBT = 0, 1, 2, 3, 4, 5, 6
# Places in the array of whole scalars.
PIECE, PIN, FACTORED, FACTORS, SOLVES, TURNS, EVENTS, LOGGED, CULPRIT, NEWTONS = range(10)


class Work(NamedTuple):
    """Vectors of two per node, scalars and counters of one evaluation; private to a thread."""

    res: Floats
    load: Floats
    y_f: Floats
    y_l: Floats
    y_e: Floats
    w: Floats
    grad: Floats
    d1: Floats
    d2: Floats
    sec: Floats
    step: Floats
    th0: Floats
    v0: Floats
    real: Floats
    whole: NDArray[np.int64]


def new_work(count: int) -> Work:
    names = ("res", "load", "y_f", "y_l", "y_e", "w", "grad", "d1", "d2", "sec", "step")
    vectors = {name: np.zeros(2 * count) for name in names}
    return Work(
        **vectors,
        th0=np.zeros(count),
        v0=np.zeros(count),
        real=np.zeros(16),
        whole=np.zeros(16, dtype=np.int64),
    )


@kernel
def floating(case, state, i):  # type: ignore[no-untyped-def]
    """What floats at device node ``i``: reactive power of a held bus, else its voltage; ratio or regulated voltage."""
    s = case.segptr[i] + state.seg[i]
    k = case.tapof[i]
    if k >= 0:
        return state.v[i] if case.hold[s] else state.v[case.taps[k, 3]]
    return state.qdev[i] if case.hold[s] else state.v[i]


@kernel
def floating_slope(pattern, case, state, lam, i, y, dlam):  # type: ignore[no-untyped-def]
    """Derivative of :func:`floating` along (``y``, ``dlam``)."""
    s = case.segptr[i] + state.seg[i]
    k = case.tapof[i]
    if k >= 0:
        return y[2 * i + 1] if case.hold[s] else y[2 * case.taps[k, 3] + 1]
    if case.hold[s]:
        return reactive_slope(pattern, case, state, lam, i, y, dlam)
    return y[2 * i + 1]


@kernel
def newton(pattern, case, state, factors, work, mode, node, target, reuse, tries, wide):  # type: ignore[no-untyped-def]
    """Bring the state to the wanted point; 0 done, 1 failed (the state is then worthless).

    ``node`` is the device of a CORNER, whose floating quantity must reach ``target``. ``reuse`` starts with
    the factors at hand (made at a near point with the same segments); ``wide`` allows long damped steps. All
    flags are whole numbers: a literal would compile the whole function once more.
    """
    real, whole = work.real, work.whole
    pin, alpha = whole[PIN], real[ALPHA]
    n = state.v.size
    fresh = reuse == 1
    previous = np.inf
    first = np.inf
    stale = reuse == 1
    whole[NEWTONS] += 1
    for turn in range(tries):
        lam = real[LAM]
        err = residual(pattern, case, state, lam, whole[PIECE], work.res)
        con = 0.0
        if mode == LOADING:
            con = lam - target
        elif mode == MAGNITUDE:
            con = state.v[pin] - target
        elif mode == CORNER:
            con = floating(case, state, node) - target
        err = max(err, abs(con))
        if mode != FOLD and err < 1e-11:
            real[WORST] = err
            return 0
        if not np.isfinite(err):
            return 1
        if turn == 0:
            first = err
        elif err > 1e4 * max(first, 1e-2) and wide == 0:
            return 1
        poor = turn > 0 and err > 0.15 * previous
        if mode != FOLD and poor and not stale and err < 1e-8:
            real[WORST] = err
            return 0
        if mode != FOLD and wide == 0 and turn >= 6 and poor and not stale and err > 1e-3:
            return 1
        previous = err
        if mode == FOLD or not fresh or (stale and poor) or (not stale and err > 1e-5):
            sign = factorise(pattern, case, state, lam, factors, pin, alpha)
            whole[FACTORS] += 1
            if sign == 0.0:
                return 1
            real[SIGN] = sign
            loading_column(case, state, whole[PIECE], work.load)
            copy_into(work.y_l, work.load)
            solve(pattern, factors, work.y_l)
            if alpha != 0.0:
                clear(work.y_e)
                work.y_e[2 * pin + 1] = 1.0
                solve(pattern, factors, work.y_e)
            fresh = True
            stale = False
        for i in range(2 * n):
            work.y_f[i] = -work.res[i]
        solve(pattern, factors, work.y_f)
        whole[SOLVES] += 1
        y_f, y_e, y_l = work.y_f, work.y_e, work.y_l
        # Row 1: a (1 - alpha E_k) + d L_k = F_k for a = dx_k, d = dlam. Row 2: c1 a + c2 d = c0.
        c0, c1, c2 = -con, 0.0, 1.0
        if mode == MAGNITUDE:
            c1, c2 = 1.0, 0.0
        elif mode == CORNER:
            c0 -= floating_slope(pattern, case, state, lam, node, y_f, 0.0)
            c2 = -floating_slope(pattern, case, state, lam, node, y_l, -1.0)
            if alpha != 0.0:
                c1 = alpha * floating_slope(pattern, case, state, lam, node, y_e, 0.0)
        elif mode == FOLD:
            k = 2 * pin + 1
            u = y_e[k]
            if u == 0.0:
                return 1
            g = alpha - 1.0 / u
            floor = turn > 3 and err < 1e-8 and poor
            if (err < 1e-10 or floor) and abs(g) < 1e-9 * alpha:
                real[WORST] = err
                return 0
            clear(work.w)
            work.w[k] = 1.0
            solve_transposed(pattern, factors, work.w)
            for i in range(2 * n):
                work.w[i] /= u
                work.step[i] = y_e[i] / u
            live_weights(case, state, work.w)
            glam = pulled_back(pattern, case, state, lam, work.w, work.step, work.grad)
            c0, c1, c2 = g, 0.0, glam
            for i in range(2 * n):
                c0 -= work.grad[i] * y_f[i]
                c1 += work.grad[i] * y_e[i]
                c2 -= work.grad[i] * y_l[i]
            c1 *= alpha
        if pin >= 0:
            k = 2 * pin + 1
            a11 = 1.0 - (alpha * y_e[k] if alpha != 0.0 else 0.0)
            a12, r1 = y_l[k], y_f[k]
        else:
            a11, a12, r1 = 1.0, 0.0, 0.0
        det = a11 * c2 - a12 * c1
        if det == 0.0 or not np.isfinite(det):
            return 1
        a = (r1 * c2 - a12 * c0) / det
        d = (a11 * c0 - c1 * r1) / det
        ka = alpha * a if alpha != 0.0 else 0.0
        biggest = 0.0
        for i in range(n):
            step_t = y_f[2 * i] - d * y_l[2 * i]
            step_v = y_f[2 * i + 1] - d * y_l[2 * i + 1]
            if ka != 0.0:
                step_t += ka * y_e[2 * i]
                step_v += ka * y_e[2 * i + 1]
            work.step[2 * i] = step_t
            work.step[2 * i + 1] = step_v
            biggest = max(biggest, max(0.3 * abs(step_t), abs(step_v)))
        limit = 0.25 if wide == 1 else 0.2
        scale = 1.0
        if not np.isfinite(biggest):
            return 1
        if biggest > limit:
            scale = limit / biggest
            if wide == 0 and scale < 0.05:
                return 1
        for i in range(n):
            state.th[i] += scale * work.step[2 * i]
            state.v[i] += scale * work.step[2 * i + 1]
            if state.v[i] < 1e-3:
                return 1
        real[LAM] += scale * d
        if mode != FOLD and biggest < 1e-13 and abs(d) < 1e-13:
            residual(pattern, case, state, real[LAM], whole[PIECE], work.res)
            return 0
    return 1
