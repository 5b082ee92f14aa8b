"""Long steps towards the nose, many limit events in each, and when they may be believed.

A leap raises the loading by a long step in the pinned magnitude, switches the devices that the predictor
says have reached their limits, solves, and corrects the set of limits until all fit. What it cannot see is
a first maximum between its ends. It is believed where every device that switched is far from causing one:
a limit-induced nose needs the response of that bus's voltage to its own reactive power, dV/dQ with the
device at its limit, to pass through infinity to negative values (Dobson and Lu 1992); ``doubt`` is the
largest such response met, times the bus's own susceptance (about 1 in a stiff network).
"""

from __future__ import annotations

import numpy as np

from compsize.flow.jit import kernel
from compsize.flow.lu import solve
from compsize.flow.second import live_weights, second_along
from compsize.nose.limits import refactor, response, settle, support_step
from compsize.nose.newton import ALPHA, DOUBT, LAM, MAGNITUDE, PIECE, PIN, floating, floating_slope
from compsize.nose.trace import choose_pin, restore, save


@kernel
def doubt_of(pattern, case, state, factors, work, i, old):  # type: ignore[no-untyped-def]
    """Response of bus ``i``, which left segment ``old``, in units of its own susceptance; inf where negative."""
    s_old = case.segptr[i] + old
    s_new = case.segptr[i] + state.seg[i]
    if case.tapof[i] >= 0 or case.hold[s_old] == case.hold[s_new]:
        return 0.0
    ratio = response(pattern, case, state, factors, work, i, old)
    if ratio <= 0.0:
        return np.inf
    return ratio * case.stiff[i] if case.hold[s_old] == 1 else case.stiff[i] / ratio


@kernel
def limited_doubt(pattern, case, state, factors, work):  # type: ignore[no-untyped-def]
    """The largest doubt over all buses that are at a limit and could hold their voltage in the next segment."""
    worst = 0.0
    for m in range(case.dev.size):
        i = case.dev[m]
        s = case.segptr[i] + state.seg[i]
        if case.tapof[i] >= 0 or case.hold[s] == 1:
            continue
        old = state.seg[i] - 1
        if old < 0 or case.hold[s - 1] == 0:
            continue
        worst = max(worst, doubt_of(pattern, case, state, factors, work, i, old))
    return worst


@kernel
def copy_whole(target, source):  # type: ignore[no-untyped-def]
    for i in range(target.size):
        target[i] = source[i]


@kernel
def leap(pattern, case, state, factors, work, seg0, first, longest, shortest):  # type: ignore[no-untyped-def]
    """From a settled state to one shortly before the nose; the number of leaps made.

    The state is the last good point; ``seg0`` is workspace (one per node). ``work.real[DOUBT]`` is the
    largest doubt of the devices that switched on the way.
    """
    real, whole = work.real, work.whole
    n = state.v.size
    whole[PIN] = -1
    real[ALPHA] = 0.0
    real[DOUBT] = 0.0
    sgn = 0.0
    stride = first
    made = 0
    fresh = 0
    old_pin = np.int64(-1)
    lam_old = old_alpha = s_try = 0.0
    rounds = np.int64(12)
    mode = np.int64(MAGNITUDE)
    for _ in range(60):
        lam0 = real[LAM]
        sign = refactor(pattern, case, state, factors, work)
        if sign == 0.0:
            return made
        if sgn == 0.0:
            sgn = sign
        pin, alpha = whole[PIN], real[ALPHA]
        if sign != sgn:
            # A fold was passed.
            restore(state, work, lam_old)
            copy_whole(state.seg, seg0)
            whole[PIN] = old_pin
            real[ALPHA] = old_alpha
            made -= 1
            stride = 0.4 * s_try
            if stride < shortest:
                return made
            fresh = 0
            continue
        if pin < 0:
            for i in range(2 * n):
                work.d1[i] = -work.y_l[i]
            choose_pin(case, state, work, work.d1, 0.02)
            if whole[PIN] < 0:
                return made
            continue
        k = 2 * pin + 1
        if fresh == 1:
            for m in range(case.dev.size):
                i = case.dev[m]
                if seg0[i] != state.seg[i]:
                    real[DOUBT] = max(real[DOUBT], doubt_of(pattern, case, state, factors, work, i, seg0[i]))
        slope = (alpha * work.y_e[k] - 1.0) / work.y_l[k]
        way = 1.0 if slope > 0.0 else -1.0
        dlam = abs(slope)
        for i in range(2 * n):
            work.d1[i] = alpha * way * work.y_e[i] - dlam * work.y_l[i]
        second_along(pattern, case, state, lam0, work.d1, dlam, work.sec)
        for i in range(2 * n):
            work.d2[i] = -work.sec[i]
        live_weights(case, state, work.d2)
        solve(pattern, factors, work.d2)
        d2lam = work.d2[k] / work.y_l[k]
        for i in range(2 * n):
            work.d2[i] -= d2lam * work.y_l[i]
        turn = -dlam / d2lam if d2lam < 0.0 else np.inf
        s_try = min(stride, 0.7 * turn)
        if s_try < shortest:
            return made
        save(state, work)
        copy_whole(seg0, state.seg)
        lam_old, old_pin, old_alpha = lam0, pin, alpha
        target = state.v[pin] + way * s_try
        for m in range(case.dev.size):
            i = case.dev[m]
            s = case.segptr[i] + state.seg[i]
            z = floating(case, state, i)
            z1 = floating_slope(pattern, case, state, lam0, i, work.d1, dlam)
            z2 = floating_slope(pattern, case, state, lam0, i, work.d2, d2lam)
            if case.hold[s] == 1 and case.tapof[i] < 0:
                z2 += work.sec[2 * i + 1]
            z += s_try * (z1 + 0.5 * s_try * z2)
            if i == pin:
                continue
            if z > case.high[s]:
                state.seg[i] += support_step(case, i, s, np.int64(1))
            elif z < case.low[s]:
                state.seg[i] += support_step(case, i, s, np.int64(0))
        for i in range(n):
            state.th[i] += s_try * (work.d1[2 * i] + 0.5 * s_try * work.d2[2 * i])
            state.v[i] += s_try * (work.d1[2 * i + 1] + 0.5 * s_try * work.d2[2 * i + 1])
        real[LAM] = lam0 + s_try * (dlam + 0.5 * s_try * d2lam)
        good = settle(pattern, case, state, factors, work, mode, target, rounds) == 0
        if good:
            room = case.gbreak[whole[PIECE] + 1]
            good = real[LAM] > lam0 and real[LAM] < room
        if not good:
            restore(state, work, lam0)
            copy_whole(state.seg, seg0)
            fresh = 0
            stride = 0.4 * s_try
            if stride < shortest:
                return made
            continue
        made += 1
        fresh = 1
        stride = min(longest, 1.6 * stride)
        choose_pin(case, state, work, work.d1, 1e-9)
    return made
