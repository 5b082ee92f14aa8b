"""Noses by a general nonlinear programme: the largest loading that the equations allow, limits as complementarity.

Maximise the loading subject to the power balances of all buses in complex form and, for a unit with limits,
V = V_set + above - below with above (Q - Q_min) = 0 and below (Q_max - Q) = 0, all factors non-negative: the voltage is
above its set-point only at the lower limit and below it only at the upper one (Rosehart, Roman and Schellenberg 2005).
The products are relaxed to a small number that shrinks from solve to solve. An interior-point method solves it.
Nothing of the program enters but the tables of the network. The answer is the largest loading near the start; it is the
nose where the curve of solutions turns just once there.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from typing import Any

import casadi as ca
import numpy as np
from numpy.typing import NDArray

from compsize.study.records import NetworkTables

RELAXED = (1e-3, 1e-5, 1e-7, 1e-9, 1e-11)
FREE = (1.0,)
"""A single solve, where nothing is relaxed."""
OPTIONS: dict[str, Any] = {
    "print_time": False,
    "ipopt.print_level": 0,
    "ipopt.sb": "yes",
    "ipopt.max_iter": 2000,
    "ipopt.tol": 1e-10,
    "ipopt.constr_viol_tol": 1e-10,
    "ipopt.acceptable_tol": 1e-9,
    "ipopt.bound_relax_factor": 0.0,
}


@dataclass(frozen=True)
class Answer:
    """Added load over base load at the nose (all loads and, in proportion, all units but the slack grow)."""

    loading: float
    v: NDArray[np.float64]
    at_limit: tuple[str, ...]
    """Units whose reactive power is at a limit, by name."""
    corner: tuple[str, ...]
    """Those of them that hold their set-point at the same time, as one does at a limit-induced nose."""
    solved: bool
    iterations: int


def _branches(net: NetworkTables, lost: Iterable[str]) -> tuple[Any, ...]:
    """Ends and the four admittances of the branches in service, from and to."""
    number = {name: k for k, name in enumerate(net.buses.bus)}
    gone = set(lost)
    br = net.branches
    keep = [k for k in range(len(br.branch)) if br.status[k] and br.branch[k] not in gone]
    f = np.array([number[br.from_bus[k]] for k in keep])
    t = np.array([number[br.to_bus[k]] for k in keep])
    series = 1.0 / (br.r_pu[keep] + 1j * br.x_pu[keep])
    end = series + 0.5j * br.b_pu[keep]
    ratio = br.tap[keep] * np.exp(1j * np.deg2rad(br.shift_deg[keep]))
    return f, t, end / np.abs(ratio) ** 2, -series / ratio.conj(), -series / ratio, end


def _gather(rows: Any, n: int) -> ca.DM:
    """The matrix that adds up what belongs to each bus."""
    rows = np.asarray(rows, dtype=int)
    return ca.DM.triplet(rows.tolist(), list(range(rows.size)), ca.DM.ones(rows.size), n, rows.size)


def solve(net: NetworkTables, limits: bool, lost: Iterable[str] = ()) -> Answer:
    """The nose with loads at constant power, all growing at their power factor; pick-up in proportion; taps locked.

    ``lost`` are branches out of service. The slack has no reactive limits. At most one unit stands on a bus.
    """
    n, base = len(net.buses.bus), net.base_mva
    number = {name: k for k, name in enumerate(net.buses.bus)}
    gens, loads, shunts = net.generators, net.loads, net.shunts
    units = [k for k in range(len(gens.bus)) if gens.status[k]]
    at = np.array([number[gens.bus[k]] for k in units])
    (slack,) = [i for i, k in enumerate(units) if gens.slack[k]]
    drawn = np.zeros(n, dtype=complex)
    for k, bus in enumerate(loads.bus):
        if loads.status[k]:
            drawn[number[bus]] += complex(loads.p_mw[k], loads.q_mvar[k]) / base
    given = gens.p_mw[units] / base
    share = np.where(np.arange(len(units)) == slack, 0.0, given)
    own = np.zeros(n, dtype=complex)
    for k, bus in enumerate(shunts.bus):
        if shunts.status[k]:
            own[number[bus]] += complex(shunts.g_mw[k], shunts.b_mvar[k]) / base

    th, v, loading = ca.SX.sym("th", n), ca.SX.sym("v", n), ca.SX.sym("loading")
    q, p_slack = ca.SX.sym("q", len(units)), ca.SX.sym("p_slack")
    f, t, y_ff, y_ft, y_tf, y_tt = _branches(net, lost)
    d, vf, vt = th[f.tolist()] - th[t.tolist()], v[f.tolist()], v[t.tolist()]
    cos, sin, both = ca.cos(d), ca.sin(d), vf * vt
    p_f = vf**2 * y_ff.real + both * (y_ft.real * cos + y_ft.imag * sin)
    q_f = -(vf**2) * y_ff.imag + both * (y_ft.real * sin - y_ft.imag * cos)
    p_t = vt**2 * y_tt.real + both * (y_tf.real * cos - y_tf.imag * sin)
    q_t = -(vt**2) * y_tt.imag - both * (y_tf.real * sin + y_tf.imag * cos)
    from_, to, unit = _gather(f, n), _gather(t, n), _gather(at, n)
    grown = 1.0 + loading
    supply = ca.DM(given) + ca.DM(share) * loading
    picked = ca.vertcat(supply[:slack], p_slack, supply[slack + 1 :])
    balance_p = from_ @ p_f + to @ p_t + v**2 * ca.DM(own.real) + ca.DM(drawn.real) * grown - unit @ picked
    balance_q = from_ @ q_f + to @ q_t - v**2 * ca.DM(own.imag) + ca.DM(drawn.imag) * grown - unit @ q

    low = gens.q_min_mvar[units] / base
    high = gens.q_max_mvar[units] / base
    limited = [i for i in range(len(units)) if limits and i != slack and np.isfinite(low[i]) and np.isfinite(high[i])]
    above, below = ca.SX.sym("above", len(limited)), ca.SX.sym("below", len(limited))
    held = v[at.tolist()] - ca.DM(gens.v_set_pu[units])
    rules = []
    for j, i in enumerate(limited):
        held[i] -= above[j] - below[j]
        rules += [above[j] * (q[i] - float(low[i])), below[j] * (float(high[i]) - q[i])]
    x = ca.vertcat(th, v, loading, q, p_slack, above, below)
    equal = ca.vertcat(balance_p, balance_q, held, th[int(at[slack])])
    programme = ca.nlpsol("nose", "ipopt", {"x": x, "f": -loading, "g": ca.vertcat(equal, *rules)}, OPTIONS)

    angle = np.deg2rad(net.buses.angle_deg)
    least = np.full(x.shape[0], -np.inf)
    most = np.full(x.shape[0], np.inf)
    least[n : 2 * n] = 0.05
    start = np.zeros(x.shape[0])
    start[:n], start[n : 2 * n] = angle - angle[at[slack]], net.buses.v_pu
    start[2 * n + 1 + len(units)] = given[slack]
    for i in limited:
        least[2 * n + 1 + i], most[2 * n + 1 + i] = low[i], high[i]
        start[2 * n + 1 + i] = 0.5 * (low[i] + high[i])
    least[2 * n + 2 + len(units) :] = 0.0
    zero = np.zeros(equal.shape[0])
    iterations, solved = 0, True
    found: dict[str, Any] = {"x": start}
    for relaxed in RELAXED if limited else FREE:
        found = programme(
            x0=found["x"],
            lbx=least,
            ubx=most,
            lbg=np.concatenate([zero, np.full(len(rules), -np.inf)]),
            ubg=np.concatenate([zero, np.full(len(rules), relaxed)]),
        )
        stats = programme.stats()
        iterations += int(stats["iter_count"])
        solved = bool(stats["success"])
    end = np.asarray(found["x"]).ravel()
    names = [gens.generator[k] for k in units]
    at_limit, corner = [], []
    for i in limited:
        if min(end[2 * n + 1 + i] - low[i], high[i] - end[2 * n + 1 + i]) < 1e-5 and high[i] > low[i]:
            at_limit.append(names[i])
            if abs(end[n + at[i]] - gens.v_set_pu[units[i]]) < 1e-5:
                corner.append(names[i])
    return Answer(float(end[2 * n]), end[n : 2 * n], tuple(at_limit), tuple(corner), solved, iterations)
