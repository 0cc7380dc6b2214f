"""The seam between what may have happened and everything that judges it: ours or a user's own."""

from __future__ import annotations

from typing import Protocol, runtime_checkable

import numpy as np
from numpy.typing import NDArray

from emu.families.density import Array
from emu.families.parameters import Parameter

__all__ = ["Model"]


@runtime_checkable
class Model(Protocol):
    """Predict noiseless curves from parameters.

    Times are GM/c3 from the reference time, positions GM/c2, q and u are Q/I and U/I, flux is in the
    flux unit of the campaign.
    """

    @property
    def name(self) -> str:
        """Return the name under which results are filed."""
        ...

    @property
    def parameters(self) -> tuple[Parameter, ...]:
        """Return P parameters in the order of the columns of theta."""
        ...

    @property
    def kinds(self) -> tuple[str, ...]:
        """Return which of flux, q, u, east, north the curves hold."""
        ...

    @property
    def standard_frame(self) -> bool:
        """Tell whether brightness scales the flux, and axis_angle rotates (q, u) and (east, north)."""
        ...

    def valid(self, theta: Array) -> NDArray[np.bool_]:
        """Tell for theta (N, P) which rows can be computed: (N,)."""
        ...

    def curves(self, theta: Array, times: Array) -> dict[str, Array]:
        """Compute curves.

        Args:
            theta: (N, P) float64, valid.
            times: (T,) or (N, T) float64.

        Returns:
            kind -> (N, T); optionally "failures" -> (N,), how many points could not be computed.
        """
        ...

    def scatter(self, theta: Array) -> tuple[Array, Array] | None:
        """Return the standard deviation (N,) and lifetime (N,) of a random wander of q and of u.

        It is an Ornstein-Uhlenbeck process in arrival time, independent for q and u; None means none.
        """
        ...
