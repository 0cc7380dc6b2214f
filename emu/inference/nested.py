"""Nested sampling of the exact posterior and its evidence with dynesty (Speagle 2020).

Two ways: from the prior, which finds its way alone but must shrink the volume by e^30 or more; and from
a wide density about draws that are at hand, with the prior moved into the likelihood, which needs but a
few factors of e and is accordingly more exact (posterior repartitioning, Chen et al. 2019). Both give the
same evidence where the first has missed nothing.
"""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from dynesty import NestedSampler
from dynesty.results import Results
from numpy.typing import NDArray
from scipy.special import ndtri

from emu.families.density import Array
from emu.inference.coordinates import straight_about
from emu.inference.counted import CountedPosterior
from emu.inference.draws import Draws, distinct, resampled
from emu.inference.lockstep import LockstepPool, LockstepWalk
from emu.inference.maps import fit_maps
from emu.inference.walkers import log_target
from emu.observe.rows import Rows
from emu.problem import Problem

__all__ = ["nested", "nested_about"]

Progress = Callable[[str], None]
_EDGE = 1e-15  # the cube without its faces, where quantiles are infinite
_REPORT_EVERY = 1000
_WIDEN = 1.5  # the density about the draws, beyond what fits them
_FEWEST = 300  # draws that a density is fitted to


@dataclass(frozen=True)
class _Cube:
    """Hold a target on the unit cube.

    Args:
        theta: map u (K, P) to parameters (K, P).
        log_value: map u (K, P) to the log likelihood, per unit of volume of the cube.
        periodic: (P,) True where 0 and 1 are the same.
        first: live points (L, P) drawn uniformly from where the value is not zero.
        log_share: ln of that part of the cube.
    """

    theta: Callable[[Array], Array]
    log_value: Callable[[Array], Array]
    periodic: NDArray[np.bool_]
    first: Array
    log_share: float


def nested(problem: Problem, rows: Rows, *, live: int = 500, seed: int, walks: int = 40, left: float = 0.1,
           progress: Progress | None = None) -> Draws:
    """Sample the posterior of a flare by nested sampling from the prior.

    Points walk within the likelihood bound, half of the steps in dynesty's bounding ellipsoids and half
    along differences of live points. The first live points are draws of the prior itself, so evidences
    refer to the prior that is cut to valid parameters.

    A single run can miss a mode and yet state a small error, and with few steps ln Z comes out too high
    (by about 0.5 with 40 steps in a closed-form case of fifteen parameters): compare independent runs, and
    go on with `nested_about`.

    Args:
        problem: what may have happened and what was measured.
        rows: the flare.
        live: live points; the error of the log evidence falls as their square root.
        seed: of all randomness.
        walks: steps to a new point.
        left: stop when the live points can raise the log evidence by no more; they are then added.
        progress: called now and then with a line of text.

    Returns:
        Weighted draws in the order of rising likelihood.
    """
    began, posterior, prior = time.process_time(), CountedPosterior(problem, rows), problem.prior

    def theta(u: Array) -> Array:
        return prior.from_gauss(np.asarray(ndtri(np.clip(u, _EDGE, 1.0 - _EDGE)), float))

    start = prior.sample(live, np.random.default_rng([seed, 0]))
    first = np.stack([p.prior.cdf(start[:, k]) for k, p in enumerate(prior.parameters)], axis=1)
    periodic = np.array([parameter.circular for parameter in prior.parameters])
    cube = _Cube(theta, lambda u: posterior.log_likelihood(theta(u)), periodic, first, 0.0)
    return _sample(cube, posterior, seed, walks, left, progress, began)


def nested_about(problem: Problem, rows: Rows, about: Draws, *, live: int = 500, seed: int, walks: int = 60,
                 left: float = 0.05, progress: Progress | None = None) -> Draws:
    """Sample the posterior of a flare by nested sampling from a wide density about draws of it.

    The density q is a quadratic map with heavy tails in straight coordinates, half as wide again as the
    draws; the likelihood becomes likelihood times prior over q. Any density would give the same evidence
    and posterior, a bad one only more slowly.

    Args:
        problem: what may have happened and what was measured.
        rows: the flare.
        about: draws of roughly the posterior, as from `nested`.
        live: live points.
        seed: of all randomness.
        walks: steps to a new point.
        left: stop when the live points can raise the log evidence by no more; they are then added.
        progress: called now and then with a line of text.

    Returns:
        Weighted draws in the order of rising weight.
    """
    began, posterior = time.process_time(), CountedPosterior(problem, rows)
    rng = np.random.default_rng([seed, 0])
    chosen = distinct(about, rng)
    if len(chosen) < _FEWEST:
        chosen = resampled(about, _FEWEST, rng)
    coordinates = straight_about(problem.prior, about.theta[chosen])
    density = fit_maps(coordinates.to_straight(about.theta[chosen]), seed=seed, most=1).maps[0].widened(_WIDEN)

    def log_value(u: Array) -> Array:
        y = density.quantile(np.clip(u, _EDGE, 1.0 - _EDGE))
        return log_target(posterior, coordinates, y) - density.log_prob(y)

    def theta(u: Array) -> Array:
        return coordinates.from_straight(density.quantile(np.clip(u, _EDGE, 1.0 - _EDGE)))[0]

    first, log_share = _possible(log_value, live, len(problem.parameters), rng)
    nowhere = np.zeros(len(problem.parameters), bool)
    cube = _Cube(theta, log_value, nowhere, first, log_share)
    return _sample(cube, posterior, seed, walks, left, progress, began)


def _sample(cube: _Cube, posterior: CountedPosterior, seed: int, walks: int, left: float,
            progress: Progress | None, began: float) -> Draws:
    """Run dynesty on a target on the unit cube."""
    live, size = cube.first.shape
    sampler = NestedSampler(
        lambda theta: -np.inf, lambda u: cube.theta(u[None])[0], size, nlive=live, bound="multi",
        sample=LockstepWalk(walks=walks), pool=LockstepPool(cube.log_value, cube.periodic),
        queue_size=max(2, live // 10),
        use_pool={"prior_transform": False, "loglikelihood": False, "update_bound": False},
        periodic=np.flatnonzero(cube.periodic).tolist() or None,
        live_points=(cube.first, cube.theta(cube.first), cube.log_value(cube.first)),
        rstate=np.random.default_rng([seed, 1]),
    )
    _skip_the_whole_cube(sampler)
    for step, state in enumerate(sampler.sample(dlogz=left)):
        if progress is not None and step % _REPORT_EVERY == _REPORT_EVERY - 1:
            progress(f"nested: step {step + 1}, ln Z {state.logz:.2f}, still to come {state.delta_logz:.2f}")
    for _ in sampler.add_live_points():
        pass
    found = sampler.results
    return Draws(
        theta=np.asarray(found.samples, float), log_weight=np.asarray(found.logwt - found.logz[-1], float),
        log_evidence=float(found.logz[-1] + cube.log_share), log_evidence_error=_error(found, live),
        calls=posterior.calls, seconds=time.process_time() - began, method="nested",
    )


def _error(found: Results, live: int) -> float:
    """Return the error of ln Z: dynesty's, but never below sqrt(H / live) (Skilling 2006).

    Where little volume had to be shrunk away dynesty's comes out too small, or not a number.
    """
    least = np.sqrt(max(float(found.information[-1]), 0.0) / live)
    stated = float(found.logzerr[-1])
    return float(max(least, stated)) if np.isfinite(stated) else float(least)


def _skip_the_whole_cube(sampler: NestedSampler) -> None:
    """Walk from the first step on: dynesty begins with draws from the cube, one by one, else."""
    sampler.update_bound_if_needed(-np.inf, force=True)


def _possible(log_value: Callable[[Array], Array], count: int, size: int,
              rng: np.random.Generator) -> tuple[Array, float]:
    """Draw points of the cube where the value is not zero, and estimate the log of that share."""
    kept: list[Array] = []
    have = tried = 0
    while have < count and tried < 1000 * count:
        u = rng.random((count, size))
        good = u[np.isfinite(log_value(u))]
        kept.append(good)
        have, tried = have + len(good), tried + len(u)
    return np.concatenate(kept)[:count], float(np.log(max(have, 1) / tried))
