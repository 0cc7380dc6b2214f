"""The probability of each family given a flare: a first answer to *which*."""

from collections.abc import Mapping
from dataclasses import asdict, dataclass
from typing import Any

import numpy as np
import torch
from numpy.typing import NDArray
from torch import Tensor, nn

from emu.configs import check_keys
from emu.inference.embedding import grid_rows
from emu.inference.network import EmbeddingChoices, sizes
from emu.observe.rows import RowBatch

__all__ = ["ClassifierNetwork", "FamilyClassifier"]


@dataclass(frozen=True)
class ClassifierNetwork:
    """Describe a classifier completely, so that its weights alone restore it.

    Args:
        families: names of the F families, in the order of the probabilities.
        kinds: kinds of measurement that the embedding reads.
        half_span: times it covers, GM/c^3.
        embedding: its size.
    """

    families: tuple[str, ...]
    kinds: tuple[str, ...]
    half_span: float
    embedding: EmbeddingChoices

    def build(self) -> "Logits":
        """Return the untrained network."""
        return Logits(self)

    def table(self) -> dict[str, Any]:
        """Return the description as plain numbers and text, for JSON."""
        return asdict(self) | {"families": list(self.families), "kinds": list(self.kinds)}

    @classmethod
    def from_table(cls, table: Mapping[str, Any], where: str) -> "ClassifierNetwork":
        """Restore a description from `table`.

        Raises:
            UserError: a key is unknown or missing.
        """
        check_keys(table, ("families", "kinds", "half_span", "embedding"), (), where)
        return cls(
            families=tuple(table["families"]),
            kinds=tuple(table["kinds"]),
            half_span=float(table["half_span"]),
            embedding=sizes(EmbeddingChoices, table["embedding"], f"{where}: embedding"),
        )


class Logits(nn.Module):
    """Give every family a number whose softmax is its probability."""

    def __init__(self, network: ClassifierNetwork) -> None:
        super().__init__()
        self.embedding = network.embedding.build(network.kinds, network.half_span)
        self.head = nn.Sequential(nn.SiLU(), nn.Linear(network.embedding.context, len(network.families)))

    def forward(self, features: Tensor) -> Tensor:
        """Map gridded rows (B, kinds, nodes, 4) to logits (B, F)."""
        logits: Tensor = self.head(self.embedding(features))
        return logits


class FamilyClassifier:
    """Give the probability of each family, all of them equally probable before the flare is seen.

    Args:
        network: description of the network.
        weights: state of ``network.build()``.
    """

    def __init__(self, network: ClassifierNetwork, weights: dict[str, Tensor]) -> None:
        self.network = network
        self._logits = network.build()
        self._logits.load_state_dict(weights)
        self._logits.eval().requires_grad_(False)

    @property
    def families(self) -> tuple[str, ...]:
        """Return the names of the F families."""
        return self.network.families

    def probabilities(self, batch: RowBatch) -> NDArray[np.float64]:
        """Return the probabilities (B, F) of the families for B flares; each row adds up to 1."""
        features = torch.from_numpy(grid_rows(batch, self._logits.embedding.grid))
        shares: NDArray[np.float64] = self._logits(features).double().softmax(-1).numpy()
        return shares
