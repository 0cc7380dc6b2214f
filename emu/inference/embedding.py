"""From a padded table of measured rows to a vector of fixed length, whatever the schedule.

Rows are gathered on a fixed grid of time nodes. Each node holds, for every kind of measurement, the
inverse-variance weighted mean, the logarithm of the summed weight, the weighted mean offset of the rows
from the node, and a flag that says whether there was any row at all. Missing rows weigh nothing: nothing is
imputed.
"""

from dataclasses import dataclass

import numpy as np
import torch
from numpy.typing import NDArray
from torch import Tensor, nn

from emu.observe.rows import KINDS, RowBatch

__all__ = ["CHANNELS", "Grid", "GridEmbedding", "grid_rows"]

CHANNELS = 4  # mean, log weight, offset, present


@dataclass(frozen=True)
class Grid:
    """Say which kinds are gathered, on how many nodes, over which times.

    Args:
        kinds: names of the kinds, each in `emu.observe.rows.KINDS`.
        nodes: number of time nodes.
        half_span: the nodes cover the times -half_span to half_span, GM/c^3.
    """

    kinds: tuple[str, ...]
    nodes: int
    half_span: float

    @property
    def size(self) -> int:
        """Return the length of the vector that `grid_rows` makes of one flare."""
        return len(self.kinds) * self.nodes * CHANNELS


def grid_rows(batch: RowBatch, grid: Grid) -> NDArray[np.float32]:
    """Gather rows on the grid's nodes.

    Args:
        batch: rows of B flares; masked rows are ignored.
        grid: kinds and nodes.

    Returns:
        Features, (B, kinds, nodes, 4) float32: weighted mean value, log of the summed weight, weighted mean
        offset from the node in units of the spacing (-0.5 to 0.5), 1 where a row fell on the node; all four
        are 0 elsewhere.
    """
    count = batch.time.shape[0]
    cells = len(grid.kinds) * grid.nodes
    column = np.full(len(KINDS), -1)
    column[[KINDS.index(kind) for kind in grid.kinds]] = np.arange(len(grid.kinds))
    kind = column[batch.kind]
    place = (batch.time / grid.half_span + 1) * (0.5 * grid.nodes) - 0.5
    node = np.clip(np.rint(place), 0, grid.nodes - 1).astype(np.int64)
    used = batch.mask & (kind >= 0)
    flat = (np.arange(count)[:, None] * cells + kind * grid.nodes + node)[used]
    weight = batch.error[used] ** -2.0

    def total(values: NDArray[np.float64]) -> NDArray[np.float64]:
        return np.bincount(flat, weights=values, minlength=count * cells).astype(np.float64, copy=False)

    summed = total(weight)
    present = summed > 0
    safe = np.where(present, summed, 1.0)
    mean = total(weight * batch.value[used]) / safe
    offset = total(weight * (place - node)[used]) / safe
    features = np.stack([mean, np.log(safe), offset, present], axis=-1)
    return features.reshape(count, len(grid.kinds), grid.nodes, CHANNELS).astype(np.float32)


class ResidualBlock(nn.Module):
    """Add to a vector what two layers make of it."""

    def __init__(self, width: int) -> None:
        super().__init__()
        self.norm = nn.LayerNorm(width)
        self.first = nn.Linear(width, width)
        self.second = nn.Linear(width, width)
        nn.init.zeros_(self.second.weight)
        nn.init.zeros_(self.second.bias)

    def forward(self, vector: Tensor) -> Tensor:
        change: Tensor = self.second(nn.functional.silu(self.first(self.norm(vector))))
        return vector + change


class GridEmbedding(nn.Module):
    """Embed gridded rows by a residual multilayer perceptron.

    Values and log weights are scaled per kind by buffers that `calibrate` sets from flares of the training
    set; values are then passed through asinh, because fluxes and offsets have long tails.

    Args:
        grid: what `grid_rows` gathers.
        width: width of the residual blocks.
        blocks: number of residual blocks.
        out: length of the embedding.
    """

    center: Tensor
    scale: Tensor
    weight_center: Tensor
    weight_scale: Tensor

    def __init__(self, grid: Grid, width: int, blocks: int, out: int) -> None:
        super().__init__()
        self.grid = grid
        for name, fill in (("center", 0.0), ("scale", 1.0), ("weight_center", 0.0), ("weight_scale", 1.0)):
            self.register_buffer(name, torch.full((len(grid.kinds), 1), fill))
        self.inward = nn.Linear(grid.size, width)
        self.blocks = nn.Sequential(*(ResidualBlock(width) for _ in range(blocks)))
        self.outward = nn.Sequential(nn.LayerNorm(width), nn.Linear(width, out))

    def calibrate(self, features: NDArray[np.float32]) -> None:
        """Set the scales from the features of a few hundred flares.

        Args:
            features: as `grid_rows` returns them, (B, kinds, nodes, 4).
        """
        for k in range(len(self.grid.kinds)):
            cells = features[:, k].reshape(-1, CHANNELS)
            cells = cells[cells[:, 3] > 0].astype(np.float64)
            if len(cells) == 0:
                continue
            low, middle, high = np.percentile(cells[:, 0], [16, 50, 84])
            self.center[k, 0] = float(middle)
            self.scale[k, 0] = float(max((high - low) / 2, 1e-6))
            self.weight_center[k, 0] = float(cells[:, 1].mean())
            self.weight_scale[k, 0] = float(max(cells[:, 1].std(), 1e-3))

    def forward(self, features: Tensor) -> Tensor:
        """Embed gridded rows (..., kinds, nodes, 4): (..., out)."""
        value, weight, offset, present = features.unbind(-1)
        value = torch.asinh((value - self.center) / self.scale) * present
        weight = (weight - self.weight_center) / self.weight_scale * present
        joined = torch.stack([value, weight, 2 * offset, present], dim=-1).flatten(-3)
        embedding: Tensor = self.outward(self.blocks(self.inward(joined)))
        return embedding
