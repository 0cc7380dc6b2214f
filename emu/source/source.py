"""An emitter put together from its parts."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from emu.source.change import FieldChange
from emu.source.field import BACKGROUND_NAMES, background
from emu.source.light import brightness_profile
from emu.source.motion import Array, Path, Values
from emu.source.scatter import Scatter

__all__ = ["Source"]

_LIGHT_NAMES = ("index", "polarised_share", "brightness")
_BUMP_NAMES = ("peak_time", "rise_time", "decay_time")


@dataclass(frozen=True)
class Source:
    """Compose a path, a change of the field, an optional scatter and one or two bumps of brightness.

    Args:
        path: where the emitter is. change: what happens to its field. scatter: random part of q and u, or None.
        bumps: 0 for a steady emitter, 1 or 2.
    """

    path: Path
    change: FieldChange
    scatter: Scatter | None = None
    bumps: int = 1

    @property
    def parameter_names(self) -> tuple[str, ...]:
        """Return the names of all values that the emitter needs, the spot's size apart."""
        second = (*(f"{name}_2" for name in _BUMP_NAMES), "weight_2") if self.bumps == 2 else ()
        first = _BUMP_NAMES if self.bumps else ()
        scatter = self.scatter.parameter_names if self.scatter else ()
        parts = (self.path.parameter_names, BACKGROUND_NAMES, self.change.parameter_names, scatter)
        return ("spin", "inclination", "axis_angle", *sum(parts, ()), *_LIGHT_NAMES, *first, *second)

    def field(self, values: Values, time: Array, cylinder: Array) -> tuple[Array, Array]:
        """Return direction (..., 3) on (R, phi, z) and strength (...) of the field at emission."""
        return self.change.apply(values, time, background(values, cylinder))

    def brightness(self, values: Values, time: Array) -> Array:
        """Return A E(t) at emission times counted from t0."""
        if self.bumps == 0:
            return np.broadcast_to(values["brightness"], time.shape)
        first = brightness_profile(time, values["peak_time"], values["rise_time"], values["decay_time"])
        if self.bumps == 2:
            peak, rise, decay = (values[f"{name}_2"] for name in _BUMP_NAMES)
            first = first + values["weight_2"] * brightness_profile(time, peak, rise, decay)
        return values["brightness"] * first
