"""Spread work over processes that never outlive their parent."""

import multiprocessing
import os
import threading
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import ProcessPoolExecutor
from contextlib import contextmanager
from multiprocessing.connection import wait
from typing import TypeVar

__all__ = ["in_processes"]

Item = TypeVar("Item")
Result = TypeVar("Result")
_THREADS = ("OMP_NUM_THREADS", "NUMBA_NUM_THREADS", "MKL_NUM_THREADS", "OPENBLAS_NUM_THREADS")


def in_processes(work: Callable[[Item], Result], items: Sequence[Item], workers: int) -> Iterator[Result]:
    """Yield the results in order.

    Args:
        work: picklable where workers > 1.
        items: what it is applied to.
        workers: processes, each with one thread; 1 works in this process.
    """
    if workers <= 1 or len(items) <= 1:
        yield from map(work, items)
        return
    context = multiprocessing.get_context("spawn")
    with _one_thread(), ProcessPoolExecutor(workers, context, initializer=_follow_parent) as pool:
        yield from pool.map(work, items)


@contextmanager
def _one_thread() -> Iterator[None]:
    """Give child processes one thread each; libraries read this when they are first imported."""
    before = {name: os.environ.get(name) for name in _THREADS}
    os.environ.update(dict.fromkeys(_THREADS, "1"))
    try:
        yield
    finally:
        for name, value in before.items():
            if value is None:
                del os.environ[name]
            else:
                os.environ[name] = value


def _follow_parent() -> None:
    """End this process when its parent has gone, killed ones included."""
    parent = multiprocessing.parent_process()
    if parent is None:
        return

    def watch() -> None:
        wait([parent.sentinel])
        os._exit(1)

    threading.Thread(target=watch, daemon=True).start()
