"""Measure what the package promises about speed: one table, each figure beside its reference in the same run."""

from __future__ import annotations

import json
import statistics
import time
from collections.abc import Callable
from dataclasses import asdict, dataclass
from functools import partial
from typing import Annotated

import numpy as np
import typer

import emu
from emu.families.catalogue import family
from emu.families.family import Family
from emu.inference.likelihood import log_likelihood
from emu.observe.rows import Rows
from emu.problem import problem
from emu.spacetime.rays import solve_rays

__all__ = ["Figure", "measure"]

ROWS = 64
FLARES = 1000


@dataclass(frozen=True)
class Figure:
    """Hold one measured rate.

    Args:
        name: what was done. unit: of the rate.
        median, low, high: over the repeats.
        ratio: median over the reference's rate in the same run. reference: its name.
    """

    name: str
    unit: str
    median: float
    low: float
    high: float
    ratio: float | None = None
    reference: str = ""


def _rates(work: Callable[[], object], amount: int, repeats: int) -> list[float]:
    work()
    rates = []
    for _ in range(repeats):
        begin = time.perf_counter()
        work()
        rates.append(amount / (time.perf_counter() - begin))
    return rates


def _figure(name: str, unit: str, rates: list[float], reference: Figure | None = None) -> Figure:
    median = statistics.median(rates)
    ratio = None if reference is None else median / reference.median
    return Figure(name, unit, median, min(rates), max(rates), ratio, reference.name if reference else "")


def _orbits(kind: Family, count: int, rng: np.random.Generator) -> tuple[np.ndarray, np.ndarray]:
    times = np.sort(rng.uniform(-100.0, 100.0, (count, ROWS)), axis=1)
    return kind.prior.sample(count, rng), times


def _independent(kind: Family, theta: np.ndarray, times: np.ndarray, repeats: int) -> Figure:
    """Time the tests' integration of Hamilton's equations by scipy on the same kind of flare."""
    from tests.reference.curves import curves

    names = [parameter.name for parameter in kind.parameters]
    rates = []
    for k in range(repeats):
        begin = time.perf_counter()
        curves(kind.name, dict(zip(names, theta[k], strict=True)), times[k])
        rates.append(1.0 / (time.perf_counter() - begin))
    return _figure("curves by scipy's solve_ivp (tests/reference)", "flares/s", rates)


def _ray_figures(rng: np.random.Generator, repeats: int) -> list[Figure]:
    count = 20000
    spin, inclination = rng.uniform(-0.95, 0.95, count), np.arccos(rng.uniform(-1, 1, count))
    r, n = np.exp(rng.uniform(np.log(3.0), np.log(60.0), count)), rng.normal(size=(count, 3))
    n /= np.linalg.norm(n, axis=1, keepdims=True)
    return [
        _figure(
            f"rays without a near start, order {order}",
            "rays/s",
            _rates(partial(solve_rays, spin, inclination, r, n, order), count, repeats),
        )
        for order in (0, 1)
    ]


def _likelihood_figures(rng: np.random.Generator, repeats: int) -> list[Figure]:
    figures = []
    for name in ("midplane-frozen", "helix-frozen", "drift-turning", "midplane-turbulent"):
        asked = problem(name, "realistic")
        theta = asked.prior.sample(256, rng)
        batch = asked.campaign.draw(1, rng)
        seen, _ = asked.simulate(theta[:1], batch, rng)
        rows: Rows = seen.rows(0)
        rates = _rates(partial(log_likelihood, asked, theta, rows), 256, repeats)
        figures.append(_figure(f"likelihoods of {name}, {len(rows.time)} rows", "1/s", rates))
    return figures


def measure(repeats: int = 5, slow: int = 3) -> list[Figure]:
    """Return all figures, measured on one thread of one process.

    Args:
        repeats: runs of each fast figure. slow: flares given to the scipy integration.
    """
    rng = np.random.default_rng(20260101)
    kind = family("midplane-frozen")
    theta, times = _orbits(kind, FLARES, rng)
    reference = _independent(kind, theta, times, slow)
    rates = _rates(partial(kind.curves, theta, times), FLARES, repeats)
    figures = [reference, _figure(f"curves of midplane-frozen, {ROWS} rows", "flares/s", rates, reference)]
    return [*figures, *_ray_figures(rng, repeats), *_likelihood_figures(rng, repeats)]


def _main(
    repeats: Annotated[int, typer.Option(help="Runs of each fast figure.")] = 5,
    slow: Annotated[int, typer.Option(help="Flares given to the scipy integration.")] = 3,
    as_json: Annotated[bool, typer.Option("--json", help="Print JSON.")] = False,
) -> None:
    """Measure speed and print a table: median, least and most over the runs, ratio to a reference."""
    figures = measure(repeats, slow)
    if as_json:
        print(json.dumps({"version": emu.__version__, "figures": [asdict(figure) for figure in figures]}, indent=1))
        return
    for figure in figures:
        ratio = f"  {figure.ratio:8.0f} x {figure.reference}" if figure.ratio else ""
        spread = f"({figure.low:.4g} to {figure.high:.4g})"
        print(f"{figure.name:50s} {figure.median:10.4g} {figure.unit:9s} {spread:24s}{ratio}")


if __name__ == "__main__":
    typer.run(_main)
