"""Run compiled work in threads: ordered results, stoppable, the same for any number of workers."""

from __future__ import annotations

import os
from collections.abc import Callable, Iterable, Iterator
from concurrent.futures import FIRST_COMPLETED, Future, ThreadPoolExecutor, wait
from typing import TypeVar

from geoclust.errors import not_allowed

Task = TypeVar("Task")
Result = TypeVar("Result")


def worker_count(workers: int | None = None) -> int:
    """Number of threads to use: as asked, or one for each core this process may use."""
    if workers is None:
        if hasattr(os, "sched_getaffinity"):
            return max(1, len(os.sched_getaffinity(0)))
        return os.cpu_count() or 1
    if workers < 1:
        raise not_allowed("workers", "a positive whole number", workers)
    return int(workers)


def in_order(
    work: Callable[[Task], Result], tasks: Iterable[Task], workers: int | None = None
) -> Iterator[Result]:
    """Yield `work(task)` for every task, in the order of the tasks.

    The work is expected to spend its time in compiled loops that release the
    interpreter lock, in portions well below a second: an interrupt is obeyed
    between two portions, and work not yet begun is dropped.

    Parameters
    ----------
    work
        Called once a task, in any thread.
    tasks
        Read lazily, a few ahead of the results.
    workers
        Number of threads; one a core if not given.
    """
    count = worker_count(workers)
    if count == 1:
        for task in tasks:
            yield work(task)
        return
    pool = ThreadPoolExecutor(count, thread_name_prefix="geoclust")
    ahead: dict[int, Future[Result]] = {}
    due = 0
    issued = 0
    source = iter(tasks)
    exhausted = False
    try:
        while True:
            while not exhausted and len(ahead) < 4 * count:
                try:
                    task = next(source)
                except StopIteration:
                    exhausted = True
                    break
                ahead[issued] = pool.submit(work, task)
                issued += 1
            if not ahead:
                return
            # a wait with a time limit lets the main thread see an interrupt
            while due not in ahead or not ahead[due].done():
                wait([ahead[due]], timeout=0.2, return_when=FIRST_COMPLETED)
            yield ahead.pop(due).result()
            due += 1
    finally:
        pool.shutdown(wait=True, cancel_futures=True)
