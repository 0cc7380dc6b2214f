"""Compare the package with the independent calculation of tests/reference, over the whole promised domain.

The independent results are stored (`python -m tests.reference.tables` makes them again); some are integrated
anew here each time, all of them in the slow test.
"""

import numpy as np
import pytest

import emu
from emu.raymap.exact import ExactRays
from tests.reference.independent import curves, is_twin, trace
from tests.reference.tables import flare_at, make, stored

#: What the package promises wherever an image's magnification is below LIMIT times the median of its order.
POSITION, DELAY, FRACTION, FLUX, LIMIT = 5e-4, 1e-3, 1e-4, 2e-4, 20.0
KINDS = ("q", "u", "east", "north")


def ray_case(order: int):
    """Return the stored rays of an order, the package's, and which of them count."""
    table = stored("rays")
    spin, inclination, r, theta, phi = table["cases"].T
    theta, phi = np.radians(theta), np.radians(phi)
    places = np.stack([np.sin(theta) * np.cos(phi), np.sin(theta) * np.sin(phi), np.cos(theta)], axis=-1)
    bundle = ExactRays().trace(spin, np.radians(inclination), r, places, order)
    result = table["results"][order]
    counts = (result[:, 7] == 1.0) & (result[:, 6] < LIMIT * np.median(result[:, 6]))
    assert np.sum(counts) >= 200
    return result, bundle, counts, np.sin(theta)


@pytest.mark.parametrize("order", [0, 1])
def test_no_ray_fails_away_from_caustics(order):
    _, bundle, counts, _ = ray_case(order)
    assert not np.any(bundle.failed[counts])


@pytest.mark.parametrize("order", [0, 1])
def test_ray_positions_and_magnifications(order):
    result, bundle, counts, _ = ray_case(order)
    np.testing.assert_allclose(bundle.alpha[counts], result[counts, 0], rtol=0.0, atol=POSITION)
    np.testing.assert_allclose(bundle.beta[counts], result[counts, 1], rtol=0.0, atol=POSITION)
    np.testing.assert_allclose(bundle.magnification[counts], result[counts, 6], rtol=FLUX)


def test_ray_delays():
    """Compare the delay of order 1 after order 0: the constant of a spin and an inclination is left open."""
    (first, bundle, counts, _), (second, bundle_1, counts_1, _) = ray_case(0), ray_case(1)
    late = (bundle_1.delay - bundle.delay) - (second[:, 2] - first[:, 2])
    np.testing.assert_allclose(late[counts & counts_1], 0.0, atol=DELAY)


@pytest.mark.parametrize("order", [0, 1])
def test_photon_momenta_at_the_source(order):
    result, bundle, counts, sin = ray_case(order)
    counts = counts & (sin > 1e-6)  # on the axis theta and phi have no direction
    np.testing.assert_allclose(bundle.p_r[counts], result[counts, 3], rtol=0.0, atol=3e-5)
    np.testing.assert_allclose(bundle.p_theta[counts], result[counts, 4], rtol=1e-5, atol=3e-5)
    np.testing.assert_allclose(bundle.p_phi[counts], result[counts, 5] / sin[counts], rtol=1e-5, atol=3e-5)


def flare_cases(name: str):
    """Yield family, parameters, times and the stored truth of every flare that the independent code could do."""
    table = stored(name)
    limit = LIMIT * np.median(table["magnification"][table["found"]], axis=(0, 2))
    for i in np.flatnonzero(table["found"]):
        clear = table["magnification"][i] < limit[:, None]
        yield *flare_at(table, i), table["light"][i], table["centre"][i], clear


def truth(light: np.ndarray) -> dict[str, np.ndarray]:
    """Return the curves of light (orders, T, 5) summed over its images."""
    total = light.sum(axis=0)
    return {
        "flux": total[:, 0],
        **{kind: total[:, 1 + k] / total[:, 0] for k, kind in enumerate(KINDS)},
    }


def excess(found: dict[str, np.ndarray], light: np.ndarray) -> np.ndarray:
    """Return the largest error of each row in units of what is promised."""
    expected = truth(light)
    errors = [np.abs(found["flux"] / expected["flux"] - 1.0) / FLUX]
    for kind, tolerance in (("q", FRACTION), ("u", FRACTION), ("east", POSITION), ("north", POSITION)):
        errors.append(np.abs(found[kind] - expected[kind]) / tolerance)
    return np.max(errors, axis=0)


def excess_alone(both: dict[str, np.ndarray], first: dict[str, np.ndarray], light: np.ndarray) -> np.ndarray:
    """Return the excess of the second image alone, got as the difference of two sums.

    It is zero where the first image drowns the second: there the difference says nothing of the second.
    """
    seen = light[1, :, 0] > 1e-3 * light[0, :, 0]
    flux = (both["flux"] - first["flux"])[seen]
    parts = {kind: (both["flux"] * both[kind] - first["flux"] * first[kind])[seen] / flux for kind in KINDS}
    result = np.zeros(seen.size)
    result[seen] = excess({"flux": flux, **parts}, light[1:, seen])
    return result


@pytest.mark.parametrize("name", ["snapshots", "curves"])
def test_curves_of_the_direct_image(name):
    for family, values, times, light, centre, clear in flare_cases(name):
        found, rows = emu.curves(family, values, times), clear[0]
        assert np.all(excess(found, light[:1])[rows] <= 1.0), (family, values)
        np.testing.assert_allclose(found["emission_time"][rows], centre[rows, 0], rtol=0.0, atol=DELAY)
        np.testing.assert_allclose(found["redshift"][rows], centre[rows, 1], rtol=3e-5)
        np.testing.assert_allclose(found["magnification"][rows], centre[rows, 2], rtol=FLUX)


@pytest.mark.parametrize("name", ["snapshots", "curves"])
def test_curves_of_two_images_and_of_the_second_alone(name):
    """Allow a row to differ only where the source has two images of order 1: then neither choice is wrong."""
    count, twins = 0, 0
    for family, values, times, light, _, clear in flare_cases(name):
        both, first = (emu.curves(family, values, times, orders=orders) for orders in (2, 1))
        alone = excess_alone(both, first, light)
        rows = clear.all(axis=0)
        count += int(np.sum(rows))
        for row in np.flatnonzero(rows & ((excess(both, light) > 1.0) | (alone > 1.0))):
            assert is_twin(family, values, float(times[row]), 1), (family, values, times[row], alone[row])
            assert both["tube"] >= 1
            twins += 1
    assert count >= 200
    assert twins <= 0.01 * count


def test_finite_spot():
    values = {"spin": 0.6, "inclination": 40.0, "axis_angle": 20.0, "radius": 9.0, "phase": 70.0, "rate": 1.0,
              "tilt": 30.0, "pitch": 40.0, "index": 0.6, "polarised_share": 0.7, "brightness": 1.0,
              "peak_time": 0.0, "rise_time": 40.0, "decay_time": 60.0, "spot_size": 0.4}  # fmt: skip
    times = np.array([-20.0, 15.0])
    expected = curves("midplane-frozen", values, times, spot_nodes=3)
    found = emu.curves("midplane-frozen", values, times)
    assert np.all(excess(found, expected["order_light"]) <= 1.0)


@pytest.mark.parametrize("order", [0, 1])
def test_stored_rays_are_what_the_independent_code_gives(order):
    table = stored("rays")
    chosen = np.random.default_rng(5).choice(np.flatnonzero(table["results"][order, :, 7]), 5, replace=False)
    for i in chosen:
        alpha, beta, delay, momentum, magnification = trace(*table["cases"][i], order)
        again = [alpha, beta, delay, *momentum[1:], magnification]
        np.testing.assert_allclose(again, table["results"][order, i, :7], rtol=1e-6, atol=1e-6)


def test_stored_flares_are_what_the_independent_code_gives():
    table = stored("snapshots")
    for i in np.random.default_rng(5).choice(np.flatnonzero(table["found"]), 3, replace=False):
        again = curves(*flare_at(table, i), orders=2)
        np.testing.assert_allclose(again["order_light"], table["light"][i], rtol=1e-5, atol=1e-9)


@pytest.mark.slow
@pytest.mark.parametrize("name", ["rays", "snapshots", "curves"])
def test_all_stored_results_can_be_made_again(name):
    table, again = stored(name), make(name)
    assert set(again) == set(table)
    for key, value in table.items():
        np.testing.assert_allclose(again[key], value, rtol=1e-5, atol=1e-7)
