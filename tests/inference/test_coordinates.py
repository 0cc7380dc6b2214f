"""Straight coordinates against the definition of a density: p(y) = p(theta) |dtheta/dy|."""

import numpy as np
import pytest

from emu.families.parameters import Parameter
from emu.families.prior import Prior
from emu.families.priors import CosUniform, LogUniform, SinUniform, Uniform
from emu.inference.coordinates import straight_about

PRIOR = Prior((
    Parameter("spin", "a", "", Uniform(-0.95, 0.95)),
    Parameter("inclination", "i", "deg", CosUniform(0.0, 180.0)),
    Parameter("axis_angle", "O", "deg", Uniform(0.0, 360.0), circular=True),
    Parameter("radius", "R", "GM/c2", Uniform(5.0, 15.0)),
    Parameter("rate", "k", "", Uniform(0.3, 1.5)),
    Parameter("tilt", "w", "deg", Uniform(0.0, 180.0)),
    Parameter("pitch", "p", "deg", SinUniform(-90.0, 90.0)),
    Parameter("brightness", "A", "", LogUniform(0.3, 3.0)),
))  # fmt: skip


@pytest.fixture
def theta():
    return PRIOR.sample(300, np.random.default_rng(1))


@pytest.fixture
def coordinates(theta):
    # Centred on a few neighbours across the seam of the axis angle, not on the whole prior.
    centre = theta[:20].copy()
    centre[:, 2] = (centre[:, 2] / 20.0 - 9.0) % 360.0
    return straight_about(PRIOR, centre)


def test_there_and_back_is_the_identity(theta, coordinates):
    back, log_prior = coordinates.from_straight(coordinates.to_straight(theta))
    assert np.isfinite(log_prior).all()
    np.testing.assert_allclose(back, theta, rtol=1e-9, atol=1e-7)


def test_density_is_that_of_theta_times_the_jacobian_by_finite_differences(theta, coordinates):
    y = coordinates.to_straight(theta)
    expected = np.empty(len(y))
    step = 1e-6
    for n, place in enumerate(y):
        shifts = step * np.eye(len(place))
        ahead, behind = (coordinates.from_straight(place + sign * shifts)[0] for sign in (1.0, -1.0))
        jacobian = (ahead - behind) / (2.0 * step)
        expected[n] = PRIOR.log_prob(theta[n : n + 1])[0] + np.linalg.slogdet(jacobian)[1]
    log_prior = coordinates.from_straight(y)[1]
    close = np.abs(log_prior - expected) < 1e-4
    # A place within a step of the seam of the tilt or the axis angle spoils the difference, not the density.
    assert close.mean() > 0.99


def test_the_field_axis_has_no_edge_at_the_seam_of_tilt(coordinates):
    # b and -b are one axis: tilt 0.01 with pitch 20 is next to tilt 179.99 with pitch -20.
    pair = np.tile(PRIOR.sample(1, np.random.default_rng(2)), (2, 1))
    pair[:, 5], pair[:, 6] = [0.01, 179.99], [20.0, -20.0]
    y = straight_about(PRIOR, pair).to_straight(pair)
    assert np.abs(y[0] - y[1]).max() < 1e-3


def test_places_outside_have_no_density(theta, coordinates):
    y = coordinates.to_straight(theta[:1])
    for column, value in ((0, 9.0), (2, 3.3), (4, 10.0), (5, 1.6)):
        beyond = y.copy()
        beyond[0, column] = value
        assert coordinates.from_straight(beyond)[1][0] == -np.inf
