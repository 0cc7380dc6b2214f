"""Flares never seen twice: stored noiseless curves under a fresh schedule, noise and standing in the sky."""

from dataclasses import dataclass

import numba
import numpy as np
from numpy.typing import NDArray

from emu.families.model import Model
from emu.families.parameters import Parameter
from emu.observe.rows import RowBatch
from emu.problem import Problem
from training.simulate import STANDARD
from training.store import TrainingSet

__all__ = ["FreshFlares", "StoredCurves", "interpolate"]

Array = NDArray[np.float64]


@numba.njit(cache=True)
def interpolate(
    nodes: NDArray[np.float32], curves: NDArray[np.float32], which: NDArray[np.int64], times: Array
) -> Array:
    """Interpolate curves by the cubic through the four nearest nodes (Lagrange).

    Args:
        nodes: (N, T) float32 ascending times, T >= 4.
        curves: (N, T, K) float32.
        which: (B,) number of the curve of each flare.
        times: (B, R); beyond the nodes the last cubic is continued.

    Returns:
        (K, B, R) float64.
    """
    flares, rows = times.shape
    out = np.zeros((curves.shape[2], flares, rows))
    for b in range(flares):
        node, curve = nodes[which[b]], curves[which[b]]
        for r in range(rows):
            place = np.searchsorted(node, times[b, r]) - 2
            first = min(max(place, 0), len(node) - 4)
            for i in range(first, first + 4):
                weight = 1.0
                for j in range(first, first + 4):
                    if j != i:
                        weight *= (times[b, r] - node[j]) / (float(node[i]) - float(node[j]))
                for k in range(out.shape[0]):
                    out[k, b, r] += weight * curve[i, k]
    return out


@dataclass(frozen=True, eq=False)
class StoredCurves:
    """Be a model for a handful of stored flares: its curves are theirs, turned and scaled.

    Args:
        model: whose curves are stored.
        stored: the set.
        which: (B,) the stored flare of each row of theta.
    """

    model: Model
    stored: TrainingSet
    which: NDArray[np.int64]

    @property
    def name(self) -> str:
        """Return the model's name."""
        return self.model.name

    @property
    def parameters(self) -> tuple[Parameter, ...]:
        """Return the model's parameters."""
        return self.model.parameters

    @property
    def kinds(self) -> tuple[str, ...]:
        """Return which curves are stored."""
        return self.stored.layout.kinds

    @property
    def standard_frame(self) -> bool:
        """Tell whether curves are stored at axis_angle 0 and brightness 1."""
        return self.model.standard_frame

    def valid(self, theta: Array) -> NDArray[np.bool_]:
        """Ask the model."""
        return self.model.valid(theta)

    def scatter(self, theta: Array) -> tuple[Array, Array] | None:
        """Ask the model."""
        return self.model.scatter(theta)

    def curves(self, theta: Array, times: Array) -> dict[str, Array]:
        """Interpolate the stored curves (axis_angle turns, brightness scales).

        Args:
            theta: (B, P), one row for each of `which`.
            times: (B, T) GM/c^3.

        Returns:
            kind -> (B, T).
        """
        made = interpolate(self.stored.times, self.stored.curves, self.which, times)
        curves = dict(zip(self.kinds, made, strict=True))
        if not self.standard_frame:
            return curves
        column = {parameter.name: place for place, parameter in enumerate(self.parameters)}
        if "brightness" in column and "flux" in curves:
            curves["flux"] *= theta[:, column["brightness"], None]
        if "axis_angle" in column:
            angle = np.deg2rad(theta[:, column["axis_angle"], None])
            _turn(curves, "q", "u", 2 * angle)
            # East is to the left of north: at axis_angle 0, east = -alpha and north = beta.
            _turn(curves, "north", "east", angle)
        return curves


def _turn(curves: dict[str, Array], first: str, second: str, angle: Array) -> None:
    """Rotate a pair of curves from the first axis towards the second."""
    if first in curves:
        a, b = curves[first], curves[second]
        cos, sin = np.cos(angle), np.sin(angle)
        curves[first], curves[second] = a * cos - b * sin, a * sin + b * cos


@dataclass(frozen=True, eq=False)
class FreshFlares:
    """Make noisy flares from a training set.

    Args:
        problem: model and campaign.
        stored: the set.
    """

    problem: Problem
    stored: TrainingSet

    def batch(self, which: NDArray[np.int64], rng: np.random.Generator) -> tuple[Array, RowBatch]:
        """Observe stored flares anew.

        Args:
            which: (B,) numbers of stored flares.
            rng: source of schedules, standing, instrument effects, wander and noise.

        Returns:
            theta (B, P) of the problem, and what was measured.
        """
        theta = self._theta(which, rng)
        model = StoredCurves(self.problem.model, self.stored, which)
        schedule = self.problem.campaign.draw(len(which), rng)
        return theta, Problem(model, self.problem.campaign).simulate(theta, schedule, rng)[0]

    def _theta(self, which: NDArray[np.int64], rng: np.random.Generator) -> Array:
        """Draw anew what is not in the curves: axis angle, brightness, and the instrument's parameters."""
        known = self.stored.theta[which]
        theta = np.empty((len(which), len(self.problem.parameters)))
        theta[:, : known.shape[1]] = known
        for column, parameter in enumerate(self.problem.parameters):
            anew = self.problem.model.standard_frame and parameter.name in STANDARD
            if anew or column >= known.shape[1]:
                theta[:, column] = parameter.prior.ppf(rng.random(len(which)))
        return theta
