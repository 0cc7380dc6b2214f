"""The curves of one emitter by the names of its parameters: the public door to the exact model."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from emu.assemble import assemble, in_radians
from emu.errors import UserError
from emu.families.catalogue import family
from emu.raymap.catalogue import find_raymap

__all__ = ["curves"]

_SECOND = ("peak_time_2", "rise_time_2", "decay_time_2", "weight_2")
_MOST_SPIN = 0.998


def _check_names(family_name: str, given: Mapping[str, float], needed: tuple[str, ...]) -> None:
    """Refuse values that are missing, unknown or not finite numbers."""
    unknown = sorted(set(given) - {*needed, "spot_size", *_SECOND})
    missing = [name for name in needed if name not in given]
    if unknown:
        raise UserError(f"{family_name}: unknown parameter {', '.join(unknown)}; it takes {', '.join(needed)}")
    if missing:
        raise UserError(f"{family_name}: missing parameter {', '.join(missing)}")
    for name, value in given.items():
        if not np.isscalar(value) or isinstance(value, str) or not np.isfinite(float(value)):
            raise UserError(f"{family_name}: {name} must be a finite number, not {value!r}")


def _check_values(family_name: str, given: Mapping[str, float], orders: int) -> None:
    """Refuse values outside the model's physics (prior bounds are not looked at)."""
    positive = ("radius", "rise_time", "decay_time", "rise_time_2", "decay_time_2", "turn_duration", "spot_size")
    rules = [(name, given[name] > 0.0, "must be above 0") for name in positive if name in given]
    rules.append(("spin", abs(given["spin"]) <= _MOST_SPIN, f"must be within -{_MOST_SPIN} and {_MOST_SPIN}"))
    rules.append(("inclination", 0.0 <= given["inclination"] <= 180.0, "must be within 0 and 180 deg"))
    for name, holds, rule in rules:
        if not holds:
            raise UserError(f"{family_name}: {name} {rule}, not {given[name]:g}")
    if orders not in (1, 2):
        raise UserError(f"{family_name}: orders must be 1 (direct image) or 2 (with the next), not {orders!r}")


def curves(
    family_name: str,
    parameters: Mapping[str, float],
    times: ArrayLike,
    *,
    raymap: str = "exact",
    orders: int = 1,
    spot_points: int | None = None,
) -> dict[str, NDArray[Any]]:
    """Compute the noiseless curves of one emitter.

    Args:
        family_name: `<path>-<inner>` or the path of a family's TOML.
        parameters: name -> value; degrees, GM/c2 and GM/c3. `spot_size`, and `peak_time_2`, `rise_time_2`,
            `decay_time_2`, `weight_2` together, may be left out; all others of the family are required.
        times: (T,) arrival times counted from t_ref, GM/c3.
        raymap: how rays are found: "exact" or "learned".
        orders: number of images added, 1 or 2.
        spot_points: number of quadrature points of a spot; by its size when left out.

    Returns:
        (T,) arrays flux, q, u, east, north (GM/c2), emission_time (GM/c3), redshift, magnification; the integers
        "failures" (rays not found, which add nothing) "tube" (rays from
        within a caustic tube) and "exact" (rays that were solved, not learned).
        With turbulence, q and u are those of the ordered part.

    Raises:
        UserError: a name is unknown or missing, or the path is not possible at an emission time.
    """
    kind = family(family_name)
    bumps = 2 if any(name in parameters for name in _SECOND) else min(kind.source.bumps, 1)
    source = replace(kind.source, bumps=bumps)
    _check_names(family_name, parameters, source.parameter_names)
    _check_values(family_name, parameters, orders)
    when = np.atleast_1d(np.asarray(times, dtype=np.float64))
    if when.ndim != 1 or when.size == 0 or not np.all(np.isfinite(when)):
        raise UserError(f"{family_name}: times must be a list of finite numbers")
    values = {name: np.full((1, 1), float(value)) for name, value in parameters.items()}
    out = assemble(source, values, when[None, :], find_raymap(raymap), orders, spot_points)
    emission = out["emission_time"][0]
    if not source.path.valid(in_radians(values), (float(emission.min()), float(emission.max())), 0.0)[0]:
        raise UserError(
            f"{family_name}: the path is not possible between the emission times {emission.min():.1f} and "
            f"{emission.max():.1f} GM/c3: inside the horizon, at R <= 0 or faster than light"
        )
    return {name: array[0] for name, array in out.items()}
