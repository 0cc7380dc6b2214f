"""What a ray map gets wrong, quantity by quantity, against rays that were solved twice."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from emu.raymap.base import RayBundle
from training.raymap.points import Emitters

__all__ = ["QUANTITIES", "TARGETS", "differences", "quantiles"]

Array = NDArray[np.float64]
#: Name -> unit.
QUANTITIES = {"position": "GM/c2", "delay": "GM/c3", "rotation": "deg", "EVPA": "deg", "g": "", "mu": ""}
#: Largest allowed median and 99.9 % of order 0.
TARGETS = {
    "position": (1e-5, 3e-3), "delay": (1e-5, 3e-3), "rotation": (1e-3, 3e-2), "EVPA": (2e-3, 6e-2),
    "g": (1e-6, 1e-4), "mu": (1e-5, 1e-3),
}  # fmt: skip
_LEAST_SIN_ZETA = 0.1


def _turned(one: Array, other: Array) -> Array:
    """Return the difference of two angles given as 2 chi in rad, in degrees of chi."""
    return np.rad2deg(0.5 * np.abs((one - other + np.pi) % (2.0 * np.pi) - np.pi))


def differences(found: RayBundle, truth: RayBundle, emitters: Emitters) -> dict[str, Array]:
    """Compare rays with the truth; all arrays (N,), NaN where the quantity is not defined.

    Returns:
        position, delay; rotation: of an axis of the emitter's frame that is well across the photon; EVPA: of the
        light where sin zeta is at least 0.1; g and mu relative.
    """
    light, right = emitters.light(found, emitters.field), emitters.light(truth, emitters.field)
    frame, frame_right = emitters.frame(found), emitters.frame(truth)
    best = np.argmax(frame_right[1], axis=0)
    turned = np.take_along_axis(_turned(frame[0], frame_right[0]), best[None], axis=0)[0]
    evpa = _turned(np.arctan2(light[2], light[1]), np.arctan2(right[2], right[1]))
    both = ~(found.failed | truth.failed)
    with np.errstate(divide="ignore", invalid="ignore"):
        out = {
            "position": np.hypot(found.alpha - truth.alpha, found.beta - truth.beta),
            "delay": np.abs(found.delay - truth.delay),
            "rotation": turned,
            "EVPA": np.where(right[4] >= _LEAST_SIN_ZETA, evpa, np.nan),
            "g": np.abs(light[3] / right[3] - 1.0),
            "mu": np.abs(found.magnification / truth.magnification - 1.0),
        }
    return {name: np.where(both, value, np.nan) for name, value in out.items()}


def quantiles(errors: dict[str, Array], kept: NDArray[np.bool_] | None = None) -> dict[str, tuple[float, float]]:
    """Return median and 99.9 % of every quantity, of the rays `kept`."""
    pick = slice(None) if kept is None else kept
    return {
        name: (float(np.nanmedian(value[pick])), float(np.nanquantile(value[pick], 0.999)))
        for name, value in errors.items()
    }
