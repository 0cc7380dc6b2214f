"""The flow is a density: it integrates to one, and its draws follow it."""

import numpy as np
import pytest
import torch
from scipy.stats import kstest, multivariate_normal

from emu.inference.flow import FlowChoices, build_flow, draw


def stirred(features: int, context: int = 5, seed: int = 0):
    """Return a flow far from the identity."""
    torch.manual_seed(seed)
    flow = build_flow(features, context, FlowChoices(transforms=3, bins=6, hidden=16))
    with torch.no_grad():
        for parameter in flow.parameters():
            parameter += 0.15 * torch.randn_like(parameter)
    return flow.double()


def test_an_untrained_flow_is_standard_normal():
    flow = build_flow(3, 4, FlowChoices(transforms=3, bins=6, hidden=16))
    z = torch.randn(50, 3)
    expected = multivariate_normal(np.zeros(3)).logpdf(z.numpy())
    np.testing.assert_allclose(flow(torch.randn(50, 4)).log_prob(z).detach().numpy(), expected, atol=1e-5)


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_the_density_integrates_to_one(seed):
    flow, context = stirred(2, seed=seed), torch.randn(5).double()
    edge = torch.linspace(-15, 15, 601, dtype=torch.float64)
    middle = (edge[1:] + edge[:-1]) / 2
    points = torch.cartesian_prod(middle, middle)
    with torch.no_grad():
        total = flow(context).log_prob(points).exp().sum() * float(edge[1] - edge[0]) ** 2
    assert float(total) == pytest.approx(1, abs=5e-3)


@pytest.mark.parametrize("features", [2, 5, 14])
def test_draws_carry_their_own_density(features):
    flow = stirred(features)
    context, noise = torch.randn(7, 5).double(), torch.randn(200, 7, features).double()
    with torch.no_grad():
        z, log_q = draw(flow, context, noise)
        again = flow(context).log_prob(z)
        back = flow.transform(context)(z)
    assert z.shape == (200, 7, features)
    np.testing.assert_allclose(log_q.numpy(), again.numpy(), atol=1e-6)
    np.testing.assert_allclose(back.numpy(), noise.numpy(), atol=1e-6)


def test_draws_follow_the_density():
    flow, context = stirred(2, seed=4), torch.randn(1, 5).double()
    with torch.no_grad():
        z = draw(flow, context, torch.randn(4000, 1, 2).double())[0][:, 0]
        # Probability integral transform by the flow's own forward map: normal if the draws are right.
        forward = flow.transform(context[0])(z).numpy()
    for column in forward.T:
        assert kstest(column, "norm").pvalue > 1e-3


def test_it_learns_a_bent_density():
    torch.manual_seed(0)
    flow = build_flow(2, 1, FlowChoices(transforms=3, bins=8, hidden=32))
    optimizer = torch.optim.Adam(flow.parameters(), lr=5e-3)

    def banana(count: int):
        c = torch.rand(count, 1) * 2
        x = torch.randn(count, 1)
        return c, torch.cat([x, c * x**2 + 0.3 * torch.randn(count, 1)], dim=1)

    for _ in range(150):
        c, z = banana(256)
        optimizer.zero_grad()
        (-flow(c).log_prob(z)).mean().backward()
        optimizer.step()
    with torch.no_grad():
        loss = float(-flow(banana(4000)[0] * 0 + 1).log_prob(banana_at_one(4000)).mean())
    # Entropy of the truth: that of a unit normal and that of a normal of width 0.3.
    entropy = 0.5 * np.log(2 * np.pi * np.e) * 2 + np.log(0.3)
    assert entropy - 0.05 < loss < entropy + 0.15


def banana_at_one(count: int):
    x = torch.randn(count, 1)
    return torch.cat([x, x**2 + 0.3 * torch.randn(count, 1)], dim=1)
