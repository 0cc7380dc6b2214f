"""A mixture of quadratic maps fitted to draws: a wide proposal that follows a curved posterior.

Each map writes the draws of one cluster along their principal axes, widest first, and every axis as a
quadratic of the wider ones plus Student noise. Its density is closed and its draws are independent.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.special import gammaln, logsumexp, stdtrit

from emu.families.density import Array

__all__ = ["MapMixture", "QuadraticMap", "fit_maps"]

_FREEDOM = 6.0  # of the Student noise: tails heavier than a Gaussian posterior's
_WIDER = 1.15  # than the residuals of the fit
_RIDGE = 3.0  # penalty per standardised feature, in draws
_FLOOR = 1e-9


@dataclass(frozen=True)
class QuadraticMap:
    """Draw y = centre + axes^T x with x_j = quadratic_j(x_1 .. x_{j-1}) + scale_j Student.

    Args:
        centre: (P,).
        axes: (P, P) rows: principal directions times widths, widest first.
        coefficients: one array for every axis, of its quadratic features.
        scale: (P,) of the Student noise.
    """

    centre: Array
    axes: Array
    coefficients: tuple[Array, ...]
    scale: Array

    def sample(self, n: int, rng: np.random.RandomState) -> Array:
        """Draw y (n, P)."""
        return self._at(rng.standard_t(_FREEDOM, size=(n, len(self.scale))))

    def quantile(self, u: Array) -> Array:
        """Map the unit cube (N, P), faces left out, to y (N, P): uniform u give draws."""
        return self._at(stdtrit(_FREEDOM, u))

    def widened(self, factor: float) -> QuadraticMap:
        """Return the map with its noise a number of times as wide."""
        return replace(self, scale=factor * self.scale)

    def log_prob(self, y: Array) -> Array:
        """Return the log density of y (N, P): (N,)."""
        x = np.asarray(np.linalg.solve(self.axes.T, (y - self.centre).T).T, float)
        log_volume = float(np.linalg.slogdet(self.axes)[1])
        means = [_features(x[:, :axis]) @ c for axis, c in enumerate(self.coefficients)]
        noise = (x - np.stack(means, axis=1)) / self.scale
        return np.asarray(np.sum(_log_student(noise) - np.log(self.scale), axis=1) - log_volume, float)

    def _at(self, noise: Array) -> Array:
        """Map Student noise of unit scale (N, P) to y."""
        x: Array = np.zeros(noise.shape)
        for axis, coefficient in enumerate(self.coefficients):
            x[:, axis] = _features(x[:, :axis]) @ coefficient + self.scale[axis] * noise[:, axis]
        return self.centre + x @ self.axes


@dataclass(frozen=True)
class MapMixture:
    """Mix quadratic maps by their shares of the draws."""

    share: Array
    maps: tuple[QuadraticMap, ...]

    def sample(self, n: int, rng: np.random.RandomState) -> Array:
        """Draw y (n, P) in random order."""
        counts = rng.multinomial(n, self.share)
        drawn = [m.sample(int(c), rng) for m, c in zip(self.maps, counts, strict=True)]
        return np.asarray(rng.permutation(np.concatenate(drawn)), float)

    def log_prob(self, y: Array) -> Array:
        """Return the log density of y (N, P): (N,)."""
        parts = [np.log(s) + m.log_prob(y) for s, m in zip(self.share, self.maps, strict=True)]
        return np.asarray(logsumexp(np.stack(parts), axis=0), float)


def fit_maps(y: Array, *, seed: int, most: int = 4) -> MapMixture:
    """Fit a mixture to equally weighted draws, with as many maps as describe held-out draws best.

    Args:
        y: (N, P) draws in straight coordinates, random order.
        seed: of the clustering.
        most: largest number of maps tried; it doubles from one.
    """
    kept = max(1, len(y) // 5)
    counts = [count for count in (1, 2, 4, 8, 16) if count <= most and len(y) >= 100 * count]
    trials = [_fit(y[kept:], count, seed) for count in counts or [1]]
    best = int(np.argmax([trial.log_prob(y[:kept]).mean() for trial in trials]))
    return _fit(y, len(trials[best].maps), seed)


def _fit(y: Array, count: int, seed: int) -> MapMixture:
    """Cluster the draws and fit a map to each cluster."""
    if count == 1:
        return MapMixture(np.ones(1), (_fit_one(y),))
    from sklearn.mixture import GaussianMixture  # slow to import

    white = (y - y.mean(axis=0)) / (y.std(axis=0) + _FLOOR)
    mixture = GaussianMixture(count, reg_covar=1e-4, max_iter=50, n_init=2, random_state=seed, tol=1e-2)
    label = _labels(mixture, white)
    groups = [y[label == k] for k in range(count)]
    groups = [group for group in groups if len(group) >= 4 * y.shape[1]] or [y]
    share = np.array([len(group) for group in groups], float)
    return MapMixture(share / share.sum(), tuple(_fit_one(group) for group in groups))


def _labels(mixture: object, white: Array) -> NDArray[np.int64]:
    """Label draws by cluster; a clustering that has not settled is as valid a start as any."""
    import warnings

    from sklearn.exceptions import ConvergenceWarning

    with warnings.catch_warnings():
        warnings.simplefilter("ignore", ConvergenceWarning)
        return np.asarray(mixture.fit_predict(white), np.int64)  # type: ignore[attr-defined]


def _fit_one(y: Array) -> QuadraticMap:
    """Fit one map by ridge regression along principal axes."""
    centre = y.mean(axis=0)
    value, vector = np.linalg.eigh(np.cov(y.T).reshape(y.shape[1], y.shape[1]))
    width = np.sqrt(np.maximum(value[::-1], _FLOOR**2))
    axes = (vector[:, ::-1] * width).T
    x = np.linalg.solve(axes.T, (y - centre).T).T
    coefficients: list[Array] = []
    scale = np.empty(y.shape[1])
    for axis in range(y.shape[1]):
        features = _features(x[:, :axis])
        penalty = np.full(features.shape[1], _RIDGE)
        penalty[0] = 0.0
        normal = features.T @ features + np.diag(penalty)
        coefficients.append(np.asarray(np.linalg.solve(normal, features.T @ x[:, axis]), float))
        freedom = max(1.0, len(x) - features.shape[1])
        scale[axis] = np.sqrt(np.sum((x[:, axis] - features @ coefficients[-1]) ** 2) / freedom)
    # A Student variable of unit scale has variance f / (f - 2).
    return QuadraticMap(centre, axes, tuple(coefficients),
                        _WIDER * scale * np.sqrt((_FREEDOM - 2.0) / _FREEDOM) + _FLOOR)


def _features(x: Array) -> Array:
    """Return 1, x_j and x_j x_k of (N, J): (N, 1 + J + J (J + 1) / 2). Squares are clipped at 4 widths."""
    bounded = np.clip(x, -4.0, 4.0)  # a quadratic that runs away in the tails makes hopeless proposals
    first, second = np.triu_indices(x.shape[1])
    parts = [np.ones((len(x), 1)), bounded, bounded[:, first] * bounded[:, second]]
    return np.concatenate(parts, axis=1)


def _log_student(noise: Array) -> Array:
    """Return the log density of Student's distribution of unit scale."""
    level = gammaln((_FREEDOM + 1.0) / 2.0) - gammaln(_FREEDOM / 2.0) - 0.5 * np.log(_FREEDOM * np.pi)
    return np.asarray(level - (_FREEDOM + 1.0) / 2.0 * np.log1p(noise**2 / _FREEDOM), float)
