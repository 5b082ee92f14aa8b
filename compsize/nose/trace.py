"""The curve from the operating point to its first nose, event by event.

Predictor of second order along the magnitude that falls fastest (Ajjarapu and Christy 1992: local
parametrisation), corrector with the factors at hand, every limit event located exactly, both ways of
switching. The loading grows along the way by construction: the tangent is oriented so, and a device that
would have to leave its new segment to go on marks a limit-induced nose (Dobson and Lu 1992).
"""

from __future__ import annotations

import numpy as np

from compsize.flow.equations import DEAD, TAP
from compsize.flow.jit import kernel
from compsize.flow.lu import copy_into, solve
from compsize.flow.second import live_weights, second_along
from compsize.nose.limits import allowance, earliest, first_root, refactor, response, support_step
from compsize.nose.newton import (
    ALPHA,
    BRANCH,
    CORNER,
    CULPRIT,
    CURVE,
    EVENTS,
    FOLD,
    LAM,
    LOADING,
    LOGGED,
    MAGNITUDE,
    PIECE,
    PIN,
    floating,
    floating_slope,
    newton,
)

AT_FOLD, AT_LIMIT, NO_TURN, STUCK, UNSETTLED = 0, 1, 2, 3, 4
NO_EVENT, PICKUP_BREAK = -1, -2
NOTHING, EVENT, PLAIN, LAST = 0, 1, 2, 3


@kernel
def choose_pin(case, state, work, slope, floor):  # type: ignore[no-untyped-def]
    """Pin the free magnitude that ``slope`` moves most (downwards first); none if all move less than ``floor``."""
    best = -1
    most = floor
    for i in range(state.v.size):
        if case.role[i] & (DEAD | TAP):
            continue
        s = state.seg[i]
        if s >= 0 and case.hold[case.segptr[i] + s] == 1:
            continue
        move = slope[2 * i + 1]
        size = -move if move < 0.0 else 0.2 * move
        if size > most:
            most, best = size, i
    work.whole[PIN] = best
    if best >= 0:
        # As large as the entry it is added to.
        work.real[ALPHA] = max(1.0, case.stiff[best])
    else:
        work.real[ALPHA] = 0.0


@kernel
def save(state, work):  # type: ignore[no-untyped-def]
    copy_into(work.th0, state.th)
    copy_into(work.v0, state.v)


@kernel
def restore(state, work, lam):  # type: ignore[no-untyped-def]
    copy_into(state.th, work.th0)
    copy_into(state.v, work.v0)
    work.real[LAM] = lam


@kernel
def note(state, work, log):  # type: ignore[no-untyped-def]
    """Append the loading and all magnitudes to the log, if there is room."""
    m = work.whole[LOGGED]
    if m < log.shape[0]:
        log[m, 0] = work.real[LAM]
        for i in range(state.v.size):
            log[m, 1 + i] = state.v[i]
        work.whole[LOGGED] = m + 1


@kernel
def trace(pattern, case, state, factors, work, top, cap, log):  # type: ignore[no-untyped-def]
    """Follow the curve from a settled state to its first nose or to the loading ``top``.

    ``cap`` is the longest step in the pinned magnitude [pu]; the pin that ``work.whole`` holds is kept (-1: none
    yet). On return the state is the nose, ``work.d1`` the
    direction there (loading direction before a limit-induced nose, null vector at a fold), ``work.w`` the left
    null vector (fold), ``work.whole[CULPRIT]`` the device of a limit-induced nose.
    """
    real, whole = work.real, work.whole
    n = state.v.size
    whole[CULPRIT] = -1
    stride = 0.25 * cap
    sgn = 0.0
    lam0 = real[LAM]
    last = device = old = old_pin = np.int64(-1)
    old_alpha = s_try = 0.0
    idle = fails = 0
    pending = NOTHING
    tries = np.int64(12)
    narrow = np.int64(0)
    note(state, work, log)
    for _ in range(20000):
        sign = refactor(pattern, case, state, factors, work)
        if sign == 0.0:
            return STUCK
        if sgn == 0.0:
            sgn = sign
            real[BRANCH] = sign
        if pending == EVENT:
            ratio = response(pattern, case, state, factors, work, device, old)
            if (sign if ratio > 0.0 else -sign) != sgn:
                # A fold lies before this event: back, and nearer to it, with the old segments.
                state.seg[device] = old
                restore(state, work, lam0)
                whole[PIN] = old_pin
                real[ALPHA] = old_alpha
                stride = min(stride, s_try) * 0.3
                pending = NOTHING
                if stride < 1e-10:
                    return STUCK
                continue
            note(state, work, log)
            whole[EVENTS] += 1
            if sign != sgn:
                state.seg[device] = old
                whole[CULPRIT] = device
                whole[PIN] = -1
                real[ALPHA] = 0.0
                pending = LAST
                continue
            idle = idle + 1 if abs(real[LAM] - lam0) < 1e-12 else 0
            if idle > 60:
                return STUCK
            last = device
            stride = min(max(stride, 0.5 * s_try), cap)
        elif pending == PLAIN:
            if sign != sgn or real[LAM] < lam0:
                # A fold was passed.
                restore(state, work, lam0)
                whole[PIN] = old_pin
                real[ALPHA] = old_alpha
                stride = min(stride, s_try) * 0.3
                pending = NOTHING
                if stride < 1e-10:
                    return STUCK
                continue
            note(state, work, log)
            last = -1
            if real[LAM] >= top:
                return NO_TURN
            off = 0.0
            for i in range(n):
                moved = s_try * (work.d1[2 * i + 1] + 0.5 * s_try * work.d2[2 * i + 1])
                off = max(off, abs(state.v[i] - work.v0[i] - moved))
            stride = min(cap, stride * (0.7 if off > 2e-3 else 1.1 if off > 4e-4 else 1.6))
        elif pending == LAST:
            for i in range(2 * n):
                work.d1[i] = -work.y_l[i]
            return AT_LIMIT
        pending = NOTHING
        lam0 = real[LAM]
        pin, alpha = whole[PIN], real[ALPHA]
        k = 2 * pin + 1
        # Tangent with growing loading.
        way = 1.0
        dlam = 1.0
        if pin >= 0:
            slope = (alpha * work.y_e[k] - 1.0) / work.y_l[k]
            way = 1.0 if slope > 0.0 else -1.0
            dlam = abs(slope)
            for i in range(2 * n):
                work.d1[i] = alpha * way * work.y_e[i] - dlam * work.y_l[i]
        else:
            for i in range(2 * n):
                work.d1[i] = -work.y_l[i]
        second_along(pattern, case, state, lam0, work.d1, dlam, work.sec)
        for i in range(2 * n):
            work.d2[i] = -work.sec[i]
        live_weights(case, state, work.d2)
        solve(pattern, factors, work.d2)
        d2lam = 0.0
        if pin >= 0:
            d2lam = work.d2[k] / work.y_l[k]
            for i in range(2 * n):
                work.d2[i] -= d2lam * work.y_l[i]
        # The next event.
        ahead = np.inf
        event = NO_EVENT
        bound = 0.0
        for m in range(case.dev.size):
            i = case.dev[m]
            s = case.segptr[i] + state.seg[i]
            z = floating(case, state, i)
            z1 = floating_slope(pattern, case, state, lam0, i, work.d1, dlam)
            z2 = floating_slope(pattern, case, state, lam0, i, work.d2, d2lam)
            if case.hold[s] == 1 and case.tapof[i] < 0:
                z2 += work.sec[2 * i + 1]
            low, high = z - case.low[s], case.high[s] - z
            work.sec[2 * i] = low
            work.sec[2 * i + 1] = high
            tiny = allowance(case, i, s)
            root = first_root(low, z1, z2, tiny)
            if root < ahead:
                ahead, event, bound = root, i, case.low[s]
            root = first_root(high, -z1, -z2, tiny)
            if root < ahead:
                ahead, event, bound = root, i, case.high[s]
        room = case.gbreak[whole[PIECE] + 1] - lam0
        root = first_root(room, -dlam, -d2lam, 1e-13)
        if room < 1e-13:
            root = 0.0
        if root < ahead:
            ahead, event = root, PICKUP_BREAK
        turn = -dlam / d2lam if d2lam < 0.0 else np.inf
        limit = stride if pin >= 0 else stride * 4.0
        # One attempt: an event, the fold, or a plain step.
        if ahead <= min(limit, turn):
            s_try, mode = ahead, CORNER if event != PICKUP_BREAK else LOADING
        elif turn <= 1.5 * limit and pin >= 0:
            s_try, mode = turn, FOLD
        else:
            s_try, mode = limit, MAGNITUDE if pin >= 0 else LOADING
            event = NO_EVENT
        save(state, work)
        target = bound
        if mode == MAGNITUDE:
            target = state.v[pin] + way * s_try
        elif mode == LOADING:
            target = lam0 + s_try if event == NO_EVENT else case.gbreak[whole[PIECE] + 1]
        device = event
        # Already at its limit and leaving: it switches where it stands.
        ok = mode == CORNER and ahead == 0.0
        if not ok:
            for i in range(n):
                state.th[i] += s_try * (work.d1[2 * i] + 0.5 * s_try * work.d2[2 * i])
                state.v[i] += s_try * (work.d1[2 * i + 1] + 0.5 * s_try * work.d2[2 * i + 1])
            real[LAM] = lam0 + s_try * (dlam + 0.5 * s_try * d2lam)
        start = real[LAM]
        for _ in range(0 if ok else 30):
            reuse = np.int64(0 if mode == FOLD else 1)
            if newton(pattern, case, state, factors, work, mode, device, target, reuse, tries, narrow) != 0:
                break
            reach = 0.5 * abs(start - lam0)
            if mode != MAGNITUDE and (real[LAM] > start + reach + 0.02 or real[LAM] < lam0 - max(1e-7, reach)):
                break
            found, frac, where = earliest(case, state, work, device if mode == CORNER else -1, lam0)
            if found < 0:
                ok = True
                break
            if found == last and min(work.sec[2 * found], work.sec[2 * found + 1]) < 1e-7:
                break
            if mode == CORNER and device == found:
                break
            for i in range(n):
                state.th[i] = work.th0[i] + frac * (state.th[i] - work.th0[i])
                state.v[i] = work.v0[i] + frac * (state.v[i] - work.v0[i])
            real[LAM] = lam0 + frac * (real[LAM] - lam0)
            mode, device, target = CORNER, found, where
        if ok and mode == FOLD:
            # Only a maximum of the loading, passed upwards, is the nose.
            curve = down = 0.0
            for i in range(2 * n):
                work.d1[i] = work.y_e[i] / work.y_e[k]
                curve += work.grad[i] * work.d1[i]
                down += work.w[i] * work.load[i]
            if down != 0.0 and curve / down > 0.0 and real[LAM] >= lam0 - 1e-9:
                real[CURVE] = -curve / down
                note(state, work, log)
                return AT_FOLD
            ok = False
        if not ok:
            restore(state, work, lam0)
            fails += 1
            stride = min(stride, s_try) * 0.3
            if fails > 40 or stride < 1e-10:
                return STUCK
            continue
        fails = 0
        old_pin, old_alpha = pin, alpha
        if mode == CORNER:
            s = case.segptr[device] + state.seg[device]
            old = state.seg[device]
            state.seg[device] += support_step(case, device, s, np.int64(1 if target == case.high[s] else 0))
            pending = EVENT
            if pin < 0 or pin == device:
                choose_pin(case, state, work, work.d1, 1e-9)
        elif event == PICKUP_BREAK:
            if whole[PIECE] + 2 >= case.gbreak.size:
                return NO_TURN
            whole[PIECE] += 1
        else:
            pending = PLAIN
            choose_pin(case, state, work, work.d1, 0.02 * dlam)
    return STUCK
