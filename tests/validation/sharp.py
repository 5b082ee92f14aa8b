"""Noses of two and three buses with 50 digits: the equations and the condition of a nose solved together.

A fold is F(x, p) = 0 with det J(x, p) = 0, J the Jacobian of F by x; a corner is F = 0 with both equations of the
device that reaches its limit. J is written out in polar form, so that nothing is differenced but the determinant.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

from mpmath import mp, mpc, mpf, workdps

DIGITS = 50


@dataclass(frozen=True)
class Load:
    """P [pu] at the nose, and the voltage [pu] there."""

    p: mpf
    v: mpf


@dataclass(frozen=True)
class Chain:
    """A source of ``e`` [pu], then buses in a row; the last one has the load that grows.

    ``z`` [pu] are the impedances, one per bus; ``y`` the shunt susceptances [pu] at the buses; ``injected`` what units
    give there [pu, constant]; ``ratio`` is Q / P of the load.
    """

    e: float
    z: tuple[complex, ...]
    y: tuple[float, ...]
    ratio: float = 0.0
    injected: tuple[complex, ...] = ()

    @property
    def n(self) -> int:
        return len(self.z)


def number(value: float) -> mpf:
    """A decimal number as it is written (0.1 is one tenth)."""
    return mpf(repr(value))


def _turn(angle: mpf) -> mpc:
    return mpc(mp.cos(angle), mp.sin(angle))


def _admittance(chain: Chain) -> tuple[list[list[mpc]], list[mpc]]:
    """Admittances between the buses behind the source, and those to the source."""
    n = chain.n
    y = [[mpc(0)] * n for _ in range(n)]
    for k, z in enumerate(chain.z):
        series = 1 / mpc(number(z.real), number(z.imag))
        y[k][k] += series + mpc(0, number(chain.y[k]))
        if k:
            y[k - 1][k - 1] += series
            y[k][k - 1] -= series
            y[k - 1][k] -= series
    first = 1 / mpc(number(chain.z[0].real), number(chain.z[0].imag))
    return y, [-first, *[mpc(0)] * (n - 1)]


def _state(chain: Chain, x: Sequence[mpf], p: mpf) -> tuple[list[mpf], list[list[mpf]]]:
    """Mismatch of P and Q at every bus, and its derivatives by angles and magnitudes."""
    n = chain.n
    y, source = _admittance(chain)
    v = [x[n + k] * _turn(x[k]) for k in range(n)]
    current = [sum((y[i][k] * v[k] for k in range(n)), mpc(0)) + source[i] * number(chain.e) for i in range(n)]
    s = [v[i] * mp.conj(current[i]) for i in range(n)]
    for i, given in enumerate(chain.injected):
        s[i] -= mpc(number(given.real), number(given.imag))
    s[n - 1] += p * mpc(1, number(chain.ratio))
    jacobian = [[mpf(0)] * (2 * n) for _ in range(2 * n)]
    for i in range(n):
        for k in range(n):
            by_angle = -mpc(0, 1) * v[i] * mp.conj(y[i][k] * v[k])
            by_size = v[i] * mp.conj(y[i][k] * _turn(x[k]))
            if i == k:
                by_angle += mpc(0, 1) * v[i] * mp.conj(current[i])
                by_size += _turn(x[i]) * mp.conj(current[i])
            jacobian[i][k], jacobian[n + i][k] = by_angle.real, by_angle.imag
            jacobian[i][n + k], jacobian[n + i][n + k] = by_size.real, by_size.imag
    return [value.real for value in s] + [value.imag for value in s], jacobian


def _root(function: Callable[..., list[mpf]], start: Sequence[float]) -> list[mpf]:
    found = mp.findroot(function, [mpf(value) for value in start], tol=mpf(10) ** (-2 * DIGITS), maxsteps=100)
    return [found[k] for k in range(len(start))]


def fold(chain: Chain, start: Sequence[float]) -> Load:
    """The fold near ``start``: angles, magnitudes, P."""
    with workdps(2 * DIGITS):

        def conditions(*z: mpf) -> list[mpf]:
            mismatch, jacobian = _state(chain, z[:-1], z[-1])
            return [*mismatch, mp.det(mp.matrix(jacobian))]

        z = _root(conditions, start)
        return Load(z[-1], z[-2])


def fold_of_held(chain: Chain, held: int, v_set: float, start: Sequence[float]) -> Load:
    """The fold with the magnitude at bus ``held`` fixed by whatever Q that takes; ``start``: as before, then that Q."""
    with workdps(2 * DIGITS):
        n = chain.n

        def conditions(*z: mpf) -> list[mpf]:
            mismatch, jacobian = _state(chain, z[:-2], z[-2])
            mismatch[n + held] -= z[-1]
            keep = [k for k in range(2 * n) if k != n + held]
            inner = mp.matrix([[jacobian[i][k] for k in keep] for i in keep])
            return [*mismatch, z[n + held] - number(v_set), mp.det(inner)]

        z = _root(conditions, start)
        return Load(z[-2], z[2 * n - 1])


def corner(chain: Chain, held: int, v_set: float, start: Sequence[float]) -> Load:
    """The point where what ``chain`` has at bus ``held`` (a device at its limit) just gives the set-point there."""
    with workdps(2 * DIGITS):

        def conditions(*z: mpf) -> list[mpf]:
            mismatch, _ = _state(chain, z[:-1], z[-1])
            return [*mismatch, z[chain.n + held] - number(v_set)]

        z = _root(conditions, start)
        return Load(z[-1], z[-2])
