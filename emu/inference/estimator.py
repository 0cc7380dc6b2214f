"""Posterior draws of a whole batch of flares from a trained network."""

from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor

import numpy as np
import torch
from numpy.typing import NDArray
from torch import Tensor

from emu.families.parameters import Parameter
from emu.families.prior import Prior
from emu.inference.embedding import grid_rows
from emu.inference.flow import draw
from emu.inference.network import Network
from emu.observe.rows import RowBatch

__all__ = ["NeuralEstimator"]

Array = NDArray[np.float64]
_POINTS_AT_ONCE = 8192
_FLARES_AT_ONCE = 8  # fixed, so that the draws of a flare depend neither on threads nor on memory


class NeuralEstimator:
    """Sample from, and evaluate, q(theta | flare).

    The network works on z, the parameters mapped so that their box prior is standard normal: a draw can never
    leave the prior's bounds. It may leave the valid region inside them; such draws have prior density zero.

    Args:
        network: description of the network.
        prior: joint prior of the P parameters, in the order of the columns of theta.
        weights: state of ``network.build()``.
    """

    def __init__(self, network: Network, prior: Prior, weights: dict[str, Tensor]) -> None:
        self.network = network
        self.prior = prior
        self.density = network.build()
        self.density.load_state_dict(weights)
        self.density.eval().requires_grad_(False)

    @property
    def parameters(self) -> tuple[Parameter, ...]:
        """Return the P parameters in the order of the columns of theta."""
        return self.prior.parameters

    def embed(self, batch: RowBatch) -> Tensor:
        """Embed flares: (B, context) float32."""
        features = torch.from_numpy(grid_rows(batch, self.density.embedding_net.grid))
        parts = [self.density.embedding_net(part) for part in features.split(_FLARES_AT_ONCE)]
        return torch.cat(parts) if parts else torch.empty(0, self.network.embedding.context)

    def sample(
        self,
        batch: RowBatch,
        draws: int,
        seed: int,
        progress: Callable[[int], None] | None = None,
        workers: int = 1,
    ) -> tuple[Array, Array]:
        """Draw from the posterior of every flare.

        Args:
            batch: rows of B flares in geometric units.
            draws: draws D a flare.
            seed: the draws of flare number i depend on the seed and i alone.
            progress: called with the number of flares done since the last call.
            workers: threads.

        Returns:
            theta (B, D, P), and log q(theta) (B, D).
        """
        count, features = len(batch), len(self.parameters)
        theta = np.empty((count, draws, features))
        log_q = np.empty((count, draws))
        context = self.embed(batch)

        def fill(start: int) -> int:
            torch.set_num_threads(1)
            part = slice(start, min(start + _FLARES_AT_ONCE, count))
            noise = [_noise(seed, flare, draws, features) for flare in range(part.start, part.stop)]
            with torch.no_grad():
                z, log_density = draw(self.density.net, context[part], torch.stack(noise, dim=1))
            gauss = z.numpy().astype(np.float64).swapaxes(0, 1)
            theta[part] = self.prior.from_gauss(gauss)
            log_q[part] = log_density.numpy().T - self.prior.log_jacobian(gauss)
            return part.stop - part.start

        with ThreadPoolExecutor(workers) as pool:
            for done in pool.map(fill, range(0, count, _FLARES_AT_ONCE)):
                if progress is not None:
                    progress(done)
        return theta, log_q

    def log_prob(self, theta: Array, batch: RowBatch) -> Array:
        """Evaluate the log density of parameters, each flare embedded once.

        Args:
            theta: (B, P), or (B, D, P).
            batch: rows of B flares.

        Returns:
            log q(theta): (B,) or (B, D), a density in theta; minus infinity out of the prior's bounds.
        """
        single = theta.ndim == 2
        points = theta[:, None] if single else theta
        context = self.embed(batch)
        log_q = np.empty(points.shape[:2])
        at_once = max(1, _POINTS_AT_ONCE // max(1, points.shape[1]))
        for start in range(0, len(points), at_once):
            part = slice(start, start + at_once)
            z = self.prior.to_gauss(points[part])
            with torch.no_grad():
                flow = self.density.net(context[part])
                log_density = flow.log_prob(torch.from_numpy(z.swapaxes(0, 1)).float())
            log_q[part] = log_density.numpy().T - self.prior.log_jacobian(z)
        bounds = np.array([parameter.bounds for parameter in self.parameters])
        inside = ((points >= bounds[:, 0]) & (points <= bounds[:, 1])).all(axis=-1)
        log_q = np.where(inside, log_q, -np.inf)
        return log_q[:, 0] if single else log_q


def _noise(seed: int, flare: int, draws: int, features: int) -> Tensor:
    """Return the standard normal noise (draws, features) of one flare."""
    rng = np.random.default_rng(np.random.SeedSequence(seed, spawn_key=(flare,)))
    return torch.from_numpy(rng.standard_normal((draws, features), dtype=np.float32))
