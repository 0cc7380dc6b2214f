"""Rays against published formulas of light bending, recomputed where the formula is closed."""

from __future__ import annotations

import mpmath
import numpy as np
import pytest

from emu.spacetime.equations import LANES
from emu.spacetime.integrate import integrate_lanes, scratch
from emu.spacetime.kerr import circular_frequency, tortoise
from emu.spacetime.rays import solve_rays
from emu.spacetime.start import critical_impact


def _end(spin, inclination, alpha, beta, tau, steps=200):
    lanes = [np.full(LANES, value, dtype=float) for value in (spin, np.cos(inclination), np.sin(inclination))]
    rays = [np.full(LANES, value, dtype=float) for value in (alpha, beta, tau)]
    return integrate_lanes(*lanes, *rays, steps, scratch(), np.empty(LANES))[:, 0].copy()


def _deflection(spin, alpha):
    """Return the deflection in the equatorial plane, seen edge on: the azimuth swept between two infinities less pi."""
    low, high = 0.5 / abs(alpha), 20.0 / abs(alpha)
    taus = np.linspace(low, high, 400)
    first = next(t for t in taus if _end(spin, np.pi / 2, alpha, 0.0, t)[0] < 0.0)
    low, high = first - (taus[1] - taus[0]), first
    for _ in range(50):
        middle = 0.5 * (low + high)
        if _end(spin, np.pi / 2, alpha, 0.0, middle)[0] > 0.0:
            low = middle
        else:
            high = middle
    y = _end(spin, np.pi / 2, alpha, 0.0, high)
    swept = abs(alpha) * high  # |d azimuth/d tau| = |lambda| in the equatorial plane, the drag apart
    assert y[2] ** 2 + y[3] ** 2 == pytest.approx(1.0, abs=1e-10)
    return swept + np.sign(alpha) * y[8] - np.pi


def _darwin(b):
    """Return the exact deflection without spin by elliptic integrals (Darwin 1959), 25 digits."""
    mpmath.mp.dps = 25
    b = mpmath.mpf(b)
    r0 = 2 * b / mpmath.sqrt(3) * mpmath.cos(mpmath.acos(-3 * mpmath.sqrt(3) / b) / 3)
    q = mpmath.sqrt((r0 - 2) * (r0 + 6))
    m = (q - r0 + 6) / (2 * q)
    phi = mpmath.asin(mpmath.sqrt((q + 2 - r0) / (q + 6 - r0)))
    return float(4 * mpmath.sqrt(r0 / q) * (mpmath.ellipk(m) - mpmath.ellipf(phi, m)) - mpmath.pi)


@pytest.mark.parametrize("b", [5.3, 5.5, 6.0, 8.0, 20.0, 100.0])
def test_deflection_without_spin(b):
    """Darwin 1959: exact elliptic form."""
    assert _deflection(0.0, -b) == pytest.approx(_darwin(b), abs=2e-8)


@pytest.mark.parametrize(
    ("spin", "b", "prograde", "retrograde"),
    [
        (0.5, 7.0, 0.9236998552, 1.520759901),
        (0.5, 20.0, 0.2286042515, 0.2442195936),
        (0.9, 7.0, 0.8147599929, 2.588830367),
        (0.9, 10.0, 0.504632984, 0.720503614),
    ],
)
def test_equatorial_deflection_with_spin(spin, b, prograde, retrograde):
    """Equatorial Kerr deflection by quadrature of dphi/dr (Bardeen, Press & Teukolsky 1972), 25 digits."""
    assert _deflection(spin, -b) == pytest.approx(prograde, abs=2e-7)  # lambda = -alpha sin i > 0
    assert _deflection(spin, b) == pytest.approx(retrograde, abs=2e-7)


@pytest.mark.parametrize(
    ("spin", "degrees", "low", "high", "height"),
    [
        (0.5, 17.0, -4.818781, 5.421175, 10.25457),
        (0.5, 60.0, -4.230999, 6.003824, 10.35582),
        (0.9, 17.0, -4.303168, 5.503622, 9.890003),
        (0.9, 60.0, -3.095908, 6.589409, 10.27094),
    ],
)
def test_critical_curve(spin, degrees, low, high, height):
    """Range and full height of the critical curve (Bardeen 1973)."""
    c, s = np.cos(np.radians(degrees)), np.sin(np.radians(degrees))
    angles = np.linspace(0.0, np.pi, 20001)
    reach = np.array([critical_impact(spin, c, s, np.cos(w), np.sin(w)) for w in angles])
    assert reach[0] == pytest.approx(high, abs=2e-6)
    assert reach[-1] == pytest.approx(-low, abs=2e-6)
    assert 2.0 * np.max(reach * np.sin(angles)) == pytest.approx(height, abs=1e-5)


def test_rays_start_inside_or_outside_the_critical_curve():
    """A ray just inside falls in and one just outside comes back: the same curve by integration."""
    c, s = np.cos(np.radians(60.0)), np.sin(np.radians(60.0))
    for angle in (0.3, 1.2, 2.5, 4.0):
        right, up = np.cos(angle), np.sin(angle)
        reach = critical_impact(0.9, c, s, right, up)
        inside = _end(0.9, np.radians(60.0), 0.999 * reach * right, 0.999 * reach * up, 1.1, 400)
        outside = [
            _end(0.9, np.radians(60.0), 1.001 * reach * right, 1.001 * reach * up, t, 400)[1]
            for t in np.linspace(1.0, 2.5, 40)
        ]
        assert inside[1] > 0.0  # still going in
        assert min(outside) < 0.0  # turned


@pytest.mark.parametrize(
    ("r", "radii"), [(2.5, None), (6.0, (6.93214848, 5.47891372)), (10.0, (10.956115, 5.66615034))]
)
def test_face_on_ring(r, radii):
    """Image radii of a face-on ring without spin (elliptic integrals, Darwin 1959) and the delay between orders."""
    delays = {6.0: 20.336092, 10.0: 25.934727}
    one = np.ones(1)
    near = [solve_rays(0 * one, 1e-9 * one, r * one, np.array([[1.0, 0.0, 0.0]]), order) for order in (0, 1)]
    assert not near[0].failed[0]
    assert not near[1].failed[0]
    if radii is not None:
        for image, radius in zip(near, radii, strict=True):
            assert np.hypot(image.alpha, image.beta)[0] == pytest.approx(radius, abs=1e-7)
        assert near[1].delay[0] - near[0].delay[0] == pytest.approx(delays[r], abs=2e-6)


def test_tortoise_is_its_integral():
    """dr*/dr = (r^2 + a^2)/Delta, by quadrature."""
    for spin in (0.0, 0.5, -0.9, 0.998):
        value = mpmath.quad(lambda r, a=spin: (r * r + a * a) / (r * r - 2 * r + a * a), [3.0, 5.0, 20.0])
        assert tortoise(spin, 20.0) - tortoise(spin, 3.0) == pytest.approx(float(value), rel=1e-12)


def test_circular_frequency():
    """Bardeen, Press & Teukolsky 1972: (r^{3/2} + a)^{-1}; at r = 10, a = +-0.9 in a period of 2 pi (r^{3/2} + a)."""
    assert 2 * np.pi / circular_frequency(0.9, 10.0) == pytest.approx(2 * np.pi * (10**1.5 + 0.9), rel=1e-15)


def test_frame_is_orthonormal():
    """The zero-angular-momentum tetrad reproduces the Boyer-Lindquist metric of the textbooks (common practice)."""
    from emu.spacetime.kerr import frame_at

    a, r, cos_t = 0.7, 3.3, 0.4
    lapse, omega, root_rr, root_tt, varpi, delta = frame_at(a, r, cos_t)
    sin2 = 1 - cos_t**2
    sigma = r * r + a * a * cos_t**2
    g_tt = -(1 - 2 * r / sigma)
    g_tf = -2 * a * r * sin2 / sigma
    g_ff = (r * r + a * a + 2 * a * a * r * sin2 / sigma) * sin2
    assert -(lapse**2) + omega**2 * varpi**2 * sin2 == pytest.approx(g_tt, rel=1e-13)
    assert -omega * varpi**2 * sin2 == pytest.approx(g_tf, rel=1e-13)
    assert varpi**2 * sin2 == pytest.approx(g_ff, rel=1e-13)
    assert root_rr**2 == pytest.approx(sigma / delta, rel=1e-13)
    assert root_tt**2 == pytest.approx(sigma, rel=1e-13)
