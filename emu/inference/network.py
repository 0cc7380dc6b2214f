"""The network of an estimator: an embedding and a flow in sbi's container, described by a few numbers."""

from collections.abc import Mapping
from dataclasses import asdict, dataclass, fields
from typing import Any, TypeVar

import torch
from sbi.neural_nets.estimators.zuko_flow import ZukoFlow

from emu.configs import check_keys
from emu.errors import UserError
from emu.inference.embedding import CHANNELS, Grid, GridEmbedding
from emu.inference.flow import FlowChoices, build_flow

__all__ = ["EmbeddingChoices", "Network", "sizes"]


@dataclass(frozen=True)
class EmbeddingChoices:
    """Say how large an embedding is.

    Args:
        nodes: time nodes of the grid.
        width: width of the residual blocks.
        blocks: number of residual blocks.
        context: length of the embedding.
    """

    nodes: int
    width: int
    blocks: int
    context: int

    def build(self, kinds: tuple[str, ...], half_span: float) -> GridEmbedding:
        """Return an untrained embedding of rows of these kinds within +- half_span (GM/c^3)."""
        return GridEmbedding(Grid(kinds, self.nodes, half_span), self.width, self.blocks, self.context)


Sizes = TypeVar("Sizes", EmbeddingChoices, FlowChoices)


def sizes(kind: type[Sizes], table: Mapping[str, Any], where: str) -> Sizes:
    """Read a table of positive whole numbers.

    Args:
        kind: EmbeddingChoices or FlowChoices, whose fields are the keys.
        table: parsed TOML or JSON.
        where: file and table, for the message.

    Raises:
        UserError: a key is unknown or missing, or a value is no positive whole number.
    """
    check_keys(table, [field.name for field in fields(kind)], (), where)
    for key, value in table.items():
        if isinstance(value, bool) or not isinstance(value, int) or value < 1:
            raise UserError(f"{where}: {key} is {value!r}; give a positive whole number")
    return kind(**table)


@dataclass(frozen=True)
class Network:
    """Describe a network completely, so that its weights alone restore it.

    Args:
        kinds: kinds of measurement that the embedding reads.
        half_span: times it covers, GM/c^3.
        features: number of parameters.
        embedding: its size.
        flow: its size.
    """

    kinds: tuple[str, ...]
    half_span: float
    features: int
    embedding: EmbeddingChoices
    flow: FlowChoices

    def build(self) -> ZukoFlow:
        """Return the untrained network: ``.embedding_net`` for the rows and ``.net``, a zuko flow."""
        embedding = self.embedding.build(self.kinds, self.half_span)
        return ZukoFlow(
            net=build_flow(self.features, self.embedding.context, self.flow),
            embedding_net=embedding,
            input_shape=torch.Size([self.features]),
            condition_shape=torch.Size([len(self.kinds), self.embedding.nodes, CHANNELS]),
        )

    def table(self) -> dict[str, Any]:
        """Return the description as plain numbers and text, for JSON."""
        return asdict(self) | {"kinds": list(self.kinds)}

    @classmethod
    def from_table(cls, table: Mapping[str, Any], where: str) -> "Network":
        """Restore a description from `table`.

        Raises:
            UserError: a key is unknown or missing.
        """
        check_keys(table, ("kinds", "half_span", "features", "embedding", "flow"), (), where)
        return cls(
            kinds=tuple(table["kinds"]),
            half_span=float(table["half_span"]),
            features=int(table["features"]),
            embedding=sizes(EmbeddingChoices, table["embedding"], f"{where}: embedding"),
            flow=sizes(FlowChoices, table["flow"], f"{where}: flow"),
        )
