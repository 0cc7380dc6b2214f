"""Random sources, and emitters there, on which a ray map is judged."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from emu.raymap.base import RayBundle
from emu.source.light import shine
from emu.spacetime.kerr import frame_at
from training.raymap.labels import Places

__all__ = ["Emitters", "random_emitters", "random_places"]

Array = NDArray[np.float64]
_FASTEST = 0.6
_INDEX = 0.7


def random_places(count: int, seed: int, spin: float, near: float, far: float) -> Places:
    """Draw sources: |a| up to `spin`, isotropic observers and directions, r from `near` to `far` log-uniform."""
    rng = np.random.default_rng(seed)
    n = rng.normal(size=(count, 3))
    return Places(
        rng.uniform(-spin, spin, count),
        np.arccos(rng.uniform(-1.0, 1.0, count)),
        np.exp(rng.uniform(np.log(near), np.log(far), count)),
        n / np.linalg.norm(n, axis=1, keepdims=True),
    )


@dataclass(frozen=True)
class Emitters:
    """Hold emitters at N places: rates (N, 3) of r, theta, phi by coordinate time and field directions (N, 3)."""

    places: Places
    rates: Array
    field: Array

    def light(self, bundle: RayBundle, field: Array) -> Array:
        """Return flux, cos 2chi, sin 2chi, redshift and sin zeta of the light along the rays: (5, N)."""
        names = ("alpha", "beta", "p_r", "p_theta", "p_phi", "magnification")
        rays = np.stack([getattr(bundle, name) for name in names], axis=-1)
        one = np.ones(len(rays))
        at = self.places
        out, _ = shine(at.spin, at.inclination, at.r, at.n, self.rates, rays, field, one, _INDEX * one)
        return np.asarray(out.T)

    def frame(self, bundle: RayBundle) -> Array:
        """Return 2 chi of whichever axis of the emitter's frame is most nearly across the photon, rad, and which.

        The angle of an axis almost along the photon would tell of its direction more than of the transport.
        """
        axes = np.broadcast_to(np.eye(3)[:, None], (3, len(self.places.r), 3))
        light = np.stack([self.light(bundle, np.ascontiguousarray(axis)) for axis in axes])
        return np.stack((np.arctan2(light[:, 2], light[:, 1]), light[:, 4]))


def random_emitters(places: Places, seed: int) -> Emitters:
    """Draw velocities up to 0.6 c for the zero-angular-momentum observer, and field directions, both isotropic."""
    rng = np.random.default_rng(seed)
    count = len(places.r)
    v, field = rng.normal(size=(2, count, 3))
    v *= (_FASTEST * rng.uniform(size=count) ** (1.0 / 3.0) / np.linalg.norm(v, axis=1))[:, None]
    field /= np.linalg.norm(field, axis=1, keepdims=True)
    metric = [frame_at(*one) for one in zip(places.spin, places.r, places.n[:, 2], strict=True)]
    lapse, omega, root_rr, root_tt, varpi, _delta = np.array(metric).T
    sin_theta = np.maximum(np.hypot(places.n[:, 0], places.n[:, 1]), 1e-12)
    around = omega + lapse * v[:, 2] / (varpi * sin_theta)
    return Emitters(places, np.stack((lapse * v[:, 0] / root_rr, lapse * v[:, 1] / root_tt, around), axis=-1), field)
