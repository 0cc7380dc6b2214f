"""Processes that each compute on one core and never outlive the one that started them."""

from __future__ import annotations

import multiprocessing
import os
import threading
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import ProcessPoolExecutor
from contextlib import contextmanager
from multiprocessing.connection import wait
from typing import TypeVar

__all__ = ["in_processes", "one_core_processes"]

Item = TypeVar("Item")
Result = TypeVar("Result")

# Each process computes on one core: threads of several processes would only wait for each other.
_ONE_THREAD = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "NUMBA_NUM_THREADS")


@contextmanager
def one_core_processes(workers: int) -> Iterator[ProcessPoolExecutor]:
    """Start worker processes, and stop them however the work ends.

    They are spawned, not forked: a fork of a process that has used threads may hang.

    Args:
        workers: number of processes.
    """
    before = {name: os.environ.get(name) for name in _ONE_THREAD}
    os.environ.update(dict.fromkeys(_ONE_THREAD, "1"))
    context = multiprocessing.get_context("spawn")
    executor = ProcessPoolExecutor(workers, mp_context=context, initializer=_follow_parent)
    try:
        yield executor
    finally:
        executor.shutdown(wait=True, cancel_futures=True)
        for name, value in before.items():
            if value is None:
                os.environ.pop(name, None)
            else:
                os.environ[name] = value


def in_processes(work: Callable[[Item], Result], items: Sequence[Item], workers: int) -> Iterator[Result]:
    """Yield the results in order.

    Args:
        work: picklable where workers > 1.
        items: what it is applied to.
        workers: number of processes; 1 works in this one.
    """
    if workers <= 1 or len(items) <= 1:
        yield from map(work, items)
        return
    with one_core_processes(workers) as executor:
        yield from executor.map(work, items)


def _follow_parent() -> None:
    """End this process when the one that started it has gone, even by a kill that nobody can catch."""
    parent = multiprocessing.parent_process()
    if parent is None:
        return

    def watch() -> None:
        wait([parent.sentinel])
        os._exit(1)

    threading.Thread(target=watch, daemon=True).start()
