"""The fill-reducing order and the pattern of the factors, made once per network.

A node is a bus (angle, magnitude) or a tap changer (a dummy, ratio): two unknowns and two rows. A held
voltage, a slack angle, a device at its limit, an outage or an added shunt changes values, never the
pattern, so all of this is computed once.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import csc_matrix
from scipy.sparse.linalg import splu

Ints = NDArray[np.int64]


class Pattern(NamedTuple):
    """Index arrays in elimination order. Rows of ``A`` are sorted; ``adiag`` is the diagonal's position.

    ``lidx`` holds the columns of row i of L (ascending), ``uidx`` those of U right of the diagonal.
    """

    aptr: Ints
    aidx: Ints
    adiag: Ints
    lptr: Ints
    lidx: Ints
    uptr: Ints
    uidx: Ints


def minimum_degree_order(count: int, rows: Ints, cols: Ints, last: Ints) -> Ints:
    """Order of ``count`` nodes: ``order[k]`` is the node eliminated k-th; the nodes of ``last`` come last.

    Minimum degree on the structure of A + A' (Liu 1985), as the general sparse LU of SciPy computes it.
    """
    i = np.concatenate([rows, cols, np.arange(count)])
    j = np.concatenate([cols, rows, np.arange(count)])
    data = np.concatenate([-np.ones(2 * rows.size), np.zeros(count)])
    matrix = csc_matrix((data, (i, j)), shape=(count, count))
    matrix.data[:] = np.where(matrix.data < 0, -1.0, matrix.data)
    degree = np.asarray(abs(matrix).sum(axis=0)).ravel()
    matrix.setdiag(degree + 1.0)
    lu = splu(matrix, permc_spec="MMD_AT_PLUS_A", diag_pivot_thresh=0.0, options={"SymmetricMode": True})
    order = np.argsort(lu.perm_c).astype(np.int64)
    if last.size:
        at_end = np.isin(order, last)
        order = np.concatenate([order[~at_end], order[at_end]])
    return order


def build_pattern(count: int, rows: Ints, cols: Ints) -> Pattern:
    """Pattern of A (symmetric, all diagonals) and of its factors, nodes already in elimination order."""
    i = np.concatenate([rows, cols, np.arange(count)])
    j = np.concatenate([cols, rows, np.arange(count)])
    keys = np.unique(i * count + j)
    ai, aj = keys // count, keys % count
    aptr = np.zeros(count + 1, dtype=np.int64)
    np.add.at(aptr, ai + 1, 1)
    aptr = np.cumsum(aptr)
    adiag = np.flatnonzero(ai == aj).astype(np.int64)
    # Columns of L by the elimination tree: struct(k) minus its first entry goes to the parent.
    below: list[set[int]] = [set() for _ in range(count)]
    for r, c in zip(ai.tolist(), aj.tolist(), strict=True):
        if r > c:
            below[c].add(r)
    columns: list[list[int]] = []
    for k in range(count):
        entries = below[k]
        columns.append(sorted(entries))
        if entries:
            parent = min(entries)
            below[parent] |= entries
            below[parent].discard(parent)
        below[k] = set()
    uptr = np.zeros(count + 1, dtype=np.int64)
    uptr[1:] = np.cumsum([len(c) for c in columns])
    uidx = np.fromiter((r for c in columns for r in c), dtype=np.int64, count=int(uptr[-1]))
    rows_of_l: list[list[int]] = [[] for _ in range(count)]
    for k, column in enumerate(columns):
        for r in column:
            rows_of_l[r].append(k)
    lptr = np.zeros(count + 1, dtype=np.int64)
    lptr[1:] = np.cumsum([len(r) for r in rows_of_l])
    lidx = np.fromiter((c for r in rows_of_l for c in r), dtype=np.int64, count=int(lptr[-1]))
    return Pattern(aptr, aj.astype(np.int64), adiag, lptr, lidx, uptr, uidx)
