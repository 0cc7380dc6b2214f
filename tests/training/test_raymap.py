"""Making the learned ray map: nodes, splines, strays, remaking and checking it."""

from __future__ import annotations

import dataclasses
import itertools

import numpy as np
import pytest

from emu.raymap.bending import ROWS, into_bending
from emu.raymap.spin_polynomials import exponents, fill_monomials, padded, recipe
from training.raymap import fit as fitting
from training.raymap.check import check_domain, check_families
from training.raymap.design import DIRECT, Zone
from training.raymap.fit import fit_zone, spline_matrix
from training.raymap.labels import exact_twice, fit_drag, learned_of, place_sources
from training.raymap.simulate import zone_labels

SMALL = Zone(6.0, 8.0, 5, 0.0, 0.8, 25, 4)


def test_sources_have_the_bending_geometry_they_were_placed_for():
    spins = SMALL.spins(1)
    x = np.linspace(0.1, 0.9, len(spins))
    drag = fit_drag(SMALL.root_u)
    places = place_sources(spins, x, np.full(len(spins), 6.5), drag)
    rows = np.empty((ROWS, len(spins)))
    cos_i, sin_i = np.cos(places.inclination), np.sin(places.inclination)
    into_bending(places.spin, cos_i, sin_i, places.r**-0.5, places.n, 1.0, drag, rows)
    np.testing.assert_allclose(rows[1] / (1.0 + rows[0]), x, atol=1e-7)
    np.testing.assert_allclose(rows[11:14].T, spins, atol=1e-6)


def test_drag_of_slow_spin_far_away():
    """Far out the caustic shifts as the frame's drag along the ray: epsilon -> 4 u^2 ... b, at r = 100 about 0.01.

    Closed form at leading order: the delay of a ray past a slowly spinning lens differs by -+ 4 a / b on both sides
    (the gravitomagnetic term of the lens equation), so epsilon = (8 a / b)/(2 a b) = 4/b^2 with b^2 = 4 r: 1/r.
    """
    drag = fit_drag(np.array([0.09, 0.3]))
    u = 0.01
    assert u * np.polynomial.polynomial.polyval(np.sqrt(u), drag) == pytest.approx(u, rel=0.1)


def test_splines_reproduce_cubics():
    """A cubic is its own not-a-knot spline: values between nodes are exact."""
    x = np.arange(7.0)
    coefficients = spline_matrix(7) @ (x**3 - 2.0 * x**2 + 1.0)
    f, cell = 0.3, 2
    g = 1.0 - f
    w = np.array([g**3, 3 * f**3 - 6 * f**2 + 4, 3 * g**3 - 6 * g**2 + 4, f**3]) / 6.0
    at = cell + f
    assert w @ coefficients[cell : cell + 4] == pytest.approx(at**3 - 2.0 * at**2 + 1.0, abs=1e-12)


@pytest.mark.parametrize("degree", [1, 3, 6, 8])
def test_monomials(degree):
    """Each place of the block holds the product of powers that `exponents` lists for it."""
    rows, counts = recipe(degree)
    s = np.random.default_rng(0).uniform(-1.0, 1.0, (3, 4)).astype(np.float32)
    work = np.zeros((2 * padded(degree), 4), dtype=np.float32)
    fill_monomials(s, rows[: counts[degree]], work)
    for parity in (0, 1):
        powers = exponents(degree, parity)
        right = np.prod(s[None] ** powers[:, :, None], axis=1)
        np.testing.assert_allclose(work[parity * padded(degree) :][: len(powers)], right, rtol=1e-5)


def test_number_of_monomials():
    """C(6 + 3, 3) = 84 in three variables up to degree 6: 44 even and 40 odd in the first two."""
    assert [len(exponents(6, parity)) for parity in (0, 1)] == [44, 40]


def test_a_small_zone_is_learned_and_strays_do_not_matter():
    """A fit of 5 x 25 nodes gives back fresh rays between the nodes; a wrong image among the labels changes nothing."""
    spins = SMALL.spins(0) * (0.5 / 0.998)
    drag = fit_drag(SMALL.root_u)
    labels, good = zone_labels(SMALL, spins, drag)
    table = fit_zone(SMALL, spins, labels, good)
    assert table.shape == (SMALL.rows + 2, SMALL.columns + 2, 7, padded(4))
    spoiled = labels.copy()
    spoiled[2, 3, 5] += 10.0
    again = fit_zone(SMALL, spins, spoiled, good)
    assert np.abs(again - table).max() < 1e-2
    # at an inner node the polynomial itself must give fresh spins' delays
    fresh = SMALL.spins(9)[:40] * (0.4 / 0.998)
    places = place_sources(fresh, np.full(40, SMALL.x[4]), np.full(40, SMALL.root_u[2] ** -2), drag)
    right = learned_of(exact_twice(places, 0), places, 0, drag)[0][:, 0]
    powers = exponents(4, 0)
    around = np.outer((1.0, 4.0, 1.0), (1.0, 4.0, 1.0)) / 36.0
    node = np.einsum("ab,abk->k", around, table[2:5, 4:7, 0])[: len(powers)]
    found = np.prod(fresh[:, None, :] ** powers[None], axis=2) @ node
    np.testing.assert_allclose(found, right, atol=1e-5)


def test_remaking_is_bit_identical(tmp_path, monkeypatch):
    """Two fits from nothing with one seed give one file, another seed another."""
    small = (dataclasses.replace(SMALL, high=1.1, columns=16, degree=3),)
    monkeypatch.setattr("training.raymap.simulate.DIRECT", small)
    monkeypatch.setattr("training.raymap.simulate.INDIRECT", small)
    monkeypatch.setattr(fitting, "INDIRECT", small)
    made = []
    for k, seed in enumerate((0, 0, 1)):
        fitting.fit(tmp_path / f"labels{k}", tmp_path / f"fit{k}", seed, direct=small)
        made.append((tmp_path / f"fit{k}" / "learned.safetensors").read_bytes())
    assert made[0] == made[1]
    assert made[0] != made[2]


def test_checks_see_what_is_wrong():
    """The shipped map passes on a few rays; one with its table disturbed does not."""
    from emu.raymap.chart import shipped
    from emu.raymap.learned import LearnedRays

    sound = check_domain(LearnedRays(), 0, 3.0, 0.95, 2000, 1)
    assert sound.all_rays["delay"][0] < 1e-5
    direct, second = shipped()
    wrong = dataclasses.replace(direct, table=direct.table * np.float32(1.001))
    spoiled = check_domain(LearnedRays(lambda: (wrong, second)), 0, 3.0, 0.95, 2000, 1)
    assert spoiled.all_rays["delay"][0] > 1e-4
    assert spoiled.all_rays["g"][1] > sound.all_rays["g"][1] or spoiled.all_rays["mu"][0] > 1e-5


def test_families_are_counted():
    found = check_families(20, 4)
    assert set(found) == {"midplane-frozen", "helix-frozen", "drift-frozen"}
    for one in found.values():
        assert one["left_out"] <= 1
        assert one["within"] > 0.9
        assert 0.0 <= one["exact_share"] < 0.05


def test_zones_cover_the_domain_without_gaps():
    """From far to near every zone begins where the one before ends, and coordinates go beyond the caustic."""
    for far, near in itertools.pairwise(DIRECT):
        assert far.near == near.far
    assert all(zone.low == 0.0 and zone.high > 1.0 for zone in DIRECT)
