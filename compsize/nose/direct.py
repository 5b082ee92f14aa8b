"""A nose straight from a near one: the same kind of point, solved with this case's values.

A fold by the minimally augmented Newton, a limit-induced nose as the corner of the same device. What is
found counts only if every device is inside its limits there and the turn has the right sign; a nose that
appeared earlier on the path cannot be seen, so what decides something is traced again.
"""

from __future__ import annotations

import numpy as np

from compsize.flow.equations import residual
from compsize.flow.jit import kernel
from compsize.nose.limits import allowance, excess, refactor, response, support_step
from compsize.nose.newton import (
    ALPHA,
    BRANCH,
    CORNER,
    CULPRIT,
    CURVE,
    FOLD,
    LAM,
    PIECE,
    PIN,
    floating,
    floating_slope,
    newton,
)
from compsize.nose.trace import AT_FOLD, AT_LIMIT, STUCK, choose_pin


@kernel
def direct(pattern, case, state, factors, work, device, sgn):  # type: ignore[no-untyped-def]
    """From the near nose in ``state``, ``work.real[LAM]`` and ``work.d1`` (its direction) to this case's.

    ``device`` is the near nose's device at its limit (-1: a fold), ``sgn`` the sign of the branch.
    """
    real, whole = work.real, work.whole
    n = state.v.size
    choose_pin(case, state, work, work.d1, 1e-12)
    pin = whole[PIN]
    if pin < 0:
        return STUCK
    mode = np.int64(FOLD if device < 0 else CORNER)
    target = 0.0
    s = 0
    high = True
    if device >= 0:
        residual(pattern, case, state, real[LAM], whole[PIECE], work.res)
        s = case.segptr[device] + state.seg[device]
        z = floating(case, state, device)
        high = abs(case.high[s] - z) < abs(z - case.low[s])
        target = case.high[s] if high else case.low[s]
        if not np.isfinite(target):
            return STUCK
    start = real[LAM]
    anew, tries, narrow = np.int64(0), np.int64(8), np.int64(0)
    if newton(pattern, case, state, factors, work, mode, device, target, anew, tries, narrow) != 0:
        return STUCK
    if not abs(real[LAM] - start) < 0.3 * (1.0 + abs(start)):
        return STUCK
    for m in range(case.dev.size):
        i = case.dev[m]
        if i != device:
            out, _ = excess(case, state, i)
            if out > allowance(case, i, case.segptr[i] + state.seg[i]):
                return STUCK
    if real[LAM] < case.gbreak[whole[PIECE]] or real[LAM] > case.gbreak[whole[PIECE] + 1]:
        return STUCK
    whole[CULPRIT] = device
    if device < 0:
        k = 2 * pin + 1
        curve = down = 0.0
        for i in range(2 * n):
            work.d1[i] = work.y_e[i] / work.y_e[k]
            curve += work.grad[i] * work.d1[i]
            down += work.w[i] * work.load[i]
        if down == 0.0 or curve / down <= 0.0:
            return STUCK
        real[CURVE] = -curve / down
        real[BRANCH] = sgn
        return AT_FOLD
    whole[PIN] = -1
    real[ALPHA] = 0.0
    if refactor(pattern, case, state, factors, work) != sgn:
        return STUCK
    for i in range(2 * n):
        work.d1[i] = -work.y_l[i]
    push = floating_slope(pattern, case, state, real[LAM], device, work.d1, 1.0)
    if (push <= 0.0) == high:
        return STUCK
    new = state.seg[device] + support_step(case, device, s, np.int64(1 if high else 0))
    if response(pattern, case, state, factors, work, device, new) >= 0.0:
        return STUCK
    real[BRANCH] = sgn
    return AT_LIMIT
