"""Nodes follow the shape of a curve, and say truthfully how well they do."""

import numpy as np
import pytest
from scipy.interpolate import barycentric_interpolate

from training.fresh import interpolate
from training.nodes import refine

WIDTHS = np.geomspace(0.5, 30.0, 40)
PLACES = np.random.default_rng(1).uniform(-40, 40, 40)


def bumps(times):
    """Return Lorentzian bumps of many widths: (N, M, 1), none of them a polynomial."""
    shape = 1 / (1 + ((times - PLACES[:, None]) / WIDTHS[:, None]) ** 2)
    return shape[:, :, None], np.zeros(len(times), np.int64)


def miss(made):
    times = np.tile(np.linspace(-49, 49, 4001), (40, 1))
    found = interpolate(made.times, made.curves.astype(np.float32), np.arange(40), times)[0]
    return np.abs(found - bumps(times)[0][:, :, 0]).max(axis=1) / 0.01


def test_nodes_go_where_a_curve_is_sharp():
    spread = refine(bumps, 40, 50.0, np.array([0.01]), (64, 64))
    uniform = refine(bumps, 40, 50.0, np.array([0.01]), (128, 0))
    assert spread.times.shape == (40, 128)
    assert (np.diff(spread.times, axis=1) > 0).all()
    sharp = WIDTHS < 3
    assert miss(spread)[sharp].max() < 0.1 * miss(uniform)[sharp].max()
    assert spread.curves == pytest.approx(bumps(spread.times.astype(float))[0])


def test_the_estimated_error_is_of_the_size_of_the_true_one():
    made = refine(bumps, 40, 50.0, np.array([0.01]), (48, 16))
    true = miss(made)
    seen = true > 1e-4  # below it float32 speaks
    assert seen.sum() > 10
    ratio = made.error[seen] / true[seen]
    assert 0.5 < np.median(ratio) < 3
    assert ratio.min() > 0.15  # even for bumps narrower than the first nodes' spacing


def test_failures_of_both_rounds_add_up():
    made = refine(lambda t: (bumps(t)[0], (WIDTHS < 1).astype(np.int64)), 40, 50.0, np.array([0.01]), (16, 8))
    np.testing.assert_array_equal(made.failures, 2 * (WIDTHS < 1))


def test_interpolation_agrees_with_a_library():
    rng = np.random.default_rng(2)
    nodes = np.sort(rng.uniform(-1, 1, (1, 4)), axis=1).astype(np.float32)
    values = rng.normal(size=(1, 4, 1)).astype(np.float32)
    times = rng.uniform(-1, 1, (1, 20))
    expected = barycentric_interpolate(nodes[0].astype(float), values[0, :, 0].astype(float), times[0])
    np.testing.assert_allclose(interpolate(nodes, values, np.zeros(1, np.int64), times)[0, 0], expected)
