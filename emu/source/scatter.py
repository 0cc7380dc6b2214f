"""The seam for a random wander of the polarisation beside the ordered part."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

__all__ = ["Scatter"]

Array = NDArray[np.float64]


class Scatter(Protocol):
    """Add to q and to u an independent Ornstein-Uhlenbeck process in arrival time."""

    @property
    def parameter_names(self) -> tuple[str, ...]:
        """Return the names of the values it reads beside the spectral index."""
        ...

    def process(self, values: Mapping[str, Array]) -> tuple[Array, Array]:
        """Return the standard deviation and the correlation time (GM/c3) of the process."""
        ...
