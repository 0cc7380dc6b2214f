"""Random cases for comparing the package with the independent calculation.

Rays cover every spin, inclination and distance the package promises; flares cover every path, field change
and bump, most of them from ranges like those of the shipped priors, some wider.
"""

import math

import numpy as np

from tests.reference.coordinates import horizon
from tests.reference.emitter import motion, tetrad

__all__ = ["FAMILIES", "draw_flare", "draw_ray", "possible"]

FAMILIES = tuple(f"{path}-{inner}" for path in ("midplane", "helix", "drift")
                 for inner in ("frozen", "turning", "turbulent", "turning+turbulent"))  # fmt: skip

#: Corners of the domain: axes of the screen and of the hole, the nearest and the farthest sources.
CORNERS = (
    (0.0, 0.0, 6.0, 90.0, 30.0), (0.9, 0.0, 6.0, 90.0, 30.0), (-0.9, 180.0, 4.0, 70.0, 200.0),
    (0.7, 30.0, 8.0, 0.0, 0.0), (0.7, 30.0, 8.0, 180.0, 0.0), (0.998, 60.0, horizon(0.998) + 0.5, 90.0, 40.0),
    (-0.998, 85.0, horizon(0.998) + 0.5, 60.0, 100.0), (0.998, 90.0, 1000.0, 90.0, 90.0),
    (-0.5, 120.0, 1000.0, 100.0, 182.0), (0.0, 45.0, 2.5, 90.0, 150.0),
)  # fmt: skip


def draw_ray(rng: np.random.Generator) -> tuple[float, float, float, float, float]:
    """Return (spin, inclination, r, theta, phi), angles in degrees: isotropic, log-uniform in r."""
    spin = rng.uniform(-0.998, 0.998)
    r = math.exp(rng.uniform(math.log(horizon(spin) + 0.5), math.log(1000.0 if rng.random() < 0.3 else 20.0)))
    angles = np.degrees(np.arccos(rng.uniform(-1.0, 1.0, 2)))
    return spin, float(angles[0]), r, float(angles[1]), rng.uniform(0.0, 360.0)


def possible(values: dict[str, float]) -> bool:
    """Tell whether a path is timelike, at r >= 3 and off the axis for emission times in -160 to 160."""
    for t in np.linspace(-160.0, 160.0, 81):
        if values["radius"] + values.get("opening", 0.0) * t <= 0.0:
            return False
        at = motion(values, float(t))
        if at.r < 3.0:
            return False
        local = np.array([1.0, *at.rate]) @ np.linalg.inv(tetrad(at.r, at.theta, values["spin"]))
        if local[0] <= float(np.linalg.norm(local[1:])):
            return False
    return True


def _log(rng: np.random.Generator, low: float, high: float) -> float:
    return math.exp(rng.uniform(math.log(low), math.log(high)))


def _shared(rng: np.random.Generator, wide: bool) -> dict[str, float]:
    """Return the parameters of every family."""
    return {
        "spin": rng.uniform(-0.998, 0.998) if wide else rng.uniform(-0.95, 0.95),
        "inclination": math.degrees(math.acos(rng.uniform(-1.0, 1.0))),
        "axis_angle": rng.uniform(0.0, 360.0),
        "radius": _log(rng, 3.5, 300.0) if wide else rng.uniform(5.0, 15.0),
        "phase": rng.uniform(0.0, 360.0),
        "tilt": rng.uniform(0.0, 180.0),
        "pitch": math.degrees(math.asin(rng.uniform(-1.0, 1.0))),
        "index": rng.uniform(0.3, 1.2),
        "polarised_share": rng.uniform(0.05, 1.0),
        "brightness": _log(rng, 0.3, 3.0),
        "peak_time": rng.uniform(-30.0, 30.0),
        "rise_time": _log(rng, 5.0, 80.0),
        "decay_time": _log(rng, 5.0, 80.0),
    }


def _own(rng: np.random.Generator, family: str) -> dict[str, float]:
    """Return the parameters of the path and of the inner change."""
    path, inner = family.split("-")
    values = {} if path == "drift" else {"rate": rng.uniform(0.3, 1.5)}
    if path != "midplane":
        values["opening"] = rng.uniform(-0.03 if path == "drift" else 0.0, 0.03)
        values["rise"] = rng.choice([-1.0, 1.0]) * rng.uniform(0.03, 0.3)
        values["height"] = rng.uniform(-10.0, 10.0)
    if "turning" in inner:
        values |= {"turn": rng.uniform(30.0, 180.0), "roll": rng.uniform(0.0, 360.0),
                   "turn_time": rng.uniform(-30.0, 30.0), "turn_duration": _log(rng, 3.0, 30.0),
                   "dip": rng.uniform(0.0, 0.9)}  # fmt: skip
    if "turbulent" in inner:
        values |= {"scatter": _log(rng, 0.03, 0.22), "cell_lifetime": _log(rng, 5.0, 60.0)}
    return values


def draw_flare(rng: np.random.Generator, family: str, wide: bool = False) -> dict[str, float]:
    """Return possible parameters of a family; one flare in four has a second bump."""
    while True:
        values = _shared(rng, wide) | _own(rng, family)
        if rng.random() < 0.25:
            values |= {"peak_time_2": rng.uniform(-30.0, 30.0), "rise_time_2": _log(rng, 5.0, 80.0),
                       "decay_time_2": _log(rng, 5.0, 80.0), "weight_2": rng.uniform(0.2, 2.0)}  # fmt: skip
        values = {name: float(value) for name, value in values.items()}
        if possible(values):
            return values
