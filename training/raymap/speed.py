"""How fast ray maps are: CPU time a ray in batches, all in one run."""

from __future__ import annotations

import os
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from emu.raymap.base import RayMap
from emu.raymap.exact import ExactRays
from emu.raymap.learned import LearnedRays
from training.raymap.labels import Places

__all__ = ["Speed", "batch_time", "best_time", "measure_speed", "scalar_time"]

_BATCH = 20_000
_REPEATS = 9
# The exact solve is compiled anew with one lane: a scalar solve of the same equations to the same tolerance.
_SCALAR = """
import emu.spacetime.equations as equations
equations.LANES = 1
from emu.raymap.exact import ExactRays
from training.raymap.points import random_places
from training.raymap.speed import batch_time
print(batch_time(ExactRays(), random_places({count}, {seed}, 0.95, 3.0, 60.0), 0))
"""


@dataclass(frozen=True)
class Speed:
    """Hold CPU microseconds a ray: learned with its fallback, exact in lanes, exact with one lane.

    Args:
        warm: exact in lanes from starts that are the solution already, the best case of a neighbour's start.
    """

    learned: float
    exact: float
    warm: float
    scalar: float


def best_time(work: Callable[[], object]) -> float:
    """Return the least CPU seconds of several runs: other work on the machine only adds."""
    work()
    times = []
    for _ in range(_REPEATS):
        begin = time.process_time()
        work()
        times.append(time.process_time() - begin)
    return min(times)


def batch_time(raymap: RayMap, at: Places, order: int, start: np.ndarray | None = None) -> float:
    """Return CPU microseconds a ray of one call for all places."""
    seconds = best_time(lambda: raymap.trace(at.spin, at.inclination, at.r, at.n, order, start))
    return 1e6 * seconds / len(at.r)


def scalar_time(seed: int, count: int = 4000) -> float:
    """Return CPU microseconds a ray of the exact solve compiled with one lane, in a process of its own."""
    with tempfile.TemporaryDirectory() as cache:
        environment = {**os.environ, "NUMBA_CACHE_DIR": cache, "PYTHONPATH": os.pathsep.join(filter(None, sys.path))}
        script = _SCALAR.format(count=count, seed=seed)
        command = [sys.executable, "-c", script]
        done = subprocess.run(command, env=environment, capture_output=True, text=True, check=True)
    return float(done.stdout)


def measure_speed(learned: LearnedRays, places: Places, seed: int) -> Speed:
    """Time order 0 on the first places."""
    at = Places(places.spin[:_BATCH], places.inclination[:_BATCH], places.r[:_BATCH], places.n[:_BATCH])
    solved = ExactRays().trace(at.spin, at.inclination, at.r, at.n, 0)
    return Speed(
        batch_time(learned, at, 0),
        batch_time(ExactRays(), at, 0),
        batch_time(ExactRays(), at, 0, solved.start),
        scalar_time(seed),
    )
