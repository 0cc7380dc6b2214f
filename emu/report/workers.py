"""Spread blocks of work over processes, and hand back results as they come."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import ProcessPoolExecutor, as_completed
from contextlib import contextmanager
from typing import TypeVar

from emu.processes import one_core_processes

__all__ = ["Pool", "opened_pool"]

Job = TypeVar("Job")
Result = TypeVar("Result")


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
    """Give a pool whose processes end with the block.

    Args:
        workers: number of processes; 1 means to work in this one.
    """
    if workers <= 1:
        yield Pool(None)
        return
    with one_core_processes(workers) as executor:
        yield Pool(executor)
