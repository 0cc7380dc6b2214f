"""Nested sampling of the exact posterior and its evidence with dynesty (Speagle 2020)."""

from __future__ import annotations

import time
from collections.abc import Callable

import numpy as np
from dynesty import NestedSampler
from scipy.special import ndtri

from emu.families.density import Array
from emu.families.prior import Prior
from emu.inference.counted import CountedPosterior
from emu.inference.draws import Draws
from emu.inference.lockstep import LockstepPool, LockstepWalk
from emu.observe.rows import Rows
from emu.problem import Problem

__all__ = ["nested"]

Progress = Callable[[str], None]
_EDGE = 1e-15  # the cube without its faces, where normal scores are infinite
_REPORT_EVERY = 1000


def nested(problem: Problem, rows: Rows, *, live: int = 500, seed: int, walks: int | None = None,
           left: float = 0.05, together: int | None = None, progress: Progress | None = None) -> Draws:
    """Sample the posterior of a flare by nested sampling.

    Points walk within the likelihood bound, half of the steps in dynesty's bounding ellipsoids and half
    along differences of live points. The first live points are draws of the prior itself, so evidences
    refer to the prior that is cut to valid parameters.

    A single run can miss a mode and yet state a small error: compare independent runs.

    Args:
        problem: what may have happened and what was measured.
        rows: the flare.
        live: live points; the error of the log evidence falls as their square root.
        seed: of all randomness.
        walks: steps to a new point, twice the number of parameters plus ten by default.
        left: stop when the live points can raise the log evidence by no more.
        together: points that walk at once, a tenth of the live points by default.
        progress: called now and then with a line of text.

    Returns:
        Weighted draws in the order of rising likelihood.
    """
    began = time.process_time()
    posterior = CountedPosterior(problem, rows)
    size = len(problem.parameters)
    periodic = np.array([parameter.circular for parameter in problem.parameters])
    sampler = NestedSampler(
        _one_at_a_time(posterior), lambda u: _from_cube(problem.prior, u[None])[0], size, nlive=live,
        bound="multi", sample=LockstepWalk(walks=walks or 2 * size + 10),
        pool=LockstepPool(lambda u: posterior.log_likelihood(_from_cube(problem.prior, u)), periodic),
        queue_size=together or max(2, live // 10),
        use_pool={"prior_transform": False, "loglikelihood": False, "update_bound": False},
        periodic=np.flatnonzero(periodic).tolist() or None,
        first_update={"min_ncall": 2 * live, "min_eff": 20.0},
        live_points=_first_points(posterior, live, np.random.default_rng([seed, 0])),
        rstate=np.random.default_rng([seed, 1]),
    )
    _run(sampler, left, progress)
    found = sampler.results
    return Draws(
        theta=np.asarray(found.samples, float),
        log_weight=np.asarray(found.logwt - found.logz[-1], float),
        log_evidence=float(found.logz[-1]), log_evidence_error=float(found.logzerr[-1]),
        calls=posterior.calls, seconds=time.process_time() - began, method="nested",
    )


def _run(sampler: NestedSampler, left: float, progress: Progress | None) -> None:
    """Run to the end, with a line of progress at times."""
    for step, state in enumerate(sampler.sample(dlogz=left)):
        if progress is not None and step % _REPORT_EVERY == _REPORT_EVERY - 1:
            progress(f"nested: step {step + 1}, ln Z {state.logz:.2f}, still to come {state.delta_logz:.2f}")
    for _ in sampler.add_live_points():
        pass


def _one_at_a_time(posterior: CountedPosterior) -> Callable[[Array], float]:
    """Wrap the likelihood for the calls that dynesty makes itself, at the very start."""
    return lambda theta: float(posterior.log_likelihood(theta[None])[0])


def _from_cube(prior: Prior, u: Array) -> Array:
    """Map the unit cube (K, P) to parameters."""
    return prior.from_gauss(ndtri(np.clip(u, _EDGE, 1.0 - _EDGE)))


def _first_points(posterior: CountedPosterior, live: int,
                  rng: np.random.Generator) -> tuple[Array, Array, Array]:
    """Draw live points from the prior: places in the cube, parameters and log likelihoods."""
    prior = posterior.prior
    theta = prior.sample(live, rng)
    u = np.stack([p.prior.cdf(theta[:, k]) for k, p in enumerate(prior.parameters)], axis=1)
    u = np.clip(u, _EDGE, 1.0 - _EDGE)
    return u, theta, posterior.log_likelihood(theta)
