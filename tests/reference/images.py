"""The image of a given order of a point near the hole, found from the one without spin by continuation.

The order of an image is the number of conjugate points on its ray (0 for the direct image, a minimum of the
arrival time; 1 for the next, a saddle). Without spin this is the same as the swept angle: psi, then
2 pi - psi. A ray keeps its number as spin and source change unless the source crosses a caustic.
G = c = M = 1, angles in radians.
"""

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numba import njit
from scipy.integrate import solve_ivp

from tests.reference.coordinates import horizon, jacobian, place, time_shift
from tests.reference.hamiltonian import Ray, far_radius, shoot, slopes, start

__all__ = ["Image", "NoImage", "find_image", "has_twin", "refine"]


class NoImage(Exception):
    """No image of the wanted order was found."""


@dataclass(frozen=True)
class Image:
    """A solved ray: its label, its end at the source and what the source's Boyer-Lindquist frame sees.

    Attributes:
        unknowns: (alpha, beta, affine length, emission time).
        ray: its end at the source.
        delay: T - r*(far observer), Boyer-Lindquist.
        momentum: p_a in Boyer-Lindquist components (t, r, theta, phi) with E = 1.
        magnification: screen area per cross-section of the bundle at the source.
    """

    unknowns: np.ndarray
    ray: Ray
    delay: float
    momentum: np.ndarray
    magnification: float


@njit(cache=True)
def _swing(impact: float, angle: float, steps: int) -> float:
    """Return u after `angle` of u'' = 3 u^2 - u from u = 0, u' = 1/b (Darwin 1959); +-9 once out of range."""
    h = angle / steps
    u, v = 0.0, 1.0 / impact
    for _ in range(steps):
        k1u, k1v = v, 3.0 * u * u - u
        a, b = u + 0.5 * h * k1u, v + 0.5 * h * k1v
        k2u, k2v = b, 3.0 * a * a - a
        a, b = u + 0.5 * h * k2u, v + 0.5 * h * k2v
        k3u, k3v = b, 3.0 * a * a - a
        a, b = u + h * k3u, v + h * k3v
        u += h * (k1u + 2.0 * k2u + 2.0 * k3u + b) / 6.0
        v += h * (k1v + 2.0 * k2v + 2.0 * k3v + 3.0 * a * a - a) / 6.0
        if u < 0.0:
            return -9.0
        if u > 2.0:
            return 9.0
    return u


def swept_impact(r: float, angle: float) -> float:
    """Return the impact parameter of the ray that sweeps `angle` from infinity to r without spin."""
    low, high = 1e-9, 2.0 * r + 20.0
    for _ in range(90):
        middle = 0.5 * (low + high)
        low, high = (middle, high) if _swing(middle, angle, 4000) > 1.0 / r else (low, middle)
    return 0.5 * (low + high)


def _first_guess(inclination: float, r: float, theta: float, phi: float, order: int, far: float) -> np.ndarray:
    """Return (alpha, beta, length) without spin: bisection for b, then the nearest point of that ray."""
    toward = np.array([math.sin(inclination), 0.0, math.cos(inclination)])
    sin = math.sin(theta)
    source = np.array([sin * math.cos(phi), sin * math.sin(phi), math.cos(theta)])
    right, up = source[1], source[2] * math.sin(inclination) - source[0] * math.cos(inclination)
    psi = math.atan2(math.hypot(right, up), float(source @ toward))
    azimuth = math.atan2(up, right) + math.pi * order
    impact = swept_impact(r, (order + 1) * math.pi - psi if order % 2 else order * math.pi + psi)
    alpha, beta = impact * math.cos(azimuth), impact * math.sin(azimuth)
    first = start(0.0, inclination, alpha, beta, far, 7)
    found = solve_ivp(
        lambda s, y: slopes(y, 0.0),
        (0.0, -far - r - 60.0),
        first,
        method="DOP853",
        rtol=1e-9,
        atol=1e-9,
        dense_output=True,
    )
    low, high = far - r - 5.0, -float(found.t[-1])
    for _ in range(4):  # the ray may pass the source's surroundings twice: look everywhere, then closer
        lengths = np.linspace(low, high, 400)
        gaps = np.linalg.norm(found.sol(-lengths)[1:4].T - r * source, axis=1)
        best = int(np.argmin(gaps))
        low, high = lengths[max(best - 1, 0)], lengths[min(best + 1, 399)]
    return np.array([alpha, beta, lengths[best]])


def refine(
    spin: float,
    inclination: float,
    unknowns: np.ndarray,
    event: Callable[[float], np.ndarray],
    arrival: float | None,
    far: float,
    rtol: float = 1e-12,
    tries: int = 12,
) -> tuple[np.ndarray, Ray]:
    """Solve ray(alpha, beta, length) = event(t) for the event's place, or for place and arrival time.

    Args:
        unknowns: start (alpha, beta, length, t).
        event: Kerr-Schild event (4,) of the source at Boyer-Lindquist time t.
        arrival: wanted arrival time less r*(far); None keeps t as it is.
        tries: Newton steps allowed.

    Raises:
        NoImage: no convergence.
    """
    now = unknowns.copy()
    before = math.inf
    for _ in range(tries):
        ray = shoot(spin, inclination, now[0], now[1], now[2], far, rtol)
        if ray is None:
            raise NoImage("the integrator gave up")
        target = event(now[3])
        gap = ray.x - target + (0.0 if arrival is None else np.array([arrival, 0.0, 0.0, 0.0]))
        size = float(np.linalg.norm(gap[1:] if arrival is None else gap))
        h = 1e-3
        motion = (event(now[3] + h) - event(now[3] - h)) / (2.0 * h)
        columns = np.array([ray.d_alpha, ray.d_beta, -ray.k, -motion]).T
        try:
            step = (
                np.append(np.linalg.solve(columns[1:, :3], -gap[1:]), 0.0)
                if arrival is None
                else np.linalg.solve(columns, -gap)
            )
        except np.linalg.LinAlgError as error:
            raise NoImage("the bundle is singular") from error
        scale = max(1.0, float(np.linalg.norm(target[1:])))
        if size < 1e3 * rtol * scale and float(np.abs(step[:2]).max()) < 3e3 * rtol * scale:
            return now, ray
        if size > 50.0 * before or size > 20.0 * scale + 100.0:
            raise NoImage("Newton runs away")
        before = size
        limit = 0.3 * max(1.0, math.hypot(now[0], now[1]))
        now = now + step * min(1.0, limit / max(float(np.abs(step[:2]).max()), 1e-300))
    raise NoImage("Newton does not converge")


def finish(
    spin: float, inclination: float, unknowns: np.ndarray, r: float, theta: float, phi: float, far: float
) -> Image:
    """Return the image of a solved ray, its screen axes carried along to the source."""
    ray = shoot(spin, inclination, unknowns[0], unknowns[1], unknowns[2], far, screen=True)
    if ray is None:
        raise NoImage("the integrator gave up")
    momentum = ray.p @ jacobian(r, theta, phi, spin)
    return Image(unknowns, ray, -float(ray.x[0]) - far - time_shift(r, spin), momentum, abs(1.0 / ray.spread))


def _follow(
    inclination: float,
    guess: np.ndarray,
    route: Callable[[float], tuple[float, float, float, float]],
    far: float,
    shortest: float = 5e-4,
) -> tuple[np.ndarray, Ray]:
    """Follow an image along route(s) -> (spin, r, theta, phi), 0 <= s <= 1, with linear prediction.

    Raises:
        NoImage: the image is lost at a step of `shortest`.
    """
    s, step, now, slope = 0.0, 0.05, np.append(guess, 0.0), np.zeros(4)
    spin, r, theta, phi = route(0.0)
    now, _ = refine(spin, inclination, now, lambda t: place(0.0, r, theta, phi, spin), None, far, 1e-9)
    while s < 1.0:
        following = min(1.0, s + step)
        spin, r, theta, phi = route(following)
        target = place(0.0, r, theta, phi, spin)
        try:
            new, ray = refine(
                spin,
                inclination,
                now + slope * (following - s),
                lambda t, x=target: x,
                None,
                far,
                1e-12 if following == 1.0 else 1e-9,
                tries=5 if following < 1.0 else 7,
            )
        except NoImage:
            step *= 0.4
            if step < shortest:
                raise
            continue
        slope, now, s, step = (new - now) / (following - s), new, following, 1.7 * step
    return now, ray


def find_image(spin: float, inclination: float, r: float, theta: float, phi: float, order: int) -> Image:
    """Find the image of `order` of a point at Boyer-Lindquist (r, theta, phi).

    The image without spin is followed to the wanted spin with the source at rest, where that fails with the
    source started elsewhere in azimuth (so that the moving caustic does not run over it), and its conjugate
    points are counted in the end.

    Raises:
        NoImage: no route leads to an image of this order.
    """
    far = far_radius(r)

    def radius(now: float) -> float:
        return max(r, horizon(now) + min(0.5, r - horizon(spin)))

    for detour in (0.0, 0.4, -0.4, 1.0, -1.0, 2.0, -2.0, math.pi):
        try:
            guess = _first_guess(inclination, radius(0.0), theta, phi + detour, order, far)
            now, ray = _follow(
                inclination, guess, lambda s, d=detour: (s * spin, radius(s * spin), theta, phi + d), far
            )
            if detour != 0.0:
                now, ray = _follow(inclination, now[:3], lambda s, d=detour: (spin, r, theta, phi + d * (1.0 - s)), far)
        except NoImage:
            continue
        if ray.index == order:
            return finish(spin, inclination, now, r, theta, phi, far)
    raise NoImage(f"order {order} of r = {r}, theta = {theta}, phi = {phi}, spin {spin}, i = {inclination}")


def has_twin(
    spin: float, inclination: float, r: float, theta: float, phi: float, order: int, found: np.ndarray
) -> bool:
    """Tell whether a point lies in a caustic tube: whether it has a second image of the same order.

    Images of the order are followed to the point from either side in azimuth, the direction in which frame
    dragging spreads a caustic; inside a tube they arrive at different images.

    Args:
        found: unknowns of the image already known (alpha, beta first).
    """
    far = far_radius(r)
    for detour in (1.0, -1.0, 0.5, -0.5):
        try:
            begin = find_image(spin, inclination, r, theta, phi + detour, order).unknowns[:3]
            now, ray = _follow(inclination, begin, lambda s, d=detour: (spin, r, theta, phi + d * (1.0 - s)), far, 0.01)
        except NoImage:
            continue
        if ray.index == order and float(np.abs(now[:2] - found[:2]).max()) > 1e-4 * max(1.0, r):
            return True
    return False
