"""Densities and the joint prior against scipy's distributions, quadrature and change of variables."""

import numpy as np
import pytest
from scipy import integrate, stats

from emu.errors import UserError
from emu.families.normal import Normal
from emu.families.parameters import Parameter
from emu.families.prior import Prior
from emu.families.priors import CosUniform, LogUniform, SinUniform, TwoSided, Uniform

BOUNDED = [
    Uniform(-2.0, 5.0),
    LogUniform(0.3, 80.0),
    CosUniform(0.0, 180.0),
    CosUniform(20.0, 70.0),
    SinUniform(-90.0, 90.0),
    SinUniform(10.0, 60.0),
    TwoSided(0.03, 0.3),
]
DENSITIES = [*BOUNDED, Normal(1.0, 0.3)]


def label(density):
    return repr(density)


@pytest.mark.parametrize("density", BOUNDED, ids=label)
def test_density_is_normalised_and_is_the_slope_of_the_distribution(density):
    low, high = density.bounds
    edges = [-density.inner, density.inner] if isinstance(density, TwoSided) else None
    pdf = lambda x: float(np.exp(density.log_density(np.array([x])))[0])  # noqa: E731
    total, error = integrate.quad(pdf, low, high, points=edges, limit=200)
    assert total == pytest.approx(1.0, abs=max(1e-7, 10 * error))
    middle = low + 0.83 * (high - low)
    part, _ = integrate.quad(pdf, low, middle, points=edges, limit=200)
    assert density.cdf(np.array([middle]))[0] == pytest.approx(part, abs=1e-7)


@pytest.mark.parametrize("density", DENSITIES, ids=label)
def test_quantile_inverts_the_distribution(density):
    u = np.linspace(0.001, 0.999, 501)
    np.testing.assert_allclose(density.cdf(density.ppf(u)), u, atol=1e-12)


@pytest.mark.parametrize("density", BOUNDED, ids=label)
def test_nothing_lies_outside_the_bounds(density):
    low, high = density.bounds
    x = density.ppf(np.linspace(0.0, 1.0, 1001))
    assert x.min() >= low
    assert x.max() <= high
    outside = np.array([low - 1e-6, high + 1e-6, np.nan])
    assert np.all(density.log_density(outside) == -np.inf)
    np.testing.assert_array_equal(density.cdf(np.array([low - 1.0, high + 1.0])), [0.0, 1.0])


@pytest.mark.parametrize(
    ("ours", "theirs"),
    [
        (Uniform(-2.0, 5.0), stats.uniform(-2.0, 7.0)),
        (LogUniform(0.3, 80.0), stats.loguniform(0.3, 80.0)),
        (Normal(1.0, 0.3), stats.norm(1.0, 0.3)),
    ],
)
def test_against_scipy(ours, theirs):
    x = np.linspace(0.4, 4.0, 37)
    np.testing.assert_allclose(ours.log_density(x), theirs.logpdf(x), rtol=1e-12)
    np.testing.assert_allclose(ours.cdf(x), theirs.cdf(x), rtol=1e-12)


def test_isotropic_axis_has_uniform_components():
    # Archimedes: each Cartesian component of an isotropic direction is uniform on [-1, 1].
    u = np.random.default_rng(1).random((20_000, 2))
    polar, latitude = (
        np.radians(CosUniform(0, 180).ppf(u[:, 0])),
        np.radians(SinUniform(-90, 90).ppf(u[:, 1])),
    )
    assert stats.kstest(np.cos(polar), stats.uniform(-1, 2).cdf).pvalue > 1e-3
    assert stats.kstest(np.sin(latitude), stats.uniform(-1, 2).cdf).pvalue > 1e-3


@pytest.mark.parametrize(
    "wrong",
    [
        lambda: Uniform(2.0, 1.0),
        lambda: Uniform(0.0, np.inf),
        lambda: LogUniform(0.0, 1.0),
        lambda: CosUniform(-10.0, 50.0),
        lambda: SinUniform(0.0, 100.0),
        lambda: TwoSided(-1.0, 1.0),
        lambda: Normal(0.0, 0.0),
    ],
)
def test_bounds_that_make_no_sense_are_refused(wrong):
    with pytest.raises(UserError, match="prior"):
        wrong()


def parameters():
    return tuple(Parameter(f"p{k}", f"p_{k}", "", density) for k, density in enumerate(DENSITIES))


def test_gauss_map_there_and_back():
    prior = Prior(parameters())
    theta = prior.sample(500, np.random.default_rng(2))
    np.testing.assert_allclose(prior.from_gauss(prior.to_gauss(theta)), theta, rtol=1e-9, atol=1e-9)


def test_prior_draws_are_standard_normal_after_the_map():
    prior = Prior(parameters())
    z = prior.to_gauss(prior.sample(20_000, np.random.default_rng(3)))
    for column in z.T:
        assert stats.kstest(column, stats.norm.cdf).pvalue > 1e-3


def test_jacobian_is_the_change_of_variables():
    prior = Prior(parameters())
    z = np.random.default_rng(4).normal(size=(200, len(DENSITIES)))
    step = 1e-6
    slopes = (prior.from_gauss(z + step) - prior.from_gauss(z - step)) / (2 * step)
    smooth = np.all(np.abs(z) > 1e-4, axis=1)  # the two-sided density jumps at z = 0
    np.testing.assert_allclose(prior.log_jacobian(z)[smooth], np.log(slopes).sum(axis=1)[smooth], atol=1e-5)
    normal = stats.norm.logpdf(z).sum(axis=1)
    np.testing.assert_allclose(prior.log_prob(prior.from_gauss(z)), normal - prior.log_jacobian(z), atol=1e-9)


def test_extreme_network_output_stays_inside():
    prior = Prior(parameters())
    z = np.array([[-1e30], [-40.0], [40.0], [np.inf], [-np.inf], [3.4e38]], np.float32)
    theta = prior.from_gauss(np.repeat(z, len(DENSITIES), axis=1))
    assert np.isfinite(theta).all()
    for column, parameter in zip(theta.T, prior.parameters, strict=True):
        assert np.all((column >= parameter.bounds[0]) & (column <= parameter.bounds[1]))


def disc(theta):
    return (theta**2).sum(axis=1) < 1.0


SQUARE = (Parameter("x", "x", "", Uniform(-1.0, 1.0)), Parameter("y", "y", "", Uniform(-1.0, 1.0)))


def test_accepted_fraction_of_a_disc_in_a_square_is_pi_over_four():
    prior = Prior(SQUARE, disc)
    assert prior.accepted_fraction_error == pytest.approx(np.sqrt(np.pi / 4 * (1 - np.pi / 4) / 200_000), rel=0.01)
    assert abs(prior.accepted_fraction - np.pi / 4) < 4 * prior.accepted_fraction_error
    inside = prior.log_prob(np.array([[0.1, 0.2]]))[0]
    assert inside == pytest.approx(-np.log(np.pi), abs=4 * prior.accepted_fraction_error)
    assert prior.log_prob(np.array([[0.9, 0.9]]))[0] == -np.inf


def test_rejection_draws_are_uniform_on_the_disc_and_repeat():
    prior = Prior(SQUARE, disc)
    theta = prior.sample(5000, np.random.default_rng(5))
    assert theta.shape == (5000, 2)
    assert disc(theta).all()
    # The squared radius of a uniform draw on the unit disc is uniform.
    assert stats.kstest((theta**2).sum(axis=1), stats.uniform.cdf).pvalue > 1e-3
    np.testing.assert_array_equal(theta, prior.sample(5000, np.random.default_rng(5)))


def test_a_prior_without_valid_draws_is_an_error():
    prior = Prior(SQUARE, lambda theta: np.zeros(len(theta), bool))
    with pytest.raises(UserError, match="narrow the priors"):
        prior.sample(10, np.random.default_rng(0))
    with pytest.raises(UserError, match="narrow the priors"):
        prior.log_prob(np.array([[0.0, 0.0]]))
