"""First and second derivatives of the equations against central differences, row by row, with every kind of device."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from nose_cases import of_everything
from numpy.typing import NDArray
from verify_networks import everything

from compsize.flow.equations import DEAD, State, factorise, loading_column, new_state, reactive_slope, residual
from compsize.flow.lu import new_factors, solve, solve_transposed
from compsize.flow.second import live_weights, pulled_back, second_along
from compsize.network.cases import CaseModel, build_case
from compsize.network.grid import Grid, build_grid
from compsize.nose.newton import floating, floating_slope

Floats = NDArray[np.float64]

CASES = {
    "whole": ("moving", ()),
    "locked": ("locked", ()),
    "line out": ("moving", (("branch", "2"),)),
    "cut off": ("moving", (("branch", "7"),)),
    "tap changer out": ("moving", (("branch", "6"),)),
}


class Point:
    """A random state of a case with random segments in force, and its equations as a function of one vector."""

    def __init__(self, which: str, seed: int) -> None:
        taps, lost = CASES[which]
        self.grid: Grid = build_grid(of_everything(), everything(of_everything(), taps=taps))
        self.model: CaseModel = build_case(self.grid, lost)
        rng = np.random.default_rng(seed)
        n = self.grid.count
        self.x = np.empty(2 * n)
        self.x[0::2] = rng.normal(0.0, 0.2, n)
        self.x[1::2] = rng.uniform(0.85, 1.1, n)
        self.lam = 0.3
        lengths = np.diff(self.model.case.segptr)
        self.seg = np.where(lengths > 0, rng.integers(0, np.maximum(lengths, 1)), -1)
        self.y, self.w = rng.normal(size=2 * n), rng.normal(size=2 * n)
        self.dlam = 0.7
        self.alive = (self.model.case.role & DEAD) == 0
        self.state: State = new_state(n, self.grid.tap_branches.size)

    @property
    def parts(self) -> tuple[Any, Any, State]:
        return self.grid.pattern, self.model.case, self.state

    def rows(self, x: Floats, lam: float, balance: bool = False) -> Floats:
        """Rows at a state; ``balance``: the reactive balance also where the row holds a voltage."""
        self.state.th[:], self.state.v[:], self.state.seg[:] = x[0::2], x[1::2], self.seg
        out = np.zeros(x.size)
        residual(*self.parts, lam, 0, out)
        if balance:
            for i in range(x.size // 2):
                s = self.model.case.segptr[i] + self.seg[i]
                if self.seg[i] >= 0 and self.model.case.hold[s] and self.model.case.tapof[i] < 0 and self.alive[i]:
                    out[2 * i + 1] = self.state.qdev[i]
        return out

    def jacobian(self, h: float = 1e-6) -> Floats:
        """Derivative of the rows by central differences; identity where a row is without content."""
        n = self.x.size
        out = np.empty((n, n))
        for k in range(n):
            step = np.zeros(n)
            step[k] = h
            out[:, k] = (self.rows(self.x + step, self.lam) - self.rows(self.x - step, self.lam)) / (2.0 * h)
        for k in range(n):
            if not out[k].any():
                # A slack angle, the dummy of a tap changer, both rows of a bus that is cut off.
                out[k, k] = 1.0
        return out

    def inverse(self, pin: int = -1, alpha: float = 0.0) -> tuple[Floats, Floats, float]:
        """Columns of the inverse and of its transpose by the factors, and the sign of the determinant."""
        factors = new_factors(self.grid.pattern)
        self.rows(self.x, self.lam)
        sign = factorise(*self.parts, self.lam, factors, pin, alpha)
        n = self.x.size
        one, other = np.eye(n), np.eye(n)
        for k in range(n):
            for columns, kernel in ((one, solve), (other, solve_transposed)):
                column = columns[:, k].copy()
                kernel(self.grid.pattern, factors, column)
                columns[:, k] = column
        return one, other, sign


SEEDS = range(4)


@pytest.mark.parametrize("which", list(CASES))
@pytest.mark.parametrize("seed", SEEDS)
def test_jacobian(which: str, seed: int) -> None:
    """The factors are those of the Jacobian by differences, solves with its transpose too, and its sign is right."""
    point = Point(which, seed)
    exact = point.jacobian()
    inverse, turned, sign = point.inverse()
    assert np.linalg.inv(inverse) == pytest.approx(exact, abs=2e-7)
    assert turned == pytest.approx(inverse.T, rel=1e-9, abs=1e-9)
    assert sign == np.sign(np.linalg.det(exact))


@pytest.mark.parametrize("seed", SEEDS)
def test_pinned_entry(seed: int) -> None:
    """``alpha`` is added to the entry (reactive row, magnitude) of the pinned bus and nowhere else."""
    point = Point("whole", seed)
    pin = next(i for i in range(point.grid.count) if point.seg[i] < 0)
    plain, _, _ = point.inverse()
    pinned, _, _ = point.inverse(pin, 3.0)
    change = np.linalg.inv(pinned) - np.linalg.inv(plain)
    expected = np.zeros_like(change)
    expected[2 * pin + 1, 2 * pin + 1] = 3.0
    assert change == pytest.approx(expected, abs=1e-7)


@pytest.mark.parametrize("which", list(CASES))
@pytest.mark.parametrize("seed", SEEDS)
def test_loading_column(which: str, seed: int) -> None:
    """The derivative of the rows by the loading, which enters them linearly."""
    point = Point(which, seed)
    difference = point.rows(point.x, point.lam + 0.5) - point.rows(point.x, point.lam - 0.5)
    point.rows(point.x, point.lam)
    out = np.zeros(point.x.size)
    loading_column(point.model.case, point.state, 0, out)
    assert out == pytest.approx(difference, abs=1e-12)
    assert np.abs(out).max() > 0.1


@pytest.mark.parametrize("which", list(CASES))
@pytest.mark.parametrize("seed", SEEDS)
def test_slopes_of_what_floats(which: str, seed: int) -> None:
    """Derivatives of the reactive demand of every live bus, and of what floats at every device, along a direction."""
    point = Point(which, seed)
    h = 1e-6

    def values(t: float) -> tuple[Floats, Floats]:
        point.rows(point.x + t * point.y, point.lam + t * point.dlam)
        dev = point.model.case.dev
        return point.state.qdev.copy(), np.array([floating(point.model.case, point.state, i) for i in dev])

    up, down = values(h), values(-h)
    point.rows(point.x, point.lam)
    for i in range(point.grid.count):
        if point.alive[i] and point.model.case.tapof[i] < 0:
            slope = reactive_slope(*point.parts, point.lam, i, point.y, point.dlam)
            assert slope == pytest.approx((up[0][i] - down[0][i]) / (2.0 * h), abs=1e-7), i
    assert point.model.case.dev.size >= 3
    for m, i in enumerate(point.model.case.dev):
        slope = floating_slope(*point.parts, point.lam, i, point.y, point.dlam)
        assert slope == pytest.approx((up[1][m] - down[1][m]) / (2.0 * h), abs=1e-7), i


@pytest.mark.parametrize("which", list(CASES))
@pytest.mark.parametrize("seed", SEEDS)
def test_second_derivative_along_a_direction(which: str, seed: int) -> None:
    """F_xx[y, y] + 2 F_x,loading y dlam by second differences, the balance taken where the row holds a voltage."""
    point = Point(which, seed)
    h = 3e-4

    def rows(t: float) -> Floats:
        return point.rows(point.x + t * point.y, point.lam + t * point.dlam, balance=True)

    # Fourth order, so that rounding and truncation are both small.
    here = (16.0 * (rows(h) + rows(-h)) - rows(2.0 * h) - rows(-2.0 * h) - 30.0 * rows(0.0)) / (12.0 * h * h)
    point.rows(point.x, point.lam)
    out = np.zeros(point.x.size)
    second_along(*point.parts, point.lam, point.y, point.dlam, out)
    assert out == pytest.approx(here, abs=3e-6 * max(1.0, float(np.abs(here).max())))
    assert np.abs(out).max() > 1.0


@pytest.mark.parametrize("which", list(CASES))
@pytest.mark.parametrize("seed", SEEDS)
def test_gradient_of_weighted_rows(which: str, seed: int) -> None:
    """The gradient of w' J(x) y by x and its derivative by the loading, against differences of w' F."""
    point = Point(which, seed)
    point.rows(point.x, point.lam)
    w = point.w.copy()
    live_weights(point.model.case, point.state, w)
    h = 2e-4

    def along(x: Floats, lam: float) -> float:
        # w' J y by a fourth-order difference along y.
        def f(t: float) -> float:
            return float(w @ point.rows(x + t * point.y, lam))

        return (8.0 * (f(h) - f(-h)) - f(2.0 * h) + f(-2.0 * h)) / (12.0 * h)

    expected = np.empty(point.x.size)
    for k in range(point.x.size):
        step = np.zeros(point.x.size)
        step[k] = 1e-4
        expected[k] = (along(point.x + step, point.lam) - along(point.x - step, point.lam)) / 2e-4
    by_loading = along(point.x, point.lam + 0.5) - along(point.x, point.lam - 0.5)
    point.rows(point.x, point.lam)
    out = np.zeros(point.x.size)
    found = pulled_back(*point.parts, point.lam, w, point.y, out)
    scale = max(1.0, float(np.abs(expected).max()))
    assert out == pytest.approx(expected, abs=1e-6 * scale)
    assert found == pytest.approx(by_loading, abs=1e-8 * scale)
    assert np.abs(out).max() > 1.0


@pytest.mark.parametrize("seed", SEEDS)
def test_weights_of_replaced_rows(seed: int) -> None:
    """Weights of a slack angle, a held voltage, a tap changer and a bus that is cut off become zero, others stay."""
    point = Point("cut off", seed)
    point.rows(point.x, point.lam)
    w = np.ones(point.x.size)
    live_weights(point.model.case, point.state, w)
    for i in range(point.grid.count):
        held = point.seg[i] >= 0 and point.model.case.hold[point.model.case.segptr[i] + point.seg[i]]
        replaced = not point.alive[i] or point.model.case.tapof[i] >= 0
        slack = bool(point.model.case.role[i] & 1)
        assert w[2 * i] == float(not (replaced or slack))
        assert w[2 * i + 1] == float(not (replaced or held))
