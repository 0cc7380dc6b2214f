"""Curves of every family from solved rays alone: one Newton solve of place and arrival time a row.

Written from the conventions (emu/guide/conventions.md), with the electric vector carried to the screen by
parallel transport.
"""

import math

import numpy as np

from tests.reference.coordinates import jacobian, place
from tests.reference.emitter import motion, stokes
from tests.reference.hamiltonian import far_radius, metric
from tests.reference.images import Image, NoImage, find_image, finish, has_twin, refine

__all__ = ["curves", "is_twin", "screen_angle"]

KINDS = ("flux", "q", "u", "east", "north", "emission_time", "redshift", "magnification")
Offset = tuple[float, float, float]


def screen_angle(image: Image, vector: np.ndarray, to_screen: np.ndarray, spin: float) -> float:
    """Return chi_screen of an electric vector (Boyer-Lindquist, at the source), from +beta towards -alpha.

    Args:
        to_screen: coordinates.jacobian at the source.
    """
    lowered = metric(image.ray.x, spin) @ to_screen @ vector
    return math.atan2(-float(image.ray.right @ lowered), float(image.ray.up @ lowered))


class _Track:
    """The image of one order of one point, followed through arrival times."""

    def __init__(self, values: dict[str, float], offset: Offset, order: int, far: float) -> None:
        self.values, self.offset, self.order, self.far = values, offset, order, far
        self.spin, self.inclination = values["spin"], math.radians(values["inclination"])

    def event(self, t: float) -> np.ndarray:
        """Return the Kerr-Schild event of the point at time t."""
        at = motion(self.values, t, self.offset)
        return place(t, at.r, at.theta, at.phi, self.spin)

    def at_emission(self, t: float) -> Image:
        """Return the image of the point as it is at emission time t."""
        at = motion(self.values, t, self.offset)
        found = find_image(self.spin, self.inclination, at.r, at.theta, at.phi, self.order)
        # the same ray, its length counted from this track's far radius
        shift = math.sqrt(self.far**2 - np.sum(found.unknowns[:2] ** 2)) - math.sqrt(
            far_radius(at.r) ** 2 - np.sum(found.unknowns[:2] ** 2)
        )
        return Image(
            found.unknowns + np.array([0.0, 0.0, shift, t]),
            found.ray,
            found.delay,
            found.momentum,
            found.magnification,
        )

    def at_arrival(self, arrival: float, start: np.ndarray | None) -> Image:
        """Return the image that arrives at `arrival` = t + D(t); `start` is a neighbour's solution.

        Raises:
            NoImage: no emission time was found.
        """
        if start is not None:
            try:
                return self._polish(arrival, start)
            except NoImage:
                pass
        t = arrival if start is None else float(start[3])
        for _ in range(12):
            image = self.at_emission(t)
            try:
                return self._polish(arrival, image.unknowns)
            except NoImage:
                t = arrival - image.delay if start is None else t + 0.5 * (arrival - image.delay - t)
        raise NoImage(f"arrival {arrival}")

    def _polish(self, arrival: float, start: np.ndarray) -> Image:
        """Solve place and arrival together from `start` and check the image's order."""
        now, ray = refine(self.spin, self.inclination, start, self.event, arrival + self.far, self.far)
        if ray.index != self.order:
            raise NoImage(f"order {ray.index} came back")
        at = motion(self.values, float(now[3]), self.offset)
        return finish(self.spin, self.inclination, now, at.r, at.theta, at.phi, self.far)


def _row(values: dict[str, float], image: Image, offset: Offset, weight: float) -> np.ndarray:
    """Return (I, Q, U, I E, I N, t, g, mu) of one image of one point, before any sum."""
    t = float(image.unknowns[3])
    at = motion(values, t, offset)
    sight = stokes(values, t, at, image.momentum, image.magnification)
    axis = math.radians(values["axis_angle"])
    chi = axis + screen_angle(image, sight.vector, jacobian(at.r, at.theta, at.phi, values["spin"]), values["spin"])
    alpha, beta = image.unknowns[:2]
    east = -alpha * math.cos(axis) + beta * math.sin(axis)
    north = alpha * math.sin(axis) + beta * math.cos(axis)
    return np.array(
        [
            weight * sight.flux,
            weight * sight.polarised * math.cos(2.0 * chi),
            weight * sight.polarised * math.sin(2.0 * chi),
            weight * sight.flux * east,
            weight * sight.flux * north,
            t,
            sight.redshift,
            image.magnification,
        ]
    )


def _cloud(values: dict[str, float], nodes: int) -> list[tuple[Offset, float]]:
    """Return offsets (R, phi, z) and weights of a Gaussian spot: Gauss-Hermite in three directions."""
    size = values.get("spot_size", 0.0)
    if size == 0.0:
        return [((0.0, 0.0, 0.0), 1.0)]
    x, w = np.polynomial.hermite_e.hermegauss(nodes)
    w = w / w.sum()
    return [
        ((size * x[i], size * x[j] / values["radius"], size * x[k]), float(w[i] * w[j] * w[k]))
        for i in range(nodes)
        for j in range(nodes)
        for k in range(nodes)
    ]


def curves(
    family: str, parameters: dict[str, float], times: np.ndarray, orders: int = 1, spot_nodes: int = 5
) -> dict[str, np.ndarray]:
    """Return the curves of a family (names, units and meaning as emu.curves).

    Args:
        family: `<path>-<inner>`; only the parameters tell path and inner change apart.
        parameters: public names, angles in degrees.
        times: (T,) arrival times relative to t_ref, GM/c^3.
        orders: images added.
        spot_nodes: Gauss-Hermite nodes a direction for a spot.

    Returns:
        flux, q, u, east, north, emission_time, redshift, magnification (T,);
        `order_magnification` (orders, T); `order_light` (orders, T, 5): I, Q, U, I east, I north of each.

    Raises:
        NoImage: a ray could not be solved.
    """
    values = _of_family(family, parameters)
    reach = max(motion(values, float(t) - 60.0, (0.0, 0.0, 0.0)).r for t in (*times, max(times) + 120.0))
    far = far_radius(max(reach, 30.0))
    zero = _Track(values, (0.0, 0.0, 0.0), 0, far).at_emission(0.0).delay
    ordering = np.argsort(times)
    sums = np.zeros((orders, len(times), 8))
    centre = np.zeros((orders, len(times), 8))
    for order in range(orders):
        for offset, weight in [((0.0, 0.0, 0.0), 0.0), *_cloud(values, spot_nodes)]:
            track, near = _Track(values, offset, order, far), None
            for i in ordering:
                image = track.at_arrival(float(times[i]) + zero, near)
                near = image.unknowns
                row = _row(values, image, offset, weight)
                if weight == 0.0:
                    centre[order, i] = row
                else:
                    sums[order, i] += row
    light = sums[:, :, :5].sum(axis=0)
    result = {"flux": light[:, 0]}
    for kind, column in (("q", 1), ("u", 2), ("east", 3), ("north", 4)):
        result[kind] = light[:, column] / light[:, 0]
    for kind, column in (("emission_time", 5), ("redshift", 6), ("magnification", 7)):
        result[kind] = centre[0, :, column]
    return result | {"order_magnification": centre[:, :, 7], "order_light": sums[:, :, :5]}


def _of_family(family: str, parameters: dict[str, float]) -> dict[str, float]:
    """Return the parameters after checking that they are the family's own."""
    path, inner = family.split("-")
    wanted = {
        "midplane": {"rate"},
        "helix": {"rate", "opening", "rise", "height"},
        "drift": {"opening", "rise", "height"},
    }[path]
    if "turning" in inner:
        wanted = wanted | {"turn", "roll", "turn_time", "turn_duration", "dip"}
    inner_names = {"rate", "opening", "rise", "height", "turn", "roll", "turn_time", "turn_duration", "dip"}
    if set(parameters) & inner_names != wanted:
        raise ValueError(f"{family} takes {sorted(wanted)}")
    return {name: float(value) for name, value in parameters.items()}


def is_twin(family: str, parameters: dict[str, float], time: float, order: int) -> bool:
    """Tell whether the light of `order` that arrives at `time` left from within a caustic tube."""
    values = _of_family(family, parameters)
    far = far_radius(30.0)
    zero = _Track(values, (0.0, 0.0, 0.0), 0, far).at_emission(0.0).delay
    track = _Track(values, (0.0, 0.0, 0.0), order, far)
    image = track.at_arrival(time + zero, None)
    at = motion(values, float(image.unknowns[3]))
    return has_twin(track.spin, track.inclination, at.r, at.theta, at.phi, order, image.unknowns)
