"""Many independent evaluations on a few threads: the compiled kernels release the interpreter lock."""

from __future__ import annotations

import os
from collections.abc import Callable, Iterable
from concurrent.futures import ThreadPoolExecutor
from typing import TypeVar

Item = TypeVar("Item")
Outcome = TypeVar("Outcome")


def default_workers() -> int:
    """Threads used when none are named: the processors this process may use."""
    return max(1, len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1)


def run_all(
    task: Callable[[Item], Outcome],
    items: Iterable[Item],
    workers: int,
    done: Callable[[int], None] | None = None,
) -> list[Outcome]:
    """``task`` of every item, in the order of the items whatever the number of workers.

    ``done`` is told after each finished item how many are finished.
    """
    todo = list(items)
    results: list[Outcome] = []
    if workers <= 1 or len(todo) <= 1:
        for item in todo:
            results.append(task(item))
            if done is not None:
                done(len(results))
        return results
    with ThreadPoolExecutor(max_workers=workers) as pool:
        for outcome in pool.map(task, todo):
            results.append(outcome)
            if done is not None:
                done(len(results))
    return results
