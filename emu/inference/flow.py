"""The conditional density of Gaussianised parameters given an embedded flare.

A zuko flow of two kinds of transforms, from the data's side to the base's: one triangular affine map, which
takes out location, width and linear correlation; and spline couplings (rational-quadratic splines, Durkan et
al. 2019), which make the rest Gaussian. What depends on the flare alone is computed once a flare, not once a
draw.
"""

import math
from dataclasses import dataclass

import torch
import zuko
from torch import Tensor, nn
from torch.distributions import Transform, constraints
from zuko.lazy import Flow, LazyTransform, UnconditionalDistribution
from zuko.transforms import MonotonicRQSTransform

__all__ = ["FlowChoices", "build_flow", "draw"]


@dataclass(frozen=True)
class FlowChoices:
    """Say how large a flow is.

    Args:
        transforms: number of spline couplings.
        bins: bins of each spline.
        hidden: width of the couplings' networks.
    """

    transforms: int
    bins: int
    hidden: int


class Splines(MonotonicRQSTransform):
    """Add to zuko's spline an inverse that also returns its logarithmic slope from the same bins."""

    def inverse_and_ladj(self, y: Tensor) -> tuple[Tensor, Tensor]:
        """Return x with y = f(x), and log |dx/dy| (Durkan et al. 2019, equations 6 to 8)."""
        mask, x0, x1, y0, y1, d0, d1, s = self.bin(self.searchsorted(self.vertical, y) - 1)
        rise = mask * (y - y0)
        bend = d0 + d1 - 2 * s
        a = (y1 - y0) * (s - d0) + rise * bend
        b = (y1 - y0) * d0 - rise * bend
        c = -s * rise
        z = 2 * c / (-b - (b * b - 4 * a * c).clamp(min=0).sqrt())
        w = z * (1 - z)
        slope = s * s * (2 * s * w + d0 * (1 - z) ** 2 + d1 * z * z) / (s + bend * w) ** 2
        return torch.where(mask, x0 + z * (x1 - x0), y), -(mask * slope.log())


class Coupling(LazyTransform):
    """Transform half of the features given the flare, the other half given the flare and the first half.

    Args:
        order: a permutation of the features; the first half of it is transformed given the flare alone.
        context: length of the embedding.
        choices: bins and width.
    """

    order: Tensor

    def __init__(self, order: Tensor, context: int, choices: FlowChoices) -> None:
        super().__init__()
        self.register_buffer("order", order)
        self.split = (len(order) + 1) // 2
        self.shape = 3 * choices.bins - 1
        self.first = nn.Sequential(
            nn.Linear(context, choices.hidden), nn.SiLU(), _still(choices.hidden, self.split * self.shape)
        )
        rest = len(order) - self.split
        self.from_context = nn.Linear(context, choices.hidden)
        self.from_features = nn.Linear(self.split, choices.hidden, bias=False)
        self.second = nn.Sequential(
            nn.SiLU(),
            nn.Linear(choices.hidden, choices.hidden),
            nn.SiLU(),
            _still(choices.hidden, rest * self.shape),
        )

    def splines(self, numbers: Tensor) -> Splines:
        bins = (self.shape + 1) // 3
        shaped = numbers.unflatten(-1, (-1, self.shape))
        return Splines(*shaped.split([bins, bins, bins - 1], dim=-1))

    def forward(self, c: Tensor | None = None) -> "CouplingTransform":
        return CouplingTransform(self, self.splines(self.first(c)), self.from_context(c))


def _still(width: int, out: int) -> nn.Linear:
    """Return a linear layer that gives zeros until it has learned: every transform starts as the identity."""
    layer = nn.Linear(width, out)
    nn.init.zeros_(layer.weight)
    nn.init.zeros_(layer.bias)
    return layer


class CouplingTransform(Transform):
    """Apply a coupling for given flares.

    Args:
        coupling: the networks.
        first: splines of the first half.
        context: what the flare adds to the hidden layer of the second half's network.
    """

    domain = constraints.real_vector
    codomain = constraints.real_vector
    bijective = True

    def __init__(self, coupling: Coupling, first: Splines, context: Tensor) -> None:
        super().__init__()
        self.coupling, self.first, self.context = coupling, first, context

    def _second(self, features: Tensor) -> Splines:
        hidden = self.coupling.from_features(features) + self.context
        return self.coupling.splines(self.coupling.second(hidden))

    def _halves(self, vector: Tensor) -> tuple[Tensor, Tensor]:
        permuted = vector[..., self.coupling.order]
        return permuted[..., : self.coupling.split], permuted[..., self.coupling.split :]

    def _joined(self, first: Tensor, second: Tensor) -> Tensor:
        return torch.cat([first, second], dim=-1)[..., torch.argsort(self.coupling.order)]

    def _call(self, x: Tensor) -> Tensor:
        return self.call_and_ladj(x)[0]

    def _inverse(self, y: Tensor) -> Tensor:
        return self.inverse_and_ladj(y)[0]

    def log_abs_det_jacobian(self, x: Tensor, y: Tensor) -> Tensor:
        return self.call_and_ladj(x)[1]

    def call_and_ladj(self, x: Tensor) -> tuple[Tensor, Tensor]:
        a, b = self._halves(x)
        first, slope_a = self.first.call_and_ladj(a)
        second, slope_b = self._second(a).call_and_ladj(b)
        return self._joined(first, second), slope_a.sum(-1) + slope_b.sum(-1)

    def inverse_and_ladj(self, y: Tensor) -> tuple[Tensor, Tensor]:
        a, b = self._halves(y)
        first, slope_a = self.first.inverse_and_ladj(a)
        second, slope_b = self._second(first).inverse_and_ladj(b)
        return self._joined(first, second), slope_a.sum(-1) + slope_b.sum(-1)


class Whitening(LazyTransform):
    """Take location, width and linear correlation out: y = A(c) (x - m(c)), A lower triangular.

    Args:
        features: number of parameters D.
        context: length of the embedding.
    """

    def __init__(self, features: int, context: int) -> None:
        super().__init__()
        self.features = features
        self.numbers = _still(context, features * (features + 3) // 2)

    def forward(self, c: Tensor | None = None) -> "WhiteningTransform":
        below = self.features * (self.features - 1) // 2
        location, log_scale, lower = self.numbers(c).split([self.features, self.features, below], dim=-1)
        matrix = torch.diag_embed(log_scale.exp())
        row, column = torch.tril_indices(self.features, self.features, -1)
        filled = torch.zeros_like(matrix)
        filled[..., row, column] = lower
        return WhiteningTransform(matrix + filled, location, log_scale.sum(-1))


class WhiteningTransform(Transform):
    """Apply y = A (x - m)."""

    domain = constraints.real_vector
    codomain = constraints.real_vector
    bijective = True

    def __init__(self, matrix: Tensor, location: Tensor, log_det: Tensor) -> None:
        super().__init__()
        self.matrix, self.location, self.log_det = matrix, location, log_det

    def _call(self, x: Tensor) -> Tensor:
        y: Tensor = (self.matrix @ (x - self.location).unsqueeze(-1)).squeeze(-1)
        return y

    def _inverse(self, y: Tensor) -> Tensor:
        identity = torch.eye(y.shape[-1], dtype=y.dtype)
        inverse: Tensor = torch.linalg.solve_triangular(self.matrix, identity, upper=False)
        x: Tensor = (inverse @ y.unsqueeze(-1)).squeeze(-1) + self.location
        return x

    def log_abs_det_jacobian(self, x: Tensor, y: Tensor) -> Tensor:
        return self.log_det.expand(x.shape[:-1])

    def call_and_ladj(self, x: Tensor) -> tuple[Tensor, Tensor]:
        return self._call(x), self.log_det.expand(x.shape[:-1])

    def inverse_and_ladj(self, y: Tensor) -> tuple[Tensor, Tensor]:
        return self._inverse(y), -self.log_det.expand(y.shape[:-1])


def build_flow(features: int, context: int, choices: FlowChoices) -> Flow:
    """Return a flow that starts as a standard normal density.

    Args:
        features: number of parameters D.
        context: length of the embedding C.
        choices: its size.

    Returns:
        A zuko flow: ``flow(c)`` with c (..., C) is a distribution over (..., D).
    """
    # Which features meet in which coupling is part of the design, hence the fixed seed.
    shuffle = torch.Generator().manual_seed(0)
    couplings = [
        Coupling(torch.randperm(features, generator=shuffle), context, choices) for _ in range(choices.transforms)
    ]
    base = UnconditionalDistribution(
        zuko.distributions.DiagNormal, torch.zeros(features), torch.ones(features), buffer=True
    )
    return Flow([Whitening(features, context), *couplings], base)


def draw(flow: Flow, context: Tensor, noise: Tensor) -> tuple[Tensor, Tensor]:
    """Turn standard normal noise into draws and their log density, each transform inverted once.

    Args:
        flow: from `build_flow`.
        context: embedded flares, (B, C).
        noise: standard normal, (N, B, D).

    Returns:
        Draws z (N, B, D), and log q(z) (N, B).
    """
    log_q = -0.5 * (noise**2 + math.log(2 * math.pi)).sum(-1)
    z = noise
    for lazy in reversed(list(flow.transform.transforms)):
        z, ladj = lazy(context).inverse_and_ladj(z)
        log_q = log_q - ladj
    return z, log_q
