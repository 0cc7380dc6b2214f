"""Check the independent calculation itself against closed forms and published constants.

"Derived" numbers were computed with 25 digits from the formula of the source named.
"""

import math

import numpy as np
import pytest

from tests.reference.coordinates import angle_shift, horizon, jacobian, place
from tests.reference.curves import screen_angle
from tests.reference.emitter import Motion, stokes, tetrad
from tests.reference.hamiltonian import Ray, metric, shoot
from tests.reference.images import Image, find_image, refine
from tests.reference.independent import curves, trace

FAR = 1e4
RAYS = [(0.9, 1.0, 6.0, 3.0, 9990.0), (-0.7, 2.0, -4.5, 3.5, 10003.0), (0.998, 1.4, 5.0, 0.5, 9998.0)]


def kerr(r: float, theta: float, spin: float) -> np.ndarray:
    """Return the Boyer-Lindquist metric (4, 4) (Boyer & Lindquist 1967)."""
    sigma, delta = r**2 + (spin * math.cos(theta)) ** 2, r**2 - 2.0 * r + spin**2
    sin2 = math.sin(theta) ** 2
    g = np.diag(
        [
            -(1.0 - 2.0 * r / sigma),
            sigma / delta,
            sigma,
            (r**2 + spin**2 + 2.0 * spin**2 * r * sin2 / sigma) * sin2,
        ]
    )
    g[0, 3] = g[3, 0] = -2.0 * spin * r * sin2 / sigma
    return g


def boyer_lindquist(x: np.ndarray, spin: float) -> tuple[float, float, float]:
    """Return (r, theta, phi) of a Kerr-Schild event."""
    s = float(x[1:] @ x[1:]) - spin**2
    r = math.sqrt(0.5 * (s + math.sqrt(s**2 + 4.0 * (spin * x[3]) ** 2)))
    turned = complex(x[1], x[2]) / complex(r, -spin)
    return r, math.acos(x[3] / r), math.atan2(turned.imag, turned.real) + angle_shift(r, spin)


def walker_penrose(r: float, theta: float, spin: float, k: np.ndarray, f: np.ndarray) -> complex:
    """Return the constant of Walker & Penrose (1970) from contravariant Boyer-Lindquist components."""
    sin = math.sin(theta)
    a = (k[0] * f[1] - k[1] * f[0]) + spin * sin**2 * (k[1] * f[3] - k[3] * f[1])
    b = ((r**2 + spin**2) * (k[3] * f[2] - k[2] * f[3]) - spin * (k[0] * f[2] - k[2] * f[0])) * sin
    return (a - 1j * b) * complex(r, -spin * math.cos(theta))


def whole_ray(spin: float, inclination: float, alpha: float, beta: float) -> Ray:
    """Follow a ray past the hole and out again."""
    ray = shoot(spin, inclination, alpha, beta, 2.0 * FAR, FAR)
    assert ray is not None
    return ray


@pytest.mark.parametrize(("spin", "r", "theta"), [(0.9, 5.0, 1.1), (-0.998, 1.6, 0.3), (0.3, 40.0, 2.9)])
def test_kerr_schild_metric_is_the_boyer_lindquist_metric(spin, r, theta):
    matrix = jacobian(r, theta, 0.7, spin)
    transformed = matrix.T @ metric(place(3.0, r, theta, 0.7, spin), spin) @ matrix
    np.testing.assert_allclose(transformed, kerr(r, theta, spin), rtol=1e-10, atol=1e-10)


@pytest.mark.parametrize("label", RAYS)
def test_transport_keeps_norms_and_angles(label):
    spin, ray = label[0], shoot(*label, FAR, screen=True)
    vectors = np.array([ray.k, ray.right, ray.up, ray.d_alpha, ray.d_beta])
    gram = vectors @ metric(ray.x, spin) @ vectors.T
    expected = np.zeros((3, 3))
    expected[1, 1] = expected[2, 2] = 1.0
    np.testing.assert_allclose(gram[:3, :3], expected, atol=1e-9)
    np.testing.assert_allclose(gram[0, 3:], 0.0, atol=1e-7)  # deviations stay orthogonal to k (Gauss's lemma)


@pytest.mark.parametrize("label", RAYS)
def test_deviations_are_derivatives_of_neighbouring_rays(label):
    spin, inclination, alpha, beta, length = label
    ray, h = shoot(*label, FAR), 1e-4
    for attribute, da, db in (("d_alpha", h, 0.0), ("d_beta", 0.0, h)):
        plus = shoot(spin, inclination, alpha + da, beta + db, length, FAR)
        minus = shoot(spin, inclination, alpha - da, beta - db, length, FAR)
        np.testing.assert_allclose((plus.x - minus.x) / (2.0 * h), getattr(ray, attribute), atol=2e-6)


@pytest.mark.parametrize("label", RAYS)
def test_walker_penrose_constant_and_its_screen_form(label):
    spin, inclination, alpha, beta, _ = label
    found = []
    for length in (9000.0, 9950.0, label[4]):
        ray = shoot(spin, inclination, alpha, beta, length, FAR, screen=True)
        r, theta, phi = boyer_lindquist(ray.x, spin)
        inverse = np.linalg.inv(jacobian(r, theta, phi, spin))
        found.append(
            [walker_penrose(r, theta, spin, inverse @ ray.k, inverse @ f) for f in (ray.right, ray.up)]
        )
    np.testing.assert_allclose(found[1:], np.broadcast_to(found[0], (2, 2)), atol=2e-7 * abs(found[0][0]))
    # At infinity (Himwich et al. 2020): (f^alpha, f^beta) ~ (beta k2 - nu k1, beta k1 + nu k2).
    nu = -(alpha + spin * math.sin(inclination))
    screen = np.array([[beta * c.imag - nu * c.real, beta * c.real + nu * c.imag] for c in found[-1]])
    np.testing.assert_allclose(np.abs(screen) / np.hypot(beta, nu) ** 2, np.eye(2), atol=1e-6)


@pytest.mark.parametrize(
    ("impact", "deflection"),
    [  # Darwin 1959; derived
        (5.2, 6.81037195666),
        (5.3, 3.55793804246),
        (5.5, 2.55302018235),
        (6.0, 1.71938831023),
        (7.0, 1.12763910473),
        (8.0, 0.858730018079),
        (10.0, 0.590395787606),
        (20.0, 0.236135995388),
        (50.0, 0.0850834503832),
        (100.0, 0.0412225397493),
    ],
)
def test_deflection_without_spin(impact, deflection):
    alpha, beta = impact * math.cos(0.7), impact * math.sin(0.7)
    ray = whole_ray(0.0, 0.8, alpha, beta)
    toward = np.array([math.sin(0.8), 0.0, math.cos(0.8)])
    aside = alpha * np.array([0.0, 1.0, 0.0]) + beta * np.array([-math.cos(0.8), 0.0, math.sin(0.8)])
    r = float(np.linalg.norm(ray.x[1:]))
    swept = math.atan2(float(ray.x[1:] @ aside) / impact, float(ray.x[1:] @ toward)) + math.asin(impact / r)
    assert math.remainder(swept - math.pi - deflection, 2.0 * math.pi) == pytest.approx(0.0, abs=2e-7)
    # a conjugate point each half turn; the last one of a wide ray lies beyond this end of the integration
    assert ray.index == int((math.pi + deflection - math.asin(impact / r)) / math.pi)


@pytest.mark.parametrize(
    ("spin", "impact", "deflection"),
    [  # derived; retrograde negative
        (0.5, 7.0, 0.9236998552),
        (0.5, -7.0, 1.520759901),
        (0.5, 10.0, 0.5389778942),
        (0.5, -20.0, 0.2442195936),
        (0.9, 7.0, 0.8147599929),
        (0.9, -7.0, 2.588830367),
        (0.9, 10.0, 0.504632984),
        (0.9, -10.0, 0.720503614),
        (0.9, 4.0, 2.178290449),
        (0.9, 3.0, 6.120390987),
        (0.9, 20.0, 0.2229374891),
        (0.9, -20.0, 0.2511282954),
    ],
)
def test_equatorial_deflection_with_spin(spin, impact, deflection):
    ray = whole_ray(spin, math.pi / 2.0, -impact, 0.0)
    r = math.hypot(ray.x[1], ray.x[2])
    swept = -math.copysign(1.0, impact) * math.atan2(ray.x[2], ray.x[1]) + math.asin(abs(impact) / r)
    assert math.remainder(swept - math.pi - deflection, 2.0 * math.pi) == pytest.approx(0.0, abs=2e-7)


@pytest.mark.parametrize(
    ("spin", "inclination", "left", "right"),
    [  # Bardeen 1973; derived
        (0.5, 17.0, -4.818781, 5.421175),
        (0.9, 60.0, -3.095908, 6.589409),
    ],
)
def test_edge_of_the_shadow(spin, inclination, left, right):
    def captured(alpha: float) -> bool:
        ray = shoot(spin, math.radians(inclination), alpha, 0.0, FAR + 60.0, FAR, rtol=1e-9)
        return ray is None or boyer_lindquist(ray.x, spin)[0] < horizon(spin) + 0.05

    for edge in (left, right):
        inside, outside = 0.9 * edge, 1.1 * edge
        for _ in range(20):
            middle = 0.5 * (inside + outside)
            inside, outside = (middle, outside) if captured(middle) else (inside, middle)
        assert 0.5 * (inside + outside) == pytest.approx(edge, abs=4e-6)


@pytest.mark.parametrize(
    ("r", "radii", "waits"),
    [  # derived
        (6.0, (6.93214848, 5.47891372, 5.20798959), (20.336092, 16.591394)),
        (10.0, (10.956115, 5.66615034, 5.2144902), (25.934727, 16.753452)),
    ],
)
def test_rings_and_delays_face_on(r, radii, waits):
    images = [find_image(0.0, 0.0, r, math.pi / 2.0, 1.0, order) for order in (0, 1, 2)]
    np.testing.assert_allclose([math.hypot(*image.unknowns[:2]) for image in images], radii, atol=1e-7)
    np.testing.assert_allclose(np.diff([image.delay for image in images]), waits, atol=2e-6)


VALUES = {
    "spin": 0.0,
    "inclination": 0.0,
    "axis_angle": 0.0,
    "radius": 6.0,
    "phase": 0.0,
    "rate": 1.0,
    "tilt": 20.0,
    "pitch": 10.0,
    "index": 0.5,
    "polarised_share": 1.0,
    "brightness": 1.0,
    "peak_time": 0.0,
    "rise_time": 1e9,
    "decay_time": 1e9,
}


@pytest.mark.parametrize(("way", "redshift"), [(1.0, math.sqrt(2.0)), (-1.0, math.sqrt(2.0) / 3.0)])
def test_redshift_of_tangential_photons(way, redshift):  # Luminet 1979
    momentum = np.array([-1.0, 0.0, 0.0, way * 6.0 / math.sqrt(1.0 - 2.0 / 6.0)])
    at = Motion(6.0, math.pi / 2.0, 0.0, (0.0, 0.0, 6.0**-1.5))
    assert stokes(VALUES, 0.0, at, momentum, 1.0).redshift == pytest.approx(redshift, rel=1e-12)


@pytest.mark.parametrize(
    ("spin", "redshift"), [(0.0, 0.707106781), (0.9, 0.743444059)]
)  # Luminet 1979; derived
def test_redshift_face_on(spin, redshift):
    image = find_image(spin, 0.0, 6.0, math.pi / 2.0, 1.0, 0)
    at = Motion(6.0, math.pi / 2.0, 1.0, (0.0, 0.0, 1.0 / (6.0**1.5 + spin)))
    sight = stokes({**VALUES, "spin": spin}, 0.0, at, image.momentum, 1.0)
    assert sight.redshift == pytest.approx(redshift, abs=1e-8)


def displaced(image: Image, spin: float, inclination: float, at: np.ndarray) -> np.ndarray:
    """Return (alpha, beta) of the same image of a point at `at` (r, theta, phi)."""
    event = place(0.0, *at, spin)
    return refine(spin, inclination, image.unknowns, lambda t: event, None, FAR)[0][:2]


@pytest.mark.parametrize("order", [0, 1])
@pytest.mark.parametrize("spin", [0.0, 0.95, -0.6])
def test_magnification_by_displaced_sources(spin, order):
    inclination, at = 1.1, np.array([5.0, 1.3, 2.0])
    image = find_image(spin, inclination, *at, order)
    legs = tetrad(at[0], at[1], spin)
    direction = legs[1:] @ image.momentum
    assert np.linalg.norm(direction) == pytest.approx(-legs[0] @ image.momentum, rel=1e-8)  # a null photon
    first = np.cross(direction, [0.3, -0.5, 0.8])
    second = np.cross(direction, first)
    columns, h = [], 2e-4
    for axis in (first, second):
        shift = h * (axis / np.linalg.norm(axis)) @ legs[1:, 1:]
        columns.append(
            (
                displaced(image, spin, inclination, at + shift)
                - displaced(image, spin, inclination, at - shift)
            )
            / (2.0 * h)
        )
    assert abs(np.linalg.det(columns)) == pytest.approx(image.magnification, rel=2e-6)


@pytest.mark.parametrize("order", [0, 1])
def test_conserved_quantities_and_delay_gradient(order):
    spin, inclination, at = 0.8, 0.9, np.array([7.0, 1.0, 1.5])
    alpha, beta, delay, momentum, _ = trace(
        spin, math.degrees(inclination), at[0], *np.degrees(at[1:]), order
    )
    eta = (alpha**2 - spin**2) * math.cos(inclination) ** 2 + beta**2  # Bardeen 1973
    carter = momentum[2] ** 2 - math.cos(at[1]) ** 2 * (spin**2 - (momentum[3] / math.sin(at[1])) ** 2)
    assert momentum[3] == pytest.approx(-alpha * math.sin(inclination), abs=1e-7)
    assert carter == pytest.approx(eta, abs=1e-6)
    h = 1e-4
    for axis in range(3):  # p_i at the source is minus the gradient of the delay (eikonal equation)
        step = h * np.eye(3)[axis]
        early, late = (
            trace(
                spin, math.degrees(inclination), (at + way * step)[0], *np.degrees(at + way * step)[1:], order
            )[2]
            for way in (-1.0, 1.0)
        )
        assert (late - early) / (2.0 * h) == pytest.approx(-momentum[1 + axis], abs=2e-6)
    assert delay == pytest.approx(find_image(spin, inclination, *at, order).delay, abs=1e-9)


def test_electric_vector_is_a_unit_on_the_screen_and_walker_penrose_agrees():
    spin, inclination, at = 0.7, 1.2, Motion(6.0, 1.3, 2.5, (0.02, 0.01, 0.06))
    image = find_image(spin, inclination, at.r, at.theta, at.phi, 0)
    sight = stokes({**VALUES, "spin": spin}, 0.0, at, image.momentum, 1.0)
    matrix = jacobian(at.r, at.theta, at.phi, spin)
    lowered = metric(image.ray.x, spin) @ matrix @ sight.vector
    assert math.hypot(image.ray.right @ lowered, image.ray.up @ lowered) == pytest.approx(1.0, abs=1e-8)
    k = np.linalg.inv(matrix) @ image.ray.k
    alpha, beta = image.unknowns[:2]
    constant = walker_penrose(at.r, at.theta, spin, k, sight.vector)
    nu = -(alpha + spin * math.sin(inclination))
    chi = math.atan2(-(beta * constant.imag - nu * constant.real), beta * constant.real + nu * constant.imag)
    assert math.remainder(chi - screen_angle(image, sight.vector, matrix, spin), math.pi) == pytest.approx(
        0.0, abs=1e-6
    )


def test_orbit_in_a_toroidal_field_makes_two_loops():  # common practice: near face-on, north through east
    times = np.linspace(0.0, 2.0 * math.pi * 8.0**1.5, 25)
    found = curves("midplane-frozen", {**VALUES, "radius": 8.0, "inclination": 20.0, "pitch": 90.0}, times)
    phase = np.unwrap(np.arctan2(found["u"], found["q"]))
    assert phase[-1] - phase[0] == pytest.approx(4.0 * math.pi, abs=1e-5)
    np.testing.assert_allclose(
        np.hypot(found["q"], found["u"]), (2.0 + 1.0) / (2.0 + 7.0 / 3.0) * np.ones(25), rtol=1e-7
    )  # Westfold 1959, P = 2
