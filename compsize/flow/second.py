"""Second derivatives of the power-flow equations: along a direction, and pulled back by row weights.

With P_ij + j Q_ij the power drawn by the admittance between i and j at i, delta = d theta_i - d theta_j,
r = dV / V: the second differential of P_ij is -P delta^2 - 2 Q delta (r_i + r_j) + 2 P r_i r_j, of Q_ij
-Q delta^2 + 2 P delta (r_i + r_j) + 2 Q r_i r_j; the diagonal is the case delta = 0.
"""

from __future__ import annotations

from compsize.flow.equations import DEAD, SLACK, TAP
from compsize.flow.jit import kernel
from compsize.flow.lu import clear


@kernel
def tap_flows(case, state, k):  # type: ignore[no-untyped-def]
    """Of tap branch ``k``: P and Q at 'from' (ratio-squared part, ratio part) and at 'to' (ratio part)."""
    row = case.taps[k]
    val = case.tapval[k]
    f, o = row[1], row[2]
    inv = 1.0 / state.v[row[0]]
    yg, yb, bc, cs, sn = val[0], val[1], val[2], val[3], val[4]
    ftg, ftb = (yg * cs - yb * sn) * inv, (yb * cs + yg * sn) * inv
    tfg, tfb = (yg * cs + yb * sn) * inv, (yb * cs - yg * sn) * inv
    a = state.e[f] * state.e[o] + state.f[f] * state.f[o]
    c = state.f[f] * state.e[o] - state.e[f] * state.f[o]
    vf2 = state.v[f] ** 2 * inv * inv
    return (
        yg * vf2,
        -(yb + bc) * vf2,
        -(ftg * a + ftb * c),
        -(ftg * c - ftb * a),
        -(tfg * a - tfb * c),
        tfg * c + tfb * a,
    )


@kernel
def second_along(pattern, case, state, lam, y, dlam, out):  # type: ignore[no-untyped-def]
    """Second differential of the rows along (``y``, ``dlam``): F_xx[y, y] + 2 F_x,loading y dlam.

    The reactive entry is that of the balance also where the row holds a voltage; the caller puts it to zero
    there if it wants the row's.
    """
    v = state.v
    e, f = state.e, state.f
    for i in range(v.size):
        out[2 * i] = 0.0
        out[2 * i + 1] = 0.0
        role = case.role[i]
        if role & (DEAD | TAP):
            continue
        ei, fi, vi = e[i], f[i], v[i]
        di, ri = y[2 * i], y[2 * i + 1] / vi
        sp = 0.0
        sq = 0.0
        for p in range(pattern.aptr[i], pattern.aptr[i + 1]):
            j = pattern.aidx[p]
            a = ei * e[j] + fi * f[j]
            c = fi * e[j] - ei * f[j]
            pij = a * case.g[p] + c * case.b[p]
            qij = c * case.g[p] - a * case.b[p]
            delta = di - y[2 * j]
            rj = y[2 * j + 1] / v[j]
            sq2 = 2.0 * ri * rj - delta * delta
            cross = 2.0 * delta * (ri + rj)
            sp += pij * sq2 - qij * cross
            sq += qij * sq2 + pij * cross
        ld = case.load[i]
        dv = y[2 * i + 1]
        sp += 2.0 * dv * ((ld[4] + lam * ld[5]) * dv + dlam * (ld[3] + 2.0 * ld[5] * vi))
        sq += 2.0 * dv * ((ld[10] + lam * ld[11]) * dv + dlam * (ld[9] + 2.0 * ld[11] * vi))
        s = state.seg[i]
        if s >= 0 and case.hold[case.segptr[i] + s] == 0:
            sq -= 2.0 * case.coef[case.segptr[i] + s, 2] * dv * dv
        if not role & SLACK:
            out[2 * i] = sp
        out[2 * i + 1] = sq
    for k in range(case.taps.shape[0]):
        row = case.taps[k]
        f_, o, node = row[1], row[2], row[0]
        p2, q2, pf, qf, po, qo = tap_flows(case, state, k)
        d = y[2 * f_] - y[2 * o]
        rf, ro = y[2 * f_ + 1] / v[f_], y[2 * o + 1] / v[o]
        h = y[2 * node + 1] / v[node]
        rho = rf + ro
        spf = -8.0 * p2 * rf * h + 6.0 * p2 * h * h - 2.0 * (pf * rho - qf * d) * h + 2.0 * pf * h * h
        sqf = -8.0 * q2 * rf * h + 6.0 * q2 * h * h - 2.0 * (qf * rho + pf * d) * h + 2.0 * qf * h * h
        spo = -2.0 * (po * rho + qo * d) * h + 2.0 * po * h * h
        sqo = -2.0 * (qo * rho - po * d) * h + 2.0 * qo * h * h
        if not case.role[f_] & (SLACK | DEAD):
            out[2 * f_] += spf
        if not case.role[f_] & DEAD:
            out[2 * f_ + 1] += sqf
        if not case.role[o] & (SLACK | DEAD):
            out[2 * o] += spo
        if not case.role[o] & DEAD:
            out[2 * o + 1] += sqo


@kernel
def live_weights(case, state, w):  # type: ignore[no-untyped-def]
    """Put the weights of replaced rows (slack angle, held voltage, cut-off bus, tap changer) to zero, in place."""
    for i in range(state.v.size):
        role = case.role[i]
        if role & (DEAD | TAP):
            w[2 * i] = 0.0
            w[2 * i + 1] = 0.0
            continue
        if role & SLACK:
            w[2 * i] = 0.0
        s = state.seg[i]
        if s >= 0 and case.hold[case.segptr[i] + s] == 1:
            w[2 * i + 1] = 0.0


@kernel
def pulled_back(pattern, case, state, lam, w, y, out):  # type: ignore[no-untyped-def]
    """Gradient of w' J(x) y by x into ``out``; returns its derivative by the loading.

    ``w`` must have passed :func:`live_weights`.
    """
    v = state.v
    e, f = state.e, state.f
    dlam = 0.0
    clear(out)
    for i in range(v.size):
        wp, wq = w[2 * i], w[2 * i + 1]
        if wp == 0.0 and wq == 0.0:
            continue
        ei, fi, vi = e[i], f[i], v[i]
        dv = y[2 * i + 1]
        di, ri = y[2 * i], dv / vi
        for p in range(pattern.aptr[i], pattern.aptr[i + 1]):
            j = pattern.aidx[p]
            a = ei * e[j] + fi * f[j]
            c = fi * e[j] - ei * f[j]
            pij = a * case.g[p] + c * case.b[p]
            qij = c * case.g[p] - a * case.b[p]
            delta = di - y[2 * j]
            rj = y[2 * j + 1] / v[j]
            u = wp * pij + wq * qij
            t = wq * pij - wp * qij
            turn = t * (ri + rj) - u * delta
            out[2 * i] += turn
            out[2 * j] -= turn
            out[2 * i + 1] += (t * delta + u * rj) / vi
            out[2 * j + 1] += (t * delta + u * ri) / v[j]
        ld = case.load[i]
        out[2 * i + 1] += 2.0 * dv * (wp * (ld[4] + lam * ld[5]) + wq * (ld[10] + lam * ld[11]))
        s = state.seg[i]
        if s >= 0:
            out[2 * i + 1] -= 2.0 * dv * wq * case.coef[case.segptr[i] + s, 2]
        dlam += dv * (wp * (ld[3] + 2.0 * ld[5] * vi) + wq * (ld[9] + 2.0 * ld[11] * vi))
    for k in range(case.taps.shape[0]):
        row = case.taps[k]
        f_, o, node = row[1], row[2], row[0]
        p2, q2, pf, qf, po, qo = tap_flows(case, state, k)
        d = y[2 * f_] - y[2 * o]
        rf, ro = y[2 * f_ + 1] / v[f_], y[2 * o + 1] / v[o]
        t = v[node]
        h = y[2 * node + 1] / t
        rho = rf + ro
        wpf, wqf, wpo, wqo = w[2 * f_], w[2 * f_ + 1], w[2 * o], w[2 * o + 1]
        # Ratio-dependent terms times h: -2 s2 - s1 for each of P and Q at both ends.
        two = wpf * p2 + wqf * q2
        one = wpf * pf + wqf * qf + wpo * po + wqo * qo
        turn = -wpf * qf + wqf * pf + wpo * qo - wqo * po
        out[2 * f_] -= turn * h
        out[2 * o] += turn * h
        out[2 * f_ + 1] -= (4.0 * two + one) * h / v[f_]
        out[2 * o + 1] -= one * h / v[o]
        out[2 * node + 1] += ((6.0 * two + 2.0 * one) * h - 4.0 * two * rf - one * rho - turn * d) / t
    return dlam
