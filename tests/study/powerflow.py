"""A small power flow of its own for the tests: dense complex admittances, Newton in polar form.

It follows the conventions of the interface and shares no code with the package.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from compsize.study.records import NetworkTables

Complex = NDArray[np.complex128]


def admittance(tables: NetworkTables) -> Complex:
    """Bus admittance matrix [pu], shunts included."""
    index = {bus: at for at, bus in enumerate(tables.buses.bus)}
    y = np.zeros((len(index), len(index)), dtype=complex)
    b = tables.branches
    for at in np.flatnonzero(b.status):
        i, j = index[b.from_bus[at]], index[b.to_bus[at]]
        series = 1 / (b.r_pu[at] + 1j * b.x_pu[at])
        ratio = b.tap[at] * np.exp(1j * np.radians(b.shift_deg[at]))
        y[i, i] += (series + 0.5j * b.b_pu[at]) / abs(ratio) ** 2
        y[j, j] += series + 0.5j * b.b_pu[at]
        y[i, j] -= series / np.conj(ratio)
        y[j, i] -= series / ratio
    s = tables.shunts
    for at in np.flatnonzero(s.status):
        i = index[s.bus[at]]
        y[i, i] += (s.g_mw[at] + 1j * s.b_mvar[at]) / tables.base_mva
    return y


def solve(tables: NetworkTables, q_limits: bool = True) -> tuple[Complex, NDArray[np.float64]]:
    """Voltages [pu] and Mvar of generation by bus."""
    index = {bus: at for at, bus in enumerate(tables.buses.bus)}
    size = len(index)
    y = admittance(tables)
    s = np.zeros(size, dtype=complex)
    loads, units = tables.loads, tables.generators
    low, high, held = np.zeros(size), np.zeros(size), np.full(size, np.nan)
    slack = -1
    for at in np.flatnonzero(units.status):
        i = index[units.bus[at]]
        s[i] += units.p_mw[at] / tables.base_mva
        low[i] += units.q_min_mvar[at] / tables.base_mva
        high[i] += units.q_max_mvar[at] / tables.base_mva
        held[i] = units.v_set_pu[at]
        slack = i if units.slack[at] else slack
    angle = np.radians(np.nan_to_num(tables.buses.angle_deg))
    size_v = np.where(np.isnan(held), np.nan_to_num(tables.buses.v_pu, nan=1.0), held)
    fixed = ~np.isnan(held) & (low == high)  # a unit of fixed Mvar holds no voltage
    fixed[slack] = False
    extra = np.where(fixed, low, 0.0)
    for _ in range(100):
        pv = ~np.isnan(held) & ~fixed
        pv[slack] = True
        size_v = np.where(pv, held, size_v)
        drawn = np.zeros(size, dtype=complex)
        for at in np.flatnonzero(loads.status):
            i = index[loads.bus[at]]
            z, c = loads.z_share_pct[at] / 100, loads.i_share_pct[at] / 100
            mix = z * size_v[i] ** 2 + c * size_v[i] + 1 - z - c
            drawn[i] += mix * (loads.p_mw[at] + 1j * loads.q_mvar[at]) / tables.base_mva
        v = newton(y, s - drawn + 1j * extra, size_v * np.exp(1j * angle), slack, pv)
        change = np.abs(np.abs(v) - size_v).max()
        angle, size_v = np.angle(v), np.abs(v)
        if change > 1e-9:
            continue
        q = (v * np.conj(y @ v)).imag + drawn.imag
        over = pv & ((q > high + 1e-9) | (q < low - 1e-9))
        over[slack] = False
        if not q_limits or not over.any():
            return v, q * tables.base_mva
        extra = np.where(over, np.clip(q, low, high), extra)
        fixed |= over
    raise AssertionError("the limits of the test power flow did not settle")


def newton(y: Complex, s: Complex, v: Complex, slack: int, pv: NDArray[np.bool_]) -> Complex:
    """Voltages at which the injections are ``s``, magnitudes held where ``pv``, angle held at ``slack``."""
    angles = np.array([at for at in range(len(v)) if at != slack])
    sizes = np.flatnonzero(~pv)
    for _ in range(40):
        current = y @ v
        mismatch = v * np.conj(current) - s
        f = np.concatenate([mismatch.real[angles], mismatch.imag[sizes]])
        if np.abs(f).max() < 1e-9:
            return v
        unit = v / np.abs(v)
        by_angle = 1j * np.diag(v) @ np.conj(np.diag(current) - y @ np.diag(v))
        by_size = np.diag(v) @ np.conj(y @ np.diag(unit)) + np.diag(np.conj(current) * unit)
        jacobian = np.block(
            [
                [by_angle.real[np.ix_(angles, angles)], by_size.real[np.ix_(angles, sizes)]],
                [by_angle.imag[np.ix_(sizes, angles)], by_size.imag[np.ix_(sizes, sizes)]],
            ]
        )
        step = np.linalg.solve(jacobian, -f)
        angle, size = np.angle(v), np.abs(v)
        angle[angles] += step[: len(angles)]
        size[sizes] += step[len(angles) :]
        v = size * np.exp(1j * angle)
    raise AssertionError("the test power flow did not converge")
