"""Which buses hang together, and which branches hold them together."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from compsize.study.records import Bools

__all__ = ["bridges", "components"]

Indices = NDArray[np.int64]


def _neighbours(size: int, ends: Indices) -> tuple[list[int], list[int], list[int]]:
    """Adjacency lists in one: of bus i, entries start[i] to start[i + 1] of (other bus, branch)."""
    count = len(ends)
    near = np.concatenate([ends[:, 0], ends[:, 1]])
    far = np.concatenate([ends[:, 1], ends[:, 0]])
    order = np.argsort(near, kind="stable")
    start = np.zeros(size + 1, dtype=np.int64)
    np.cumsum(np.bincount(near, minlength=size), out=start[1:])
    return start.tolist(), far[order].tolist(), (order % max(count, 1)).tolist()


def components(size: int, ends: Indices) -> Indices:
    """Number of the connected component of each of ``size`` buses, for branches ``ends`` (shape: m x 2)."""
    start, far, _ = _neighbours(size, ends)
    number = [-1] * size
    count = 0
    for root in range(size):
        if number[root] >= 0:
            continue
        number[root] = count
        stack = [root]
        while stack:
            bus = stack.pop()
            for at in range(start[bus], start[bus + 1]):
                other = far[at]
                if number[other] < 0:
                    number[other] = count
                    stack.append(other)
        count += 1
    return np.array(number, dtype=np.int64)


def bridges(size: int, ends: Indices) -> Bools:
    """True for each branch whose loss alone splits its component (shape: m).

    One depth-first walk with the lowest reachable visit number (Tarjan 1974,
    doi:10.1016/0020-0190(74)90003-9); parallel branches are told apart by their index.
    """
    start, far, branch = _neighbours(size, ends)
    visit = [-1] * size
    low = [0] * size
    upward = [-1] * size  # branch by which a bus was reached
    cursor = start[:-1].copy()
    found = np.zeros(len(ends), dtype=np.bool_)
    clock = 0
    for root in range(size):
        if visit[root] >= 0:
            continue
        visit[root] = low[root] = clock
        clock += 1
        path = [root]
        while path:
            bus = path[-1]
            if cursor[bus] < start[bus + 1]:
                at = cursor[bus]
                cursor[bus] += 1
                other = far[at]
                if branch[at] == upward[bus]:
                    continue
                if visit[other] >= 0:
                    low[bus] = min(low[bus], visit[other])
                else:
                    visit[other] = low[other] = clock
                    clock += 1
                    upward[other] = branch[at]
                    path.append(other)
            else:
                path.pop()
                if path:
                    parent = path[-1]
                    low[parent] = min(low[parent], low[bus])
                    if low[bus] > visit[parent]:
                        found[upward[bus]] = True
    return found
