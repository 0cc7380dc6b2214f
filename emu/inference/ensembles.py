"""Independent ensembles of walkers on the exact posterior, run until they agree."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from emu.families.density import Array
from emu.inference.convergence import chain_features, length_over_memory, rank_rhat
from emu.inference.coordinates import SamplingCoordinates, straight_about
from emu.inference.counted import CountedPosterior
from emu.inference.draws import Draws, distinct, resampled
from emu.inference.maps import MapMixture, fit_maps
from emu.inference.nested import nested
from emu.inference.walkers import Block, log_target, walk
from emu.observe.rows import Rows
from emu.problem import Problem

__all__ = ["EnsemblePlan", "Ensembles", "ensembles", "gather", "plan_ensembles"]

Progress = Callable[[str], None]
_THIN = 5
_BURN = 300  # steps that are thrown away: starts are draws already, only rough ones
_MAP_DRAWS = 6000
RHAT_LIMIT, LENGTH_LIMIT = 1.01, 50.0  # Vehtari et al. 2021; the length is emcee's own advice


@dataclass(frozen=True)
class Ensembles:
    """Hold C ensembles of W walkers, S kept steps each, burn-in removed.

    Args:
        theta: (C, S, W, P).
        log_prob: (C, S, W) log posterior density per unit of the sampler's coordinates.
        rhat: (F,) rank-normalised split R-hat between the ensembles, circles as sine and cosine.
        length: (F,) kept steps over autocorrelation time, the least of the ensembles.
        acceptance: (C,) shares of accepted proposals.
        calls: likelihoods evaluated.
        seconds: processor seconds.
    """

    theta: Array
    log_prob: Array
    rhat: Array
    length: Array
    acceptance: Array
    calls: int
    seconds: float

    @property
    def converged(self) -> bool:
        """Tell whether R-hat < 1.01 and length >= 50 for every quantity."""
        return bool(np.all(self.rhat < RHAT_LIMIT) and np.all(self.length >= LENGTH_LIMIT))

    def draws(self) -> Draws:
        """Return all states as equally weighted draws without an evidence, ensemble by ensemble."""
        flat = self.theta.reshape(-1, self.theta.shape[-1])
        return Draws(flat, np.full(len(flat), -np.log(len(flat))), np.nan, np.nan, self.calls, self.seconds,
                     "ensembles")


@dataclass(frozen=True)
class EnsemblePlan:
    """Fix what all blocks of all ensembles of a flare share.

    Args:
        coordinates: straight coordinates about the starting draws.
        maps: fixed proposals fitted to the starting draws.
        start: (C, W, P) first places, no draw twice unless there are too few.
        seed: of all randomness.
        steps: of a block.
    """

    coordinates: SamplingCoordinates
    maps: MapMixture
    start: Array
    seed: int
    steps: int = 500

    def block(self, posterior: CountedPosterior, ensemble: int, before: list[Block]) -> Block:
        """Make the next block of an ensemble: the same whether or not the run was interrupted."""
        start = before[-1].y[-1] if before else self.start[ensemble]
        seed = int(np.random.SeedSequence([self.seed, 2, ensemble, len(before)]).generate_state(1)[0])
        return walk(posterior, self.coordinates, start, self.maps, steps=self.steps, thin=_THIN, seed=seed)


def plan_ensembles(posterior: CountedPosterior, start: Draws, *, count: int, walkers: int,
                   seed: int) -> EnsemblePlan:
    """Choose coordinates, proposals and disjoint first places from draws of roughly the posterior.

    Half of the walkers of an ensemble start from draws, half from the wider proposals where these have
    any density, so the ensembles start apart.
    """
    rng = np.random.default_rng([seed, 0])
    chosen = distinct(start, rng)
    if len(chosen) < count * walkers:
        chosen = resampled(start, count * walkers, rng)
    theta = start.theta[chosen]
    coordinates = straight_about(posterior.prior, theta)
    y = coordinates.to_straight(theta)
    maps = fit_maps(y[:_MAP_DRAWS], seed=seed)
    first = y[: count * walkers].reshape(count, walkers, -1).copy()
    wide = maps.sample(first[:, ::2].shape[0] * first[:, ::2].shape[1],
                       np.random.RandomState(seed))
    possible = np.isfinite(log_target(posterior, coordinates, wide)).reshape(first[:, ::2].shape[:2])
    first[:, ::2] = np.where(possible[..., None], wide.reshape(first[:, ::2].shape), first[:, ::2])
    return EnsemblePlan(coordinates, maps, first, seed)


def gather(plan: EnsemblePlan, blocks: list[list[Block]]) -> Ensembles:
    """Join the blocks of every ensemble, drop the burn-in and judge convergence.

    Args:
        plan: which made the blocks.
        blocks: equally many for each ensemble.
    """
    burn = _BURN // _THIN
    y = np.stack([np.concatenate([block.y for block in own])[burn:] for own in blocks])
    log_prob = np.stack([np.concatenate([block.log_prob for block in own])[burn:] for own in blocks])
    theta = plan.coordinates.from_straight(y.reshape(-1, y.shape[-1]))[0].reshape(y.shape)
    features = chain_features(theta, plan.coordinates.prior.parameters)
    quantities = np.moveaxis(features, -1, 0)
    every = [block for own in blocks for block in own]
    return Ensembles(
        theta=theta, log_prob=log_prob,
        rhat=np.array([rank_rhat(q.reshape(len(q), -1)) for q in quantities]),
        length=np.array([length_over_memory(q) for q in quantities]),
        acceptance=np.array([np.mean([block.acceptance for block in own]) for own in blocks]),
        calls=sum(block.calls for block in every), seconds=sum(block.seconds for block in every),
    )


def ensembles(problem: Problem, rows: Rows, *, start: Draws | None = None, walkers: int = 40,
              steps: int = 6000, count: int = 4, seed: int, progress: Progress | None = None) -> Ensembles:
    """Run independent ensembles until they agree, or for a number of steps.

    Args:
        problem: what may have happened and what was measured.
        rows: the flare.
        start: draws of roughly the posterior; a short nested run where there are none.
        walkers: in an ensemble; raised to a little above twice the number of parameters.
        steps: at most; agreement is looked at every 500.
        count: ensembles.
        seed: of all randomness.
        progress: called now and then with a line of text.

    Returns:
        Chains without burn-in, and how well they agree. Look at `converged`.
    """
    begin = start if start is not None else nested(problem, rows, live=250, walks=30, seed=seed, progress=progress)
    posterior = CountedPosterior(problem, rows)
    walkers = max(walkers, 2 * len(problem.parameters) + 2)
    plan = plan_ensembles(posterior, begin, count=count, walkers=walkers, seed=seed)
    blocks: list[list[Block]] = [[] for _ in range(count)]
    found, made = None, 0
    while found is None or (not found.converged and made < steps):
        for ensemble, own in enumerate(blocks):
            own.append(plan.block(posterior, ensemble, own))
        made += plan.steps
        found = gather(plan, blocks)
        if progress is not None:
            progress(f"ensembles: {made} steps, R-hat {found.rhat.max():.4f}, "
                     f"length {found.length.min():.0f}, accepted {found.acceptance.mean():.2f}")
    return found
