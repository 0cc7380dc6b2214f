"""Compare ways to learn the rays on the same points in one run: degrees, networks, a learned start for the exact solve.

Run `python -m training.raymap.compare LABELS`; LABELS is what `emu-train raymap simulate` writes.
"""

from __future__ import annotations

import json
import sys
import tempfile
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import numpy as np

from emu.raymap.base import RayBundle
from emu.raymap.chart import read_charts, shipped
from emu.raymap.exact import ExactRays
from emu.raymap.learned import LearnedRays
from training.raymap.design import DIRECT
from training.raymap.errors import QUANTITIES, differences, quantiles
from training.raymap.fit import fit
from training.raymap.labels import Places, exact_twice, learned_of
from training.raymap.networks import Teaching, teach, teaching_rays
from training.raymap.points import random_emitters, random_places
from training.raymap.speed import best_time

__all__ = ["compare"]

_CLEAR = 0.1  # rad: all methods are judged on rays that keep so clear of the caustic
_TEACHING = 300_000
_LADDER = ((32, False), (64, False), (128, False), (64, True))


def _lower_degree(labels: Path, most: int) -> LearnedRays:
    """Fit the learned map again with polynomials of at most a degree."""
    zones = tuple(replace(zone, degree=min(zone.degree, most)) for zone in DIRECT)
    with tempfile.TemporaryDirectory() as folder:
        fit(labels, Path(folder), direct=zones)
        charts = read_charts(Path(folder))
    return LearnedRays(lambda: charts)


def _methods(
    labels: Path, places: Places, rays: Teaching, seconds: float, seed: int
) -> dict[str, Callable[[], RayBundle]]:
    """Return what is compared: name -> the rays of all places."""
    given = (places.spin, places.inclination, places.r, places.n, 0)
    learned = LearnedRays()
    methods: dict[str, Callable[[], RayBundle]] = {
        "exact, lanes": lambda: ExactRays().trace(*given),
        "polynomials, as shipped": lambda: learned.trace(*given),
        "learned start, exact solve": lambda: ExactRays().trace(*given, learned.trace(*given).start),
    }
    for most in (5, 4, 3):
        lower = _lower_degree(labels, most)
        methods[f"polynomials, degree at most {most}"] = lambda lower=lower: lower.trace(*given)
    taught = teaching_rays(_TEACHING, seed + 1, shipped()[0].drag)
    for width, raw in _LADDER:
        network = teach(taught, width, raw, seconds, seed)
        name = f"network 3 x {width}, {'raw places' if raw else 'same coordinates'}"
        methods[name] = lambda network=network: network.trace(rays)
    return methods


def compare(labels: Path, count: int = 20_000, seconds: float = 60.0, seed: int = 5) -> dict[str, dict[str, object]]:
    """Return for every method the errors (median, 99.9 %) and CPU microseconds a ray, all on the same rays.

    Args:
        labels: of `simulate`. count: random rays, those near the caustic left out. seconds: CPU time to fit each
            network. seed: of all draws.
    """
    drawn = random_places(count, seed, 0.95, 3.0, 60.0)
    truth = exact_twice(drawn, 0)
    _, rows = learned_of(truth, drawn, 0, shipped()[0].drag)
    kept = ~truth.failed & (2.0 * rows[0] > _CLEAR)
    places = Places(drawn.spin[kept], drawn.inclination[kept], drawn.r[kept], drawn.n[kept])
    truth = exact_twice(places, 0)
    learned, rows = learned_of(truth, places, 0, shipped()[0].drag)
    emitters = random_emitters(places, seed + 2)
    table: dict[str, dict[str, object]] = {}
    for name, method in _methods(labels, places, Teaching(places, rows, learned), seconds, seed).items():
        found = method()
        table[name] = {"microseconds": 1e6 * best_time(method) / len(places.r)}
        table[name] |= quantiles(differences(found, truth, emitters))
    base = float(table["exact, lanes"]["microseconds"])  # type: ignore[arg-type]
    for row in table.values():
        row["exact, lanes ÷ it"] = base / float(row["microseconds"])  # type: ignore[arg-type]
    return table


def _main() -> None:
    table = compare(Path(sys.argv[1]))
    print(f"| method | {' | '.join(QUANTITIES)} | us a ray | exact, lanes ÷ it |")
    print("|---" * (len(QUANTITIES) + 3) + "|")
    for name, row in table.items():
        cells = [f"{row[q][0]:.0e} / {row[q][1]:.0e}" for q in QUANTITIES]  # type: ignore[index]
        print(f"| {name} | {' | '.join(cells)} | {row['microseconds']:.2f} | {row['exact, lanes ÷ it']:.1f} |")
    print(json.dumps(table), file=sys.stderr)


if __name__ == "__main__":
    np.set_printoptions(precision=3)
    _main()
