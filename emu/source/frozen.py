"""No change inside the emitter: the field is the background's."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from emu.source.change import Array

__all__ = ["Frozen"]


@dataclass(frozen=True)
class Frozen:
    """Leave the field as it is, of strength 1."""

    parameter_names: tuple[str, ...] = ()

    def apply(self, values: Mapping[str, Array], time: Array, b: Array) -> tuple[Array, Array]:
        """Return b and ones."""
        return b, np.ones(b.shape[:-1])
