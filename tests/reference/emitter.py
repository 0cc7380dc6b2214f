"""The emitter: path, frame, field and light of one point, from the conventions (emu/guide/conventions.md).

Vectors of the frame of the zero-angular-momentum observer are (r, theta, phi) triples, right-handed
(Bardeen, Press & Teukolsky 1972). Angles in radians except in the parameter dict, which has the public names
in degrees.
"""

import math
from dataclasses import dataclass

import numpy as np

__all__ = ["Motion", "Sight", "motion", "stokes", "tetrad"]


def tetrad(r: float, theta: float, spin: float) -> np.ndarray:
    """Return the legs e_t, e_r, e_theta, e_phi as rows, in Boyer-Lindquist components (4, 4)."""
    sigma = r**2 + (spin * math.cos(theta)) ** 2
    delta = r**2 - 2.0 * r + spin**2
    wide = (r**2 + spin**2) ** 2 - delta * (spin * math.sin(theta)) ** 2
    drag = 2.0 * spin * r / wide
    clock = math.sqrt(wide / (sigma * delta))
    return np.array(
        [
            [clock, 0.0, 0.0, clock * drag],
            [0.0, math.sqrt(delta / sigma), 0.0, 0.0],
            [0.0, 0.0, 1.0 / math.sqrt(sigma), 0.0],
            [0.0, 0.0, 0.0, math.sqrt(sigma / wide) / math.sin(theta)],
        ]
    )


@dataclass(frozen=True)
class Motion:
    """Where a point is at a Boyer-Lindquist time and how it moves.

    Attributes:
        r, theta, phi: place. rate: (dr/dt, dtheta/dt, dphi/dt).
    """

    r: float
    theta: float
    phi: float
    rate: tuple[float, float, float]

    @property
    def cylindrical(self) -> float:
        """The distance from the axis, r sin(theta)."""
        return self.r * math.sin(self.theta)


def motion(
    values: dict[str, float], t: float, offset: tuple[float, float, float] = (0.0, 0.0, 0.0)
) -> Motion:
    """Return the place and motion at time t since t_0 of a point displaced by `offset` (R, phi, z)."""
    start, opening, rise = values["radius"], values.get("opening", 0.0), values.get("rise", 0.0)
    centre = start + opening * t
    turn = values.get("rate", 0.0) / (start**1.5 + values["spin"])
    across, height = centre + offset[0], values.get("height", 0.0) + rise * t + offset[2]
    phi = math.radians(values["phase"]) + offset[1] + turn * start * t / centre
    r = math.hypot(across, height)
    rate = (
        (across * opening + height * rise) / r,
        (height * opening - across * rise) / r**2,
        turn * (start / centre) ** 2,
    )
    return Motion(r, math.atan2(across, height), phi, rate)


def _field(values: dict[str, float], t: float, place: Motion) -> tuple[np.ndarray, float]:
    """Return the unit field (r, theta, phi) in the comoving axes and its strength."""
    tilt = math.radians(values["tilt"])
    pitch = math.radians(values["pitch"])
    tangent = math.sin(pitch) * place.cylindrical / values["radius"]
    pitch = math.atan2(tangent, math.cos(pitch))
    sin, cos = math.sin(place.theta), math.cos(place.theta)
    outward, upward, along = np.array([sin, cos, 0.0]), np.array([cos, -sin, 0.0]), np.array([0.0, 0.0, 1.0])
    poloidal = math.sin(tilt) * outward + math.cos(tilt) * upward
    b = math.cos(pitch) * poloidal + math.sin(pitch) * along
    if "turn" not in values:
        return b, 1.0
    first = math.cos(tilt) * outward - math.sin(tilt) * upward
    second = np.cross(b, first)
    roll = math.radians(values["roll"])
    aside = math.cos(roll) * first + math.sin(roll) * second
    x = (t - values["turn_time"]) / values["turn_duration"]
    angle = math.radians(values["turn"]) * (1.0 + math.tanh(x)) / 2.0
    return math.cos(angle) * b + math.sin(angle) * aside, 1.0 - values["dip"] / math.cosh(
        min(abs(x), 300.0)
    ) ** 2


def _brightness(values: dict[str, float], t: float) -> float:
    """Return A E(t), one or two bumps."""
    total = 0.0
    for tail, weight in (("", 1.0), ("_2", values.get("weight_2", 0.0))):
        if "peak_time" + tail in values:
            late = t - values["peak_time" + tail]
            width = values["rise_time" + tail] if late < 0.0 else values["decay_time" + tail]
            total += weight * math.exp(-0.5 * (late / width) ** 2)
    return values["brightness"] * total


@dataclass(frozen=True)
class Sight:
    """What a point shows.

    Attributes:
        flux: Stokes I. polarised: F_p. vector: the electric unit vector, Boyer-Lindquist components (4,).
        redshift: g.
    """

    flux: float
    polarised: float
    vector: np.ndarray
    redshift: float


def stokes(
    values: dict[str, float], t: float, place: Motion, momentum: np.ndarray, magnification: float
) -> Sight:
    """Return the light of one point emitter along the photon with covariant `momentum` (E = 1)."""
    legs = tetrad(place.r, place.theta, values["spin"])
    inverse = np.linalg.inv(legs)
    local = np.array([1.0, *place.rate]) @ inverse  # dx^a/dt on the legs
    velocity = local[1:] / local[0]
    speed2 = float(velocity @ velocity)
    gamma = 1.0 / math.sqrt(1.0 - speed2)
    boost = np.eye(4)  # from the legs to the comoving axes, without rotation
    boost[0, 0] = gamma
    boost[0, 1:] = boost[1:, 0] = -gamma * velocity
    boost[1:, 1:] += (gamma - 1.0) * np.outer(velocity, velocity) / max(speed2, 1e-300)
    photon = legs @ momentum
    photon[0] = -photon[0]
    photon = boost @ photon
    redshift = 1.0 / photon[0]
    direction = photon[1:] / photon[0]
    b, strength = _field(values, t, place)
    electric = np.cross(direction, b)
    sin_zeta = float(np.linalg.norm(electric))
    s = values["index"]
    flux = _brightness(values, t) * redshift ** (3.0 + s) * magnification * (strength * sin_zeta) ** (1.0 + s)
    index = 2.0 * s + 1.0
    purity = (index + 1.0) / (index + 7.0 / 3.0)
    comoving = np.concatenate([[0.0], electric / sin_zeta])
    vector = (np.linalg.inv(boost) @ comoving) @ legs
    return Sight(flux, flux * purity * values["polarised_share"], vector, redshift)
