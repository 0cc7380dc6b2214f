"""Turbulent cells: part of the light has random angles that renew."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

from emu.source.light import Array, polarisation_degree

__all__ = ["Turbulent"]


@dataclass(frozen=True)
class Turbulent:
    """Scatter q and u with the deviation Pi_0 `scatter` and the correlation exp(-|dt|/cell_lifetime).

    The Gaussian limit of N cells of equal flux and random angle that hold the share f of the light of an emitter of
    polarised share h_all: scatter = h_all f (2N)^(-1/2), ordered share h_all (1 - f) (random walk of N cells; Hughes &
    Miller 1991).
    """

    parameter_names = ("scatter", "cell_lifetime")

    def process(self, values: Mapping[str, Array]) -> tuple[Array, Array]:
        """Return the standard deviation of q and of u, and the correlation time in GM/c3."""
        return polarisation_degree(values["index"]) * values["scatter"], values["cell_lifetime"]
