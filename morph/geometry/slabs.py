"""Runs a compiled loop over slabs of independent items: progress and cancel between slabs, threads inside.

Slabs write disjoint rows and nothing is summed across them, so the result does not depend on the
number of threads.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Callable
from concurrent.futures import Future, ThreadPoolExecutor

from morph.core.progress import Progress


def run_slabs(stage: str, n_items: int, slab: int, work: Callable[[int, int], object], progress: Progress) -> None:
    """Calls `work(first, last)` for consecutive ranges of `slab` items until all `n_items` are done.

    Args:
        stage: name told to `progress` after each slab; what it raises stops the loop after the slabs that run.
        n_items: number of items.
        slab: items per call.
        work: writes the results of items first..last - 1; must release the interpreter lock to run side by side.
        progress: receives (stage, items done, n_items).
    """
    from morph.kernels.workers import worker_count

    ranges = deque((first, min(first + slab, n_items)) for first in range(0, n_items, slab))
    n_workers = min(worker_count(), len(ranges))
    if n_workers <= 1:
        for first, last in ranges:
            work(first, last)
            progress.step(stage, last, n_items)
        return
    running: deque[tuple[int, Future[object]]] = deque()
    with ThreadPoolExecutor(n_workers) as pool:
        while ranges or running:
            while ranges and len(running) < n_workers + 1:
                first, last = ranges.popleft()
                running.append((last, pool.submit(work, first, last)))
            last, future = running.popleft()
            future.result()
            progress.step(stage, last, n_items)
