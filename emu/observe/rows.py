"""Measured numbers in long format, one a row: a single flare, and a padded batch of flares."""

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

__all__ = ["KINDS", "Rows", "RowBatch"]

KINDS = ("flux", "q", "u", "Q", "U", "east", "north")
"""What a row measures; the code of a kind is its index here."""

# Any positive error does: the mask gives a padded row no weight.
_PADDING = {"time": 0.0, "kind": 0, "value": 0.0, "error": 1.0}


@dataclass(frozen=True)
class Rows:
    """Hold the rows of one flare in geometric units.

    Args:
        time: (R,) float64, GM/c^3 after t_ref.
        kind: (R,) int8, index in KINDS.
        value: (R,) float64: flux, Q and U in the flux unit; q and u fractions; east and north GM/c^2.
        error: (R,) float64, 1-sigma, > 0, in the unit of the value.
    """

    time: NDArray[np.float64]
    kind: NDArray[np.int8]
    value: NDArray[np.float64]
    error: NDArray[np.float64]

    def __post_init__(self) -> None:
        shapes = {self.time.shape, self.kind.shape, self.value.shape, self.error.shape}
        if len(shapes) != 1 or self.time.ndim != 1:
            raise ValueError(f"time, kind, value and error must share one shape (R,), not {shapes}")

    def __len__(self) -> int:
        return int(self.time.size)


@dataclass(frozen=True)
class RowBatch:
    """Hold the rows of many flares, padded to a common number.

    Padded rows have time 0, kind 0, value 0, error 1 and mask False.

    Args:
        time, kind, value, error: (B,R), as in Rows.
        mask: (B,R) bool, True where a row is real.
    """

    time: NDArray[np.float64]
    kind: NDArray[np.int8]
    value: NDArray[np.float64]
    error: NDArray[np.float64]
    mask: NDArray[np.bool_]

    def __post_init__(self) -> None:
        shapes = {column.shape for column in (self.time, self.kind, self.value, self.error, self.mask)}
        if len(shapes) != 1 or self.time.ndim != 2:
            raise ValueError(f"time, kind, value, error and mask must share one shape (B,R), not {shapes}")

    def __len__(self) -> int:
        return int(self.time.shape[0])

    @classmethod
    def stack(cls, flares: Sequence[Rows]) -> "RowBatch":
        """Pad flares to the longest of them.

        Args:
            flares: one Rows a flare; may be empty.

        Returns:
            A batch of len(flares) flares in the same order.
        """
        width = max(map(len, flares), default=0)
        mask = np.arange(width) < np.array([len(rows) for rows in flares], dtype=int)[:, None]
        columns: dict[str, Any] = {}
        for name, dtype in (("time", float), ("kind", np.int8), ("value", float), ("error", float)):
            column = np.full(mask.shape, _PADDING[name], dtype=dtype)
            for line, rows in zip(column, flares, strict=True):
                line[: len(rows)] = getattr(rows, name)
            columns[name] = column
        return cls(**columns, mask=mask)

    def rows(self, flare: int) -> Rows:
        """Return the real rows of one flare."""
        keep = self.mask[flare]
        return Rows(
            self.time[flare, keep], self.kind[flare, keep], self.value[flare, keep], self.error[flare, keep]
        )

    def replace(self, **columns: NDArray[Any]) -> "RowBatch":
        """Return a copy with some columns exchanged, for instance `value=`."""
        return replace(self, **columns)
