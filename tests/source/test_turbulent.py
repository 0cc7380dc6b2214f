"""The Gaussian limit of turbulent cells against a simulation of the cells themselves."""

from __future__ import annotations

import numpy as np
import pytest

from emu.source.light import polarisation_degree
from emu.source.turbulent import Turbulent


def _cells(rng, flares, cells, times, lifetime, degree):
    """Simulate N cells of equal flux whose angles renew at random with the rate 1/lifetime: q (flares, T)."""
    q = np.zeros((flares, len(times)))
    gaps = np.diff(times, prepend=times[0])
    for _ in range(cells):
        angle = rng.uniform(0.0, np.pi, flares)
        for j, gap in enumerate(gaps):
            renewed = rng.random(flares) > np.exp(-gap / lifetime)
            angle = np.where(renewed, rng.uniform(0.0, np.pi, flares), angle)
            q[:, j] += degree * np.cos(2.0 * angle) / cells
    return q


@pytest.mark.parametrize("cells", [10, 40])
def test_cells_tend_to_the_process(cells):
    """Random walk of N cells (Hughes & Miller 1991): deviation Pi_0 h f (2N)^(-1/2), correlation exp(-dt/tau)."""
    rng = np.random.default_rng(11)
    times = np.array([0.0, 3.0, 10.0, 30.0])
    values = {"index": np.array(0.6), "scatter": np.array(1.0 / np.sqrt(2 * cells)), "cell_lifetime": np.array(12.0)}
    sigma, lifetime = Turbulent().process(values)
    q = _cells(rng, 40000, cells, times, 12.0, float(polarisation_degree(np.array(0.6))))
    assert np.abs(q).max() < polarisation_degree(np.array(0.6))  # none beyond Pi_0 in this many draws
    assert q.std(axis=0) == pytest.approx(np.full(4, float(sigma)), rel=0.015)
    correlation = np.corrcoef(q.T)[0]
    assert correlation == pytest.approx(np.exp(-times / float(lifetime)), abs=0.015)
    kurtosis = np.mean(q[:, 0] ** 4) / np.mean(q[:, 0] ** 2) ** 2
    assert kurtosis == pytest.approx(3.0 - 1.5 / cells, abs=0.08)  # closed form for cosines of random angles
