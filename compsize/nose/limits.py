"""Limits of devices along the curve: which are violated, which comes next, which way a switch goes."""

from __future__ import annotations

import numpy as np

from compsize.flow.equations import factorise, loading_column, reactive_slope, residual
from compsize.flow.jit import kernel
from compsize.flow.lu import clear, copy_into, solve
from compsize.nose.newton import (
    ALPHA,
    FACTORS,
    LAM,
    LOADING,
    MAGNITUDE,
    PIECE,
    PIN,
    SIGN,
    SOLVES,
    floating,
    newton,
)

LIMIT_TOLERANCE = 1e-9


@kernel
def support_step(case, i, s, above):  # type: ignore[no-untyped-def]
    """Change of segment (+1: more support) when the floating quantity leaves its range above (1) or below (0)."""
    k = case.tapof[i]
    rises = case.hold[s] == 1 and (k < 0 or case.tapval[k, 5] > 0.0)
    up = above == 1 if rises else above == 0
    return 1 if up else -1


@kernel
def allowance(case, i, s):  # type: ignore[no-untyped-def]
    """What counts as inside: 1e-9 pu of reactive power, and the voltage that moves as little of it."""
    if case.hold[s] or case.tapof[i] >= 0:
        return LIMIT_TOLERANCE
    return max(LIMIT_TOLERANCE / max(case.stiff[i], 1.0), 1e-13)


@kernel
def excess(case, state, i):  # type: ignore[no-untyped-def]
    """How far node ``i`` is outside its segment (negative: inside), and the change of segment that cures it."""
    s = case.segptr[i] + state.seg[i]
    z = floating(case, state, i)
    over, under = z - case.high[s], case.low[s] - z
    if over >= under:
        return over, support_step(case, i, s, np.int64(1))
    return under, support_step(case, i, s, np.int64(0))


@kernel
def earliest(case, state, work, skip, lam0):  # type: ignore[no-untyped-def]
    """Of the devices outside their segment the one that crossed first, by linear interpolation from the saved point.

    Returns node (-1: none), fraction of the step, and the bound it crossed. ``work.sec`` holds, per node, the
    inside distances at the saved point (low, high).
    """
    found = -1
    best = 2.0
    bound = 0.0
    for m in range(case.dev.size):
        i = case.dev[m]
        if i == skip:
            continue
        s = case.segptr[i] + state.seg[i]
        z = floating(case, state, i)
        slack = allowance(case, i, s)
        out = z - case.high[s]
        if out > slack:
            before = max(work.sec[2 * i + 1], 0.0)
            frac = before / (before + out)
            if frac < best:
                best, found, bound = frac, i, case.high[s]
        out = case.low[s] - z
        if out > slack:
            before = max(work.sec[2 * i], 0.0)
            frac = before / (before + out)
            if frac < best:
                best, found, bound = frac, i, case.low[s]
    return found, best, bound


@kernel
def first_root(d0, d1, d2, tiny):  # type: ignore[no-untyped-def]
    """Smallest s >= 0 with d0 + d1 s + d2 s^2 / 2 <= 0 (d0 > tiny inside; from the limit inwards it returns later)."""
    if d0 <= 0.0 and d1 < 0.0:
        return 0.0
    if d0 <= tiny and d1 >= 0.0:
        return -2.0 * d1 / d2 if d2 < 0.0 else np.inf
    disc = d1 * d1 - 2.0 * d2 * d0
    if disc < 0.0:
        return np.inf
    root = np.sqrt(disc)
    if d1 <= 0.0:
        low = root - d1
        return 2.0 * d0 / low if low > 0.0 else np.inf
    return (d1 + root) / -d2 if d2 < 0.0 else np.inf


@kernel
def settle(pattern, case, state, factors, work, mode, target, rounds):  # type: ignore[no-untyped-def]
    """Solve at the loading ``target`` (or with the pinned magnitude at it) and bring every device into a segment
    that fits; 0 done, 1 failed.

    The equations are solved before any limit is looked at; then all violated devices switch for two rounds,
    later only the worst, each way allowed.
    """
    real, whole = work.real, work.whole
    if mode == LOADING:
        whole[PIN] = -1
        real[ALPHA] = 0.0
        real[LAM] = target
    nobody = np.int64(-1)
    anew = np.int64(0)
    wide = np.int64(1 if mode == LOADING else 0)
    for turn in range(rounds):
        tries = np.int64(25 if turn == 0 else 15)
        if newton(pattern, case, state, factors, work, mode, nobody, target, anew, tries, wide) != 0:
            return 1
        worst = 0.0
        chosen = -1
        step = 0
        count = 0
        for m in range(case.dev.size):
            i = case.dev[m]
            out, move = excess(case, state, i)
            s = case.segptr[i] + state.seg[i]
            if out > allowance(case, i, s):
                count += 1
                weight = 1.0 if case.hold[s] and case.tapof[i] < 0 else 10.0
                if turn < 2:
                    state.seg[i] += move
                    if i == whole[PIN]:
                        return 1
                elif weight * out > worst:
                    worst, chosen, step = weight * out, i, move
        if count == 0:
            return 0
        if turn >= 2:
            if chosen == whole[PIN]:
                return 1
            state.seg[chosen] += step
    return 1


@kernel
def step_back(pattern, case, state, factors, work, pin, lift, rounds):  # type: ignore[no-untyped-def]
    """From a near nose to a point before this case's nose: the pinned magnitude ``lift`` higher; 0 done, 1 failed.

    ``work.real[LAM]`` holds the near nose's loading.
    """
    work.whole[PIN] = pin
    work.real[ALPHA] = max(1.0, case.stiff[pin])
    return settle(pattern, case, state, factors, work, MAGNITUDE, state.v[pin] + lift, rounds)


@kernel
def response(pattern, case, state, factors, work, i, old):  # type: ignore[no-untyped-def]
    """Ratio of det J with node ``i`` in segment ``old`` to det J as factorised (a rank-one change of one row)."""
    pin, alpha = work.whole[PIN], work.real[ALPHA]
    lam = work.real[LAM]
    z = work.y_f
    clear(z)
    z[2 * i + 1] = 1.0
    solve(pattern, factors, z)
    work.whole[SOLVES] += 1
    if alpha != 0.0:
        k = 2 * pin + 1
        scale = alpha * z[k] / (1.0 - alpha * work.y_e[k])
        for m in range(z.size):
            z[m] += scale * work.y_e[m]
    s = case.segptr[i] + old
    tap = case.tapof[i]
    if tap >= 0:
        return case.tapval[tap, 5] * z[2 * case.taps[tap, 3] + 1] if case.hold[s] else z[2 * i + 1]
    if case.hold[s]:
        return z[2 * i + 1]
    slope = reactive_slope(pattern, case, state, lam, i, z, 0.0)
    return slope - (case.coef[s, 1] + 2.0 * case.coef[s, 2] * state.v[i]) * z[2 * i + 1]


@kernel
def refactor(pattern, case, state, factors, work):  # type: ignore[no-untyped-def]
    """Factors, loading column and pinned column at the present state; the sign of det J (0: singular)."""
    real, whole = work.real, work.whole
    pin, alpha = whole[PIN], real[ALPHA]
    residual(pattern, case, state, real[LAM], whole[PIECE], work.res)
    sign = factorise(pattern, case, state, real[LAM], factors, pin, alpha)
    whole[FACTORS] += 1
    if sign == 0.0:
        return 0.0
    loading_column(case, state, whole[PIECE], work.load)
    copy_into(work.y_l, work.load)
    solve(pattern, factors, work.y_l)
    if alpha != 0.0:
        clear(work.y_e)
        work.y_e[2 * pin + 1] = 1.0
        solve(pattern, factors, work.y_e)
        if 1.0 - alpha * work.y_e[2 * pin + 1] < 0.0:
            sign = -sign
    real[SIGN] = sign
    return sign
