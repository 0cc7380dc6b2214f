"""A family: a path, an inner change and the priors of their parameters."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from emu.assemble import assemble, in_radians
from emu.families.density import Array
from emu.families.parameters import Parameter
from emu.families.prior import Prior
from emu.raymap.base import RayMap
from emu.raymap.exact import ExactRays
from emu.source.source import Source

__all__ = ["Family"]

_EXACT = ExactRays()


@dataclass(frozen=True)
class Family:
    """Predict the curves of one kind of emitter.

    Args:
        name: `<path>-<inner>`, or whatever a user calls it.
        description: one sentence.
        path: how the emitter moves, a key of the catalogue.
        inner: what changes inside it, a key of the catalogue.
        source: the parts that path, inner change and bumps stand for.
        parameters: P parameters, in the order of the vocabulary.
        valid_interval: emission times (GM/c3) within which a path must be possible.
        r_min: least Boyer-Lindquist radius (GM/c2) within that interval.
        bumps: how often the emitter brightens, 1 or 2.
        spot: True for a cloud of finite size, False for a point.
        orders: images added up: 1 direct, 2 with the next.
        raymap: how rays are found; no part of a family's TOML.
    """

    name: str
    description: str
    path: str
    inner: str
    source: Source
    parameters: tuple[Parameter, ...]
    valid_interval: tuple[float, float]
    r_min: float
    bumps: int = 1
    spot: bool = False
    orders: int = 1
    raymap: RayMap = _EXACT

    kinds = ("flux", "q", "u", "east", "north")
    standard_frame = True

    @cached_property
    def prior(self) -> Prior:
        """Return the joint prior of the P parameters, with its accepted fraction."""
        return Prior(self.parameters, self.valid)

    def valid(self, theta: Array) -> NDArray[np.bool_]:
        """Tell for theta (N, P) which paths are timelike and beyond r_min all through the interval: (N,)."""
        return self.source.path.valid(in_radians(self._values(theta)), self.valid_interval, self.r_min)

    def curves(self, theta: Array, times: Array) -> dict[str, Array]:
        """Compute flux, q, u, east, north and failures.

        Args:
            theta: (N, P) float64, valid.
            times: (T,) or (N, T) float64, arrival times in GM/c3 from the reference time.

        Returns:
            kind -> (N, T) and "failures" -> (N,). With turbulence, q and u are those of the ordered part.
        """
        count = np.shape(times)[-1]
        if len(theta) == 0:
            return {**dict.fromkeys(self.kinds, np.empty((0, count))), "failures": np.empty(0)}
        per_flare = np.ascontiguousarray(np.broadcast_to(times, (len(theta), count)), float)
        curves = assemble(
            self.source, self._values(theta), per_flare, self.raymap, orders=self.orders, spot_points=None
        )
        return {kind: curves[kind] for kind in (*self.kinds, "failures")}

    def scatter(self, theta: Array) -> tuple[Array, Array] | None:
        """Return deviation (N,) and lifetime (N,) of the wander of q and of u; None without turbulence."""
        if self.source.scatter is None:
            return None
        sigma, lifetime = self.source.scatter.process(in_radians(self._values(theta)))
        return np.reshape(sigma, len(theta)), np.reshape(lifetime, len(theta))

    def _values(self, theta: Array) -> dict[str, Array]:
        """Name the columns of theta (N, P): each (N, 1)."""
        theta = np.asarray(theta, float)
        return {parameter.name: theta[:, [column]] for column, parameter in enumerate(self.parameters)}
