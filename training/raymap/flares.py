"""Curves of the families with the learned and with the exact ray map."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from emu.assemble import assemble
from emu.families.catalogue import family
from emu.families.prior import Prior
from emu.raymap.base import Array, Flags, RayBundle
from emu.raymap.exact import ExactRays
from emu.raymap.learned import LearnedRays

__all__ = ["CountedRays", "FlareErrors", "compare_flares"]

#: One of every path; the field and its changes are no matter of the rays.
FAMILIES = ("midplane-frozen", "helix-frozen", "drift-frozen")
_HALF_SPAN = 110.0  # GM/c3, half of 90 minutes for 5e6 solar masses
_ROWS = 64


@dataclass
class CountedRays:
    """Count the rays of a learned map and those among them that were solved exactly."""

    rays: LearnedRays = field(default_factory=LearnedRays)
    total: int = 0
    exact: int = 0

    def trace(
        self, spin: Array, inclination: Array, r: Array, n: Array, order: int, start: Array | None = None
    ) -> RayBundle:
        """Return the learned map's rays, counted."""
        bundle = self.rays.trace(spin, inclination, r, n, order, start)
        self.total += len(r)
        self.exact += int(np.count_nonzero(bundle.exact))
        return bundle

    def in_tube(
        self, start: Array, swept: Array, spin: Array, inclination: Array, r: Array, n: Array, order: int
    ) -> Flags:
        """Return the learned map's answer."""
        return self.rays.in_tube(start, swept, spin, inclination, r, n, order)


@dataclass(frozen=True)
class FlareErrors:
    """Hold the largest error of every flare and the rays that were counted.

    Args:
        fraction: (N,) of q and u. flux: (N,) relative. failures: (N,) rays that either map did not find.
        rays, exact: numbers of rays of the learned map.
    """

    fraction: NDArray[np.float64]
    flux: NDArray[np.float64]
    failures: NDArray[np.int64]
    rays: int
    exact: int


def compare_flares(name: str, count: int, seed: int) -> FlareErrors:
    """Draw flares of a family from its prior and compute each with both ray maps."""
    model = family(name)
    theta = Prior(model.parameters, model.valid).sample(count, np.random.default_rng(seed))
    values = {parameter.name: theta[:, k : k + 1] for k, parameter in enumerate(model.parameters)}
    times = np.broadcast_to(np.linspace(-_HALF_SPAN, _HALF_SPAN, _ROWS), (count, _ROWS)).copy()
    counted = CountedRays()
    learned = assemble(model.source, values, times, counted)
    exact = assemble(model.source, values, times, ExactRays())
    gaps = [np.max(np.abs(learned[kind] - exact[kind]), axis=1) for kind in ("q", "u")]
    relative = np.abs(learned["flux"] - exact["flux"]) / np.maximum(exact["flux"], 1e-300)
    failures = learned["failures"] + exact["failures"]
    return FlareErrors(np.maximum(*gaps), np.max(relative, axis=1), failures, counted.total, counted.exact)
