"""One block of steps of an ensemble of walkers on the exact posterior (emcee, vectorised)."""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from emu.families.density import Array
from emu.inference.coordinates import SamplingCoordinates
from emu.inference.counted import CountedPosterior
from emu.inference.maps import MapMixture

__all__ = ["Block", "log_target", "walk"]

# Shares of the moves. Independent proposals from fitted maps move between modes and along curved ridges;
# differences of walkers do the fine work where the maps are poor.
# emcee's snooker move is not used: its projection is not on a unit vector, so its balance is in doubt.
_MAP, _DIFFERENCE, _JUMP, _STRETCH = 0.6, 0.2, 0.05, 0.15


@dataclass(frozen=True)
class Block:
    """Hold S kept steps of W walkers.

    Args:
        y: (S, W, P) straight coordinates.
        log_prob: (S, W) log density per unit of y.
        acceptance: share of accepted proposals.
        calls: likelihoods evaluated.
        seconds: processor seconds.
    """

    y: Array
    log_prob: Array
    acceptance: float
    calls: int
    seconds: float


def log_target(posterior: CountedPosterior, coordinates: SamplingCoordinates, y: Array) -> Array:
    """Return log likelihood plus log prior density per unit of straight coordinates y (N, P): (N,)."""
    theta, log_prior = coordinates.from_straight(y)
    value = np.full(len(y), -np.inf)
    inside = np.isfinite(log_prior)
    if inside.any():
        cut = np.log(posterior.prior.accepted_fraction)  # the box density, spread over valid parameters alone
        value[inside] = log_prior[inside] - cut + posterior.log_likelihood(theta[inside])
    return value


def walk(posterior: CountedPosterior, coordinates: SamplingCoordinates, start: Array, maps: MapMixture, *,
         steps: int, thin: int, seed: int) -> Block:
    """Move walkers by a fixed mixture of moves that leave the posterior unchanged.

    Args:
        posterior: the exact posterior.
        coordinates: in which the walkers move.
        start: (W, P) places of finite density, at least twice as many as parameters.
        maps: proposals of the independent moves; fixed, so the chain is exact however poor they are.
        steps: steps to make; every thin-th is kept.
        thin: see steps.
        seed: of all randomness.
    """
    import emcee  # loads its backends: only when asked for

    began, called = time.process_time(), posterior.calls
    count, size = start.shape
    moves = emcee.moves
    sampler = emcee.EnsembleSampler(
        count, size, lambda y: log_target(posterior, coordinates, y), vectorize=True,
        moves=[(moves.MHMove(_independent(maps)), _MAP), (moves.DEMove(), _DIFFERENCE),
               (moves.DEMove(gamma0=1.0), _JUMP), (moves.StretchMove(), _STRETCH)],
    )
    state = emcee.State(start, random_state=np.random.RandomState(seed).get_state())
    sampler.run_mcmc(state, steps // thin, thin_by=thin, skip_initial_state_check=True)
    return Block(
        y=sampler.get_chain(), log_prob=sampler.get_log_prob(),
        acceptance=float(np.mean(sampler.acceptance_fraction)),
        calls=posterior.calls - called, seconds=time.process_time() - began,
    )


def _independent(maps: MapMixture) -> Callable[[Array, np.random.RandomState], tuple[Array, Array]]:
    """Propose draws of the maps wherever the walkers are."""

    def propose(y: Array, rng: np.random.RandomState) -> tuple[Array, Array]:
        """Return proposals and the log ratio of proposal densities, ln q(y) - ln q(proposal)."""
        proposal = maps.sample(len(y), rng)
        return proposal, maps.log_prob(y) - maps.log_prob(proposal)

    return propose
