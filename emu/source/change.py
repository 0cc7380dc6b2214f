"""The seam for what changes the field inside the emitter."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

__all__ = ["FieldChange"]

Array = NDArray[np.float64]


class FieldChange(Protocol):
    """Change direction and strength of the field at emission."""

    @property
    def parameter_names(self) -> tuple[str, ...]:
        """Return the names of the values it reads beside tilt and pitch."""
        ...

    def apply(self, values: Mapping[str, Array], time: Array, b: Array) -> tuple[Array, Array]:
        """Return direction (..., 3) and strength (...) of the field.

        Args:
            values: rad, GM/c2 and GM/c3, broadcasting with the times.
            time: (...) emission times counted from t0.
            b: (..., 3) unit background direction on (R, phi, z).
        """
        ...
