"""Rows of one flare and of many."""

import numpy as np
import pytest

from emu.observe.rows import KINDS, RowBatch, Rows


def rows(count: int) -> Rows:
    numbers = np.arange(1.0, count + 1.0)
    return Rows(numbers, (numbers % len(KINDS)).astype(np.int8), 10.0 * numbers, 0.1 * numbers)


def test_stacking_pads_and_gives_back() -> None:
    flares = [rows(3), rows(0), rows(5)]
    batch = RowBatch.stack(flares)
    assert batch.time.shape == (3, 5)
    assert len(batch) == 3
    np.testing.assert_array_equal(batch.mask.sum(axis=1), [3, 0, 5])
    padded = ~batch.mask
    for column, filler in (("time", 0.0), ("kind", 0), ("value", 0.0), ("error", 1.0)):
        assert np.all(getattr(batch, column)[padded] == filler)
    for place, flare in enumerate(flares):
        for column in ("time", "kind", "value", "error"):
            np.testing.assert_array_equal(getattr(batch.rows(place), column), getattr(flare, column))
    assert batch.kind.dtype == np.int8


def test_replace_exchanges_a_column_only() -> None:
    batch = RowBatch.stack([rows(3)])
    changed = batch.replace(value=-batch.value)
    np.testing.assert_array_equal(changed.value, -batch.value)
    assert changed.time is batch.time


def test_an_empty_batch() -> None:
    assert RowBatch.stack([]).time.shape == (0, 0)


def test_columns_of_unlike_shape_are_an_error() -> None:
    good = rows(3)
    with pytest.raises(ValueError, match="one shape"):
        Rows(good.time, good.kind[:2], good.value, good.error)
    batch = RowBatch.stack([good])
    with pytest.raises(ValueError, match="one shape"):
        batch.replace(value=np.zeros((1, 2)))
