"""Spread blocks of work over processes, and hand back results as they come."""

from __future__ import annotations

import multiprocessing
import os
import threading
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import ProcessPoolExecutor, as_completed
from contextlib import contextmanager
from multiprocessing.connection import wait
from typing import TypeVar

__all__ = ["Pool", "opened_pool"]

Job = TypeVar("Job")
Result = TypeVar("Result")

# Each process computes on one core: threads of several processes would only wait for each other.
_ONE_THREAD = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "NUMBA_NUM_THREADS")


class Pool:
    """Run functions on jobs, in this process or in others.

    Args:
        executor: other processes, or None to work in this one.
    """

    def __init__(self, executor: ProcessPoolExecutor | None) -> None:
        self.executor = executor

    def run(self, function: Callable[[Job], Result], jobs: Sequence[Job]) -> Iterator[tuple[int, Result]]:
        """Yield the place of each job with its result, as soon as it is there.

        Args:
            function: a function of a module, that other processes can import.
            jobs: its arguments.
        """
        if self.executor is None:
            yield from ((place, function(job)) for place, job in enumerate(jobs))
            return
        places = {self.executor.submit(function, job): place for place, job in enumerate(jobs)}
        for future in as_completed(places):
            yield places.pop(future), future.result()


@contextmanager
def opened_pool(workers: int) -> Iterator[Pool]:
    """Start worker processes, and stop them however the work ends.

    They are spawned, not forked: a fork of a process that has used threads may hang.

    Args:
        workers: number of processes; 1 means to work in this one.
    """
    if workers <= 1:
        yield Pool(None)
        return
    before = {name: os.environ.get(name) for name in _ONE_THREAD}
    os.environ.update(dict.fromkeys(_ONE_THREAD, "1"))
    context = multiprocessing.get_context("spawn")
    executor = ProcessPoolExecutor(workers, mp_context=context, initializer=_follow_parent)
    try:
        yield Pool(executor)
    finally:
        executor.shutdown(wait=True, cancel_futures=True)
        for name, value in before.items():
            if value is None:
                os.environ.pop(name, None)
            else:
                os.environ[name] = value


def _follow_parent() -> None:
    """End this process when the one that started it has gone, even by a kill that nobody can catch."""
    parent = multiprocessing.parent_process()
    if parent is None:
        return

    def watch() -> None:
        wait([parent.sentinel])
        os._exit(1)

    threading.Thread(target=watch, daemon=True).start()
