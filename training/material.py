"""What a network learns from: a training set, split, observed afresh and gathered on a grid."""

from dataclasses import dataclass
from pathlib import Path

import numpy as np
import torch
from torch import Tensor

from emu.errors import UserError
from emu.families.installed import model
from emu.inference.embedding import Grid, grid_rows
from emu.observe.campaign import parse_campaign
from emu.observe.rows import KINDS
from emu.problem import Problem
from training.fresh import FreshFlares
from training.simulate import model_text
from training.store import TrainingSet

__all__ = ["Material", "load_material", "measured_kinds", "stream"]


def stream(seed: int, *key: int) -> np.random.Generator:
    """Return the random numbers that belong to a seed and a key: for instance a purpose and a step."""
    return np.random.default_rng(np.random.SeedSequence(seed, spawn_key=key))


@dataclass(frozen=True, eq=False)
class Material:
    """Give noisy flares of one family, gathered on a grid.

    Args:
        problem: model and campaign.
        stored: the set; its last flares are held out.
        held_out: how many.
        grid: where rows are gathered.
    """

    problem: Problem
    stored: TrainingSet
    held_out: int
    grid: Grid

    def __post_init__(self) -> None:
        if self.stored.layout.flares < 2 * self.held_out:
            raise UserError(
                f"{self.stored.layout.flares} flares of {self.problem.name} are too few with {self.held_out}"
                " of them held out; simulate more"
            )

    def train(self, count: int, rng: np.random.Generator) -> tuple[Tensor, Tensor]:
        """Observe flares that are for training, drawn with replacement.

        Returns:
            z (count, P) Gaussianised parameters, and features (count, kinds, nodes, 4); float32.
        """
        return self._observe(rng.integers(self.stored.layout.flares - self.held_out, size=count), rng)

    def kept(self, rng: np.random.Generator) -> tuple[Tensor, Tensor]:
        """Observe every held-out flare once."""
        flares = self.stored.layout.flares
        return self._observe(np.arange(flares - self.held_out, flares), rng)

    def _observe(self, which: np.ndarray, rng: np.random.Generator) -> tuple[Tensor, Tensor]:
        theta, rows = FreshFlares(self.problem, self.stored).batch(which, rng)
        z = self.problem.prior.to_gauss(theta).astype(np.float32)
        return torch.from_numpy(z), torch.from_numpy(grid_rows(rows, self.grid))


def load_material(set_path: Path, held_out: int, nodes: int) -> Material:
    """Load a set together with the problem it was made for.

    Args:
        set_path: folder of the set.
        held_out: flares kept apart.
        nodes: time nodes of the grid.

    Raises:
        UserError: the set is not complete, or its model is not what it was.
    """
    stored = TrainingSet.load(set_path)
    layout = stored.layout
    problem = Problem(model(layout.model), parse_campaign(layout.campaign, f"{set_path}: its campaign"))
    if model_text(problem.model) != layout.definition:
        raise UserError(f"{set_path}: the definition of {layout.model} has changed since; simulate anew")
    return Material(problem, stored, held_out, Grid(measured_kinds(problem), nodes, layout.half_span))


def measured_kinds(problem: Problem) -> tuple[str, ...]:
    """Return the kinds of rows that flares of a problem's campaign can have, in the order of KINDS."""
    measured = {kind for measurement in problem.campaign.streams for kind in measurement.kinds}
    return tuple(kind for kind in KINDS if kind in measured)
