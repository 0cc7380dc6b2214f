"""Gathering rows on a grid: weights, offsets, masks."""

import numpy as np
import pytest
import torch

from emu.inference.embedding import Grid, GridEmbedding, grid_rows
from emu.observe.rows import KINDS, RowBatch, Rows

GRID = Grid(("flux", "q", "u"), nodes=4, half_span=8.0)  # nodes at -6, -2, 2, 6


def rows(*measured) -> Rows:
    time, kind, value, error = zip(*measured, strict=True)
    codes = np.array([KINDS.index(k) for k in kind], np.int8)
    return Rows(np.array(time, float), codes, np.array(value, float), np.array(error, float))


def test_a_node_holds_the_weighted_mean_of_its_rows():
    batch = RowBatch.stack([rows((-7.0, "q", 0.1, 0.01), (-5.0, "q", 0.4, 0.02), (3.0, "u", -0.3, 0.1))])
    features = grid_rows(batch, GRID)
    assert features.shape == (1, 3, 4, 4)
    # Weights 1/error^2: 10,000 and 2,500; offsets -1 and +1 of a spacing of 4.
    assert features[0, 1, 0] == pytest.approx([0.16, np.log(12_500), -0.6 / 4, 1])
    assert features[0, 2, 2] == pytest.approx([-0.3, np.log(100), 0.25, 1])
    assert np.count_nonzero(features[..., 3]) == 2
    assert not features[features[..., 3] == 0].any()


def test_padding_and_order_of_rows_change_nothing():
    rng = np.random.default_rng(1)
    one = Rows(rng.uniform(-8, 8, 20), rng.integers(0, 3, 20).astype(np.int8), rng.normal(size=20), np.ones(20))
    other = Rows(rng.uniform(-8, 8, 50), rng.integers(0, 3, 50).astype(np.int8), rng.normal(size=50), np.ones(50))
    shuffled = rng.permutation(20)
    mixed = Rows(*(getattr(one, name)[shuffled] for name in ("time", "kind", "value", "error")))
    alone = grid_rows(RowBatch.stack([one]), GRID)[0]
    np.testing.assert_array_equal(alone, grid_rows(RowBatch.stack([other, one]), GRID)[1])
    np.testing.assert_allclose(alone, grid_rows(RowBatch.stack([mixed]), GRID)[0], rtol=1e-6)


def test_masked_rows_weigh_nothing_whatever_they_hold():
    batch = RowBatch.stack([rows((0.5, "flux", 1.0, 0.1), (1.5, "flux", 2.0, 0.1))])
    harmed = batch.replace(value=np.array([[1.0, np.nan]]), mask=np.array([[True, False]]))
    found = grid_rows(harmed, GRID)[0, 0, 2]
    assert found == pytest.approx([1.0, np.log(100), (0.5 - 2) / 4, 1])


def test_kinds_that_the_grid_does_not_know_are_left_out():
    batch = RowBatch.stack([rows((0.5, "east", 3.0, 0.1), (0.5, "q", 0.2, 0.1))])
    assert np.count_nonzero(grid_rows(batch, GRID)[..., 3]) == 1


def test_calibration_brings_every_kind_to_order_one():
    rng = np.random.default_rng(2)
    features = np.zeros((500, 3, 4, 4), np.float32)
    features[..., 0] = rng.normal(size=(500, 3, 4)) * np.array([[[100.0], [1e-3], [1.0]]])
    features[..., 1] = rng.normal(8.0, 2.0, (500, 3, 4))
    features[..., 3] = 1
    embedding = GridEmbedding(GRID, 16, 1, 5)
    embedding.calibrate(features)
    assert embedding.scale[:, 0].tolist() == pytest.approx([100, 1e-3, 1], rel=0.1)
    assert embedding.weight_center[:, 0].tolist() == pytest.approx([8, 8, 8], rel=0.05)
    assert embedding(torch.from_numpy(features)).shape == (500, 5)
