"""The learned ray map against rays of an independent calculation, exact rays, symmetries and limits."""

from __future__ import annotations

import json
import shutil

import numpy as np
import pytest

import emu
from emu.errors import UserError
from emu.raymap import chart
from emu.raymap.catalogue import find_raymap
from emu.raymap.exact import ExactRays
from emu.raymap.learned import LearnedRays
from tests.reference.tables import stored
from training.raymap.labels import exact_twice
from training.raymap.points import random_places

ORBIT = {
    "spin": 0.6, "inclination": 50.0, "axis_angle": 25.0, "radius": 7.0, "phase": 40.0, "rate": 0.9, "tilt": 35.0,
    "pitch": 20.0, "index": 0.6, "polarised_share": 0.7, "brightness": 1.4, "peak_time": 4.0, "rise_time": 25.0,
    "decay_time": 40.0,
}  # fmt: skip
FIELDS = ("alpha", "beta", "delay", "p_r", "p_theta", "p_phi", "magnification")


def _trace(places, order, raymap=None):
    raymap = raymap or LearnedRays()
    return raymap.trace(places.spin, places.inclination, places.r, places.n, order)


@pytest.mark.parametrize("order", [0, 1])
def test_against_the_independent_calculation(order):
    """Rays of tests/reference, integrated by other equations: to what that calculation is held to elsewhere."""
    table = stored("rays")
    spin, inclination, r, theta, phi = table["cases"].T
    theta, phi = np.radians(theta), np.radians(phi)
    n = np.stack([np.sin(theta) * np.cos(phi), np.sin(theta) * np.sin(phi), np.cos(theta)], axis=-1)
    found = LearnedRays().trace(spin, np.radians(inclination), r, n, order)
    truth = table["results"][order]
    kept = (truth[:, 7] == 1.0) & (truth[:, 6] < 20.0 * np.median(truth[:, 6])) & ~found.exact
    assert np.count_nonzero(kept) >= 80
    # targets of the map: 99.9 % of order 0, up to ten times that in order 1
    assert np.hypot(found.alpha - truth[:, 0], found.beta - truth[:, 1])[kept].max() < (3e-3, 3e-2)[order]
    lag = (found.delay - truth[:, 2])[kept]
    assert np.abs(lag - np.median(lag)).max() < (3e-3, 3e-2)[order]  # delays count from a constant
    assert np.abs(found.magnification / truth[:, 6] - 1.0)[kept].max() < (1e-3, 1e-2)[order]


def test_accuracy_over_the_whole_trust_domain():
    """Medians and 99 % of 20,000 random rays, edges included, at the targets of median and 99.9 %."""
    places = random_places(20_000, 7, 0.998, 2.6, 110.0)
    found, truth = _trace(places, 0), exact_twice(places, 0)
    good = ~(found.failed | truth.failed)
    position = np.hypot(found.alpha - truth.alpha, found.beta - truth.beta)[good]
    delay = np.abs(found.delay - truth.delay)[good]
    mu = np.abs(found.magnification[good] / truth.magnification[good] - 1.0)
    for error, middle, tail in ((position, 1e-5, 3e-3), (delay, 1e-5, 3e-3), (mu, 1e-5, 1e-3)):
        assert np.median(error) < middle
        assert np.quantile(error, 0.99) < tail
    assert np.mean(found.exact) < 0.002


def test_the_exact_solve_takes_over_unnoticed():
    """Out of range, or close behind the hole, the rays are those of the exact map to its own tolerance."""
    places = random_places(60, 3, 0.9, 2.2, 2.59)
    far = random_places(60, 4, 0.9, 111.0, 900.0)
    for at in (places, far):
        found, truth = _trace(at, 0), _trace(at, 0, ExactRays())
        assert np.all(found.exact)
        for name in FIELDS:
            np.testing.assert_allclose(getattr(found, name), getattr(truth, name), rtol=1e-4, atol=1e-6)
    behind = np.array([[-np.sin(1.2), 0.0, -np.cos(1.2)]])
    found = LearnedRays().trace(np.array([0.3]), np.array([1.2]), np.array([9.0]), behind, 0)
    assert found.exact[0]


def test_momentum_is_the_gradient_of_the_delay():
    """p = -grad D (Hamilton): the derivative of the learned delay by r against the learned p_r, far from the hole."""
    at = random_places(2000, 9, 0.9, 6.0, 30.0)
    h = 1e-2
    out, mid, back = (LearnedRays().trace(at.spin, at.inclination, at.r + d, at.n, 0) for d in (h, 0.0, -h))
    kept = ~(out.exact | mid.exact | back.exact)
    slope = -(out.delay - back.delay)[kept] / (2.0 * h)
    assert np.median(np.abs(slope - mid.p_r[kept])) < 1e-4
    assert np.quantile(np.abs(slope - mid.p_r[kept]), 0.99) < 3e-3


def test_without_spin_rays_are_planar():
    """At a = 0 position and direction lie in the plane of source, hole and observer (spherical symmetry)."""
    at = random_places(2000, 5, 1e-12, 3.0, 60.0)
    found = _trace(at, 0)
    right, up = at.n[:, 1], at.n[:, 2] * np.sin(at.inclination) - at.n[:, 0] * np.cos(at.inclination)
    across = (found.alpha * up - found.beta * right) / np.hypot(right, up)
    assert np.abs(across[~found.exact]).max() < 1e-5


@pytest.mark.parametrize("order", [0, 1])
def test_mirror_of_spin(order):
    """a -> -a with the source mirrored in azimuth mirrors the screen left-right."""
    at = random_places(1000, 6, 0.9, 3.5, 50.0)
    here = _trace(at, order)
    mirrored = at.n * np.array([1.0, -1.0, 1.0])
    there = LearnedRays().trace(-at.spin, at.inclination, at.r, mirrored, order)
    kept = ~(here.exact | there.exact)
    assert np.count_nonzero(kept) > 400
    for name, sign in (("alpha", -1.0), ("beta", 1.0), ("delay", 1.0), ("p_phi", -1.0), ("magnification", 1.0)):
        gap = np.abs(getattr(here, name) - sign * getattr(there, name))[kept]
        assert np.median(gap) < 1e-4, name


def test_axis_and_line_of_sight_are_regular():
    """Sources on the axis and exactly before the hole, and observers on the axis, give finite exact-like rays."""
    n = np.array([[0.0, 0.0, 1.0], [0.0, 0.0, -1.0], [np.sin(0.7), 0.0, np.cos(0.7)], [0.0, 0.0, 1.0], [1.0, 0.0, 0.0]])
    inclination = np.array([0.7, 0.7, 0.7, 0.0, 1e-9])
    spin, r = np.full(5, 0.8), np.full(5, 8.0)
    found, truth = (m.trace(spin, inclination, r, n, 0) for m in (LearnedRays(), ExactRays()))
    for name in FIELDS:
        assert np.all(np.isfinite(getattr(found, name)))
    np.testing.assert_allclose(found.delay, truth.delay, atol=1e-4)
    np.testing.assert_allclose(found.magnification, truth.magnification, rtol=1e-4)


def test_start_serves_the_exact_solve():
    """From the learned start the exact solve finds the same image as from its own."""
    at = random_places(500, 8, 0.95, 3.0, 60.0)
    found = _trace(at, 0)
    one, other = (ExactRays().trace(at.spin, at.inclination, at.r, at.n, 0, s) for s in (None, found.start))
    good = ~(one.failed | other.failed)
    assert np.count_nonzero(~good) <= 1
    np.testing.assert_allclose(one.alpha[good], other.alpha[good], atol=1e-6)


def test_no_tube_outside_what_is_looked_at():
    """Sources that the learned map does not put to the dear test are in no tube by the exact map's."""
    at = random_places(40_000, 10, 0.998, 2.6, 20.0)
    found = _trace(at, 0)
    (near,) = np.nonzero((np.pi - found.swept < 0.15) & ~found.failed)
    near = near[:40]
    part = (found.start[near], found.swept[near], at.spin[near], at.inclination[near], at.r[near], at.n[near])
    assert np.array_equal(LearnedRays().in_tube(*part, 0), ExactRays().in_tube(*part, 0))


@pytest.mark.parametrize("orders", [1, 2])
def test_curves_agree_with_the_exact_map(orders):
    """q and u to 1e-3, flux to 0.3 %, of a point and a spot."""
    times = np.linspace(-60.0, 60.0, 25)
    for more in ({}, {"spot_size": 0.4}):
        one, other = (
            emu.curves("midplane-frozen", {**ORBIT, **more}, times, raymap=name, orders=orders, spot_points=27)
            for name in ("learned", "exact")
        )
        for name in ("q", "u"):
            assert np.abs(one[name] - other[name]).max() < 1e-3
        assert np.abs(one["flux"] / other["flux"] - 1.0).max() < 3e-3
        assert one["failures"] == 0
        rays = orders * 25 * (27 if more else 1)
        assert other["exact"] == rays
        assert one["exact"] < (1 if orders == 1 else rays)


def test_damaged_numbers_are_refused(tmp_path):
    """A file that is not the manifest's, or none, is refused with one line."""
    with pytest.raises(UserError, match="no such file"):
        chart.read_charts(tmp_path)
    shipped = chart.__file__.replace("chart.py", "data")
    shutil.copytree(shipped, tmp_path / "data")
    assert len(chart.read_charts(tmp_path / "data")) == 2
    content = bytearray((tmp_path / "data" / "learned.safetensors").read_bytes())
    content[-1] ^= 1
    (tmp_path / "data" / "learned.safetensors").write_bytes(content)
    with pytest.raises(UserError, match="checksum"):
        chart.read_charts(tmp_path / "data")


def test_shipped_size_and_manifest():
    """The shipped numbers stay within 10 MB and say how they are made."""
    folder = chart.__file__.replace("chart.py", "data")
    with open(f"{folder}/learned.json") as file:
        manifest = json.load(file)
    assert manifest["bytes"] <= 10_000_000
    assert manifest["made_by"] == "emu-train raymap fit"


def test_unknown_map_is_refused():
    with pytest.raises(UserError, match="exact, learned"):
        find_raymap("guessed")
