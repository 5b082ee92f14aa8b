"""LU factors in 2x2 blocks on a fixed pattern, and the solves with them.

Row-wise elimination with diagonal blocks as pivots, in the order of :mod:`compsize.flow.pattern`
(Duff, Erisman and Reid, Direct Methods for Sparse Matrices, ch. 10: static pattern, numerical values
only). A block is four numbers [a, b, c, d] for [[a, b], [c, d]].
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from compsize.flow.jit import kernel
from compsize.flow.pattern import Pattern

Floats = NDArray[np.float64]


class Factors(NamedTuple):
    """Values of L (unit diagonal), U (right of the diagonal), inverted pivots, and a row of workspace."""

    lower: Floats
    upper: Floats
    pivot: Floats
    row: Floats


def new_factors(pattern: Pattern) -> Factors:
    count = pattern.aptr.size - 1
    return Factors(
        np.zeros((pattern.lidx.size, 4)),
        np.zeros((pattern.uidx.size, 4)),
        np.zeros((count, 4)),
        np.zeros((count, 4)),
    )


@kernel
def copy_into(target, source):  # type: ignore[no-untyped-def]
    """target := source, element by element (a slice assignment costs seconds of compilation)."""
    for i in range(target.size):
        target[i] = source[i]


@kernel
def clear(target):  # type: ignore[no-untyped-def]
    """target := 0."""
    for i in range(target.size):
        target[i] = 0.0


@kernel
def eliminate_row(i, pattern, factors):  # type: ignore[no-untyped-def]
    """Eliminate row ``i``, whose blocks stand in ``factors.row``; the sign of its pivot's determinant (0: singular).

    The workspace row must be zero elsewhere on the row's fill; it is left holding used values.
    """
    lower, upper, pivot, row = factors
    for p in range(pattern.lptr[i], pattern.lptr[i + 1]):
        k = pattern.lidx[p]
        a, b, c, d = row[k, 0], row[k, 1], row[k, 2], row[k, 3]
        la = a * pivot[k, 0] + b * pivot[k, 2]
        lb = a * pivot[k, 1] + b * pivot[k, 3]
        lc = c * pivot[k, 0] + d * pivot[k, 2]
        ld = c * pivot[k, 1] + d * pivot[k, 3]
        lower[p, 0], lower[p, 1], lower[p, 2], lower[p, 3] = la, lb, lc, ld
        for q in range(pattern.uptr[k], pattern.uptr[k + 1]):
            j = pattern.uidx[q]
            ua, ub, uc, ud = upper[q, 0], upper[q, 1], upper[q, 2], upper[q, 3]
            row[j, 0] -= la * ua + lb * uc
            row[j, 1] -= la * ub + lb * ud
            row[j, 2] -= lc * ua + ld * uc
            row[j, 3] -= lc * ub + ld * ud
    a, b, c, d = row[i, 0], row[i, 1], row[i, 2], row[i, 3]
    det = a * d - b * c
    if det == 0.0 or not np.isfinite(det):
        return 0.0
    inv = 1.0 / det
    pivot[i, 0], pivot[i, 1], pivot[i, 2], pivot[i, 3] = d * inv, -b * inv, -c * inv, a * inv
    for q in range(pattern.uptr[i], pattern.uptr[i + 1]):
        j = pattern.uidx[q]
        upper[q, 0], upper[q, 1], upper[q, 2], upper[q, 3] = row[j, 0], row[j, 1], row[j, 2], row[j, 3]
    return 1.0 if det > 0.0 else -1.0


@kernel
def solve(pattern, factors, rhs):  # type: ignore[no-untyped-def]
    """Overwrite ``rhs`` (2 per node) with A^-1 rhs."""
    lower, upper, pivot, _ = factors
    count = pattern.aptr.size - 1
    for i in range(count):
        x, y = rhs[2 * i], rhs[2 * i + 1]
        for p in range(pattern.lptr[i], pattern.lptr[i + 1]):
            k = 2 * pattern.lidx[p]
            x -= lower[p, 0] * rhs[k] + lower[p, 1] * rhs[k + 1]
            y -= lower[p, 2] * rhs[k] + lower[p, 3] * rhs[k + 1]
        rhs[2 * i], rhs[2 * i + 1] = x, y
    for i in range(count - 1, -1, -1):
        x, y = rhs[2 * i], rhs[2 * i + 1]
        for q in range(pattern.uptr[i], pattern.uptr[i + 1]):
            j = 2 * pattern.uidx[q]
            x -= upper[q, 0] * rhs[j] + upper[q, 1] * rhs[j + 1]
            y -= upper[q, 2] * rhs[j] + upper[q, 3] * rhs[j + 1]
        rhs[2 * i] = pivot[i, 0] * x + pivot[i, 1] * y
        rhs[2 * i + 1] = pivot[i, 2] * x + pivot[i, 3] * y


@kernel
def solve_transposed(pattern, factors, rhs):  # type: ignore[no-untyped-def]
    """Overwrite ``rhs`` (2 per node) with A^-T rhs."""
    lower, upper, pivot, _ = factors
    count = pattern.aptr.size - 1
    for i in range(count):
        r, s = rhs[2 * i], rhs[2 * i + 1]
        x = pivot[i, 0] * r + pivot[i, 2] * s
        y = pivot[i, 1] * r + pivot[i, 3] * s
        rhs[2 * i], rhs[2 * i + 1] = x, y
        for q in range(pattern.uptr[i], pattern.uptr[i + 1]):
            j = 2 * pattern.uidx[q]
            rhs[j] -= upper[q, 0] * x + upper[q, 2] * y
            rhs[j + 1] -= upper[q, 1] * x + upper[q, 3] * y
    for i in range(count - 1, -1, -1):
        x, y = rhs[2 * i], rhs[2 * i + 1]
        for p in range(pattern.lptr[i], pattern.lptr[i + 1]):
            k = 2 * pattern.lidx[p]
            rhs[k] -= lower[p, 0] * x + lower[p, 2] * y
            rhs[k + 1] -= lower[p, 1] * x + lower[p, 3] * y
