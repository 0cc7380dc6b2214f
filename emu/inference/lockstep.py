"""Walks of many nested-sampling points in lockstep: one vectorised likelihood call for a step of all.

dynesty hands the points that it wants replaced to the `map` of a pool. Here that map does not share them
among processes but moves them together, which suits a likelihood that is cheap only for whole arrays.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from dynesty.internal_samplers import RWalkSampler, SamplerArgument, SamplerReturn
from dynesty.utils import LoglOutput
from numpy.typing import NDArray

from emu.families.density import Array

__all__ = ["LockstepPool", "LockstepWalk"]

_JUMP_SHARE = 0.5  # of the steps use differences of live points, the rest the bounding ellipsoids
_LONG_SHARE = 0.1  # of those use the whole difference, which reaches another mode


class LockstepWalk(RWalkSampler):
    """Tune like dynesty's random walk, and hand the live points on to the walk."""

    def prepare_sampler(self, **kwargs: Any) -> list[SamplerArgument]:
        """List the arguments of all walks, with the live points among them."""
        self.sampler_kwargs["live"] = kwargs["nested_sampler"].live_u.copy()
        return list(super().prepare_sampler(**kwargs))


@dataclass(frozen=True)
class LockstepPool:
    """Move all points of a queue together, uniformly in the unit cube within the likelihood bound.

    Proposals fitted to the live points more closely than these two were tried and given up: an
    independent proposal with some hundred coefficients knows its own live points too well, and
    raised ln Z by several units in a closed-form case of fifteen parameters.

    Args:
        log_likelihood: map u (K, P) in the unit cube to (K,).
        periodic: (P,) True where 0 and 1 are the same.
    """

    log_likelihood: Callable[[Array], Array]
    periodic: NDArray[np.bool_]

    def map(self, function: Callable[[Any], Any], arguments: Sequence[Any]) -> list[Any]:
        """Apply function to every argument, walks of LockstepWalk in lockstep."""
        if function is not LockstepWalk.sample:
            return [function(argument) for argument in arguments]
        return self._walk(arguments)

    def _walk(self, arguments: Sequence[SamplerArgument]) -> list[SamplerReturn]:
        """Walk within the likelihood bound for a fixed number of steps."""
        first = arguments[0]
        rng = np.random.Generator(np.random.PCG64(first.rseed))
        place = np.array([argument.u for argument in arguments])
        axes = first.scale * np.array([argument.axes for argument in arguments])
        value = np.full(len(place), np.nan)
        counts = np.zeros((2, len(place)), int)  # accepted and rejected steps within the ellipsoids
        for _ in range(first.kwargs["walks"]):
            jump = rng.random(len(place)) < _JUMP_SHARE
            far = _difference(first.kwargs["live"], len(place), rng)
            proposal, proposed = self._propose(place + np.where(jump[:, None], far, _ball(axes, rng)))
            accepted = proposed > first.loglstar
            place[accepted], value[accepted] = proposal[accepted], proposed[accepted]
            counts += np.stack([accepted & ~jump, ~accepted & ~jump])
        still = np.isnan(value)
        if still.any():
            value[still] = self.log_likelihood(place[still])
        return [_answer(argument, u, v, a, r)
                for argument, u, v, a, r in zip(arguments, place, value, *counts, strict=True)]

    def _propose(self, u: Array) -> tuple[Array, Array]:
        """Wrap what is periodic and evaluate what lies in the cube."""
        u = np.where(self.periodic, u % 1.0, u)
        inside = np.all((u > 0.0) & (u < 1.0), axis=1)
        value = np.full(len(u), -np.inf)
        if inside.any():
            value[inside] = self.log_likelihood(u[inside])
        return u, value


def _ball(axes: Array, rng: np.random.Generator) -> Array:
    """Draw uniformly within the ellipsoids of axes (K, P, P)."""
    count, size, _ = axes.shape
    normal = rng.standard_normal((count, size))
    normal /= np.linalg.norm(normal, axis=1, keepdims=True)
    radius = rng.random((count, 1)) ** (1.0 / size)
    return np.asarray(np.einsum("kij,kj->ki", axes, normal * radius), float)


def _difference(live: Array, count: int, rng: np.random.Generator) -> Array:
    """Draw scaled differences of two live points (differential evolution, ter Braak 2006)."""
    first = rng.integers(len(live), size=count)
    second = (first + rng.integers(1, len(live), size=count)) % len(live)
    usual = 2.38 / np.sqrt(2.0 * live.shape[1]) * np.exp(0.5 * rng.standard_normal((count, 1)) - 0.5)
    scale = np.where(rng.random((count, 1)) < _LONG_SHARE, 1.0, usual)
    return np.asarray(scale * (live[first] - live[second]), float)


def _answer(argument: SamplerArgument, u: Array, value: float, accepted: int, rejected: int) -> SamplerReturn:
    """Report one walk in the form dynesty expects; at least one step counts as rejected, for its tuning."""
    counts = {"accept": int(accepted), "reject": max(int(rejected), 1)}
    return SamplerReturn(
        u=u, v=argument.prior_transform(u), logl=LoglOutput(float(value), False),
        ncalls=argument.kwargs["walks"], evaluation_history=[],
        tuning_info={**counts, "scale": argument.scale}, proposal_stats=counts,
    )
