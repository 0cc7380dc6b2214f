"""One suite over every model there is: whoever takes a model relies on exactly this."""

from functools import cache

import numpy as np
import pytest

from emu.families.catalogue import family, family_names, family_text, parse_family
from emu.families.model import Model
from emu.families.prior import Prior
from tests.reference.toy import ToyModel

FAMILIES = family_names()
MODELS = (*FAMILIES, "toy")
TIMES = np.linspace(-60.0, 60.0, 25)

# What all families have in common, with the same priors; without it answers do not compare.
SHARED = ("spin", "inclination", "axis_angle", "radius", "phase", "tilt", "pitch", "index",
          "polarised_share", "brightness", "peak_time", "rise_time", "decay_time")  # fmt: skip
OF_PATH = {
    "midplane": ("rate",),
    "helix": ("rate", "opening", "rise", "height"),
    "drift": ("opening", "rise", "height"),
}
OF_INNER = {
    "frozen": (),
    "turning": ("turn", "roll", "turn_time", "turn_duration", "dip"),
    "turbulent": ("scatter", "cell_lifetime"),
}
OF_INNER["turning+turbulent"] = OF_INNER["turning"] + OF_INNER["turbulent"]


@cache
def model_of(name):
    return ToyModel() if name == "toy" else family(name)


def prior_of(model):
    return getattr(model, "prior", None) or Prior(model.parameters, model.valid)


def draws(model, count=12, seed=1):
    return prior_of(model).sample(count, np.random.default_rng(seed))


each_model = pytest.mark.parametrize("model", [model_of(name) for name in MODELS], ids=MODELS)
each_family = pytest.mark.parametrize("found", [model_of(name) for name in FAMILIES], ids=FAMILIES)


def test_there_are_twelve():
    assert set(FAMILIES) == {f"{path}-{inner}" for path in OF_PATH for inner in OF_INNER}


@each_model
def test_it_is_a_model_with_a_prior(model):
    assert isinstance(model, Model)
    names = [parameter.name for parameter in model.parameters]
    assert len(set(names)) == len(names)
    for parameter in model.parameters:
        low, high = parameter.bounds
        assert low < high
        assert parameter.symbol
        assert (low, high) == (0.0, 360.0) or not parameter.circular


@each_model
def test_prior_draws_are_valid_and_inside(model):
    prior = prior_of(model)
    theta = draws(model, 300)
    assert model.valid(theta).shape == (300,)
    assert model.valid(theta).all()
    assert np.isfinite(prior.log_prob(theta)).all()
    np.testing.assert_allclose(prior.from_gauss(prior.to_gauss(theta)), theta, atol=1e-6)


@each_model
def test_curves_are_finite_and_physical(model):
    theta = draws(model, 30)
    curves = model.curves(theta, TIMES)
    assert set(model.kinds) <= set(curves)
    solved = np.broadcast_to(curves.get("failures", np.zeros(30)), 30) == 0
    assert solved.mean() > 0.9
    for kind in model.kinds:
        assert curves[kind].shape == (30, len(TIMES))
        assert np.isfinite(curves[kind]).all()
    if model.standard_frame:
        # Brightness is positive, and no more light can be polarised than there is.
        assert np.all(curves["flux"][solved] >= 0.0)
        assert np.all(np.hypot(curves["q"], curves["u"])[solved] <= 1.0)


@each_model
def test_each_flare_is_computed_by_itself(model):
    theta = draws(model)
    rng = np.random.default_rng(2)
    times = np.sort(rng.uniform(-50, 50, (len(theta), 7)), axis=1)
    together = model.curves(theta, times)
    for flare in (0, 5, 11):
        alone = model.curves(theta[[flare]], times[flare])
        for kind in model.kinds:
            # Rays are solved in vector lanes until the last of a lane has converged, so that companions move the
            # last digits (3e-8 at most in 1,800 flares); this is a hundredth of the accuracy of the curves.
            np.testing.assert_allclose(alone[kind][0], together[kind][flare], rtol=1e-6, atol=1e-6)


@each_model
def test_same_times_for_all_or_for_each(model):
    theta = draws(model)
    once, each = model.curves(theta, TIMES), model.curves(theta, np.tile(TIMES, (len(theta), 1)))
    for kind in model.kinds:
        np.testing.assert_array_equal(once[kind], each[kind])


@each_model
def test_no_draws_give_no_curves(model):
    nothing = np.empty((0, len(model.parameters)))
    assert model.valid(nothing).shape == (0,)
    assert all(model.curves(nothing, TIMES)[kind].shape == (0, len(TIMES)) for kind in model.kinds)


@each_model
def test_scatter_has_one_value_a_flare(model):
    theta = draws(model)
    scatter = model.scatter(theta)
    if scatter is None:
        assert "turbulent" not in model.name
        return
    sigma, lifetime = scatter
    assert sigma.shape == lifetime.shape == (len(theta),)
    assert np.all(sigma > 0.0)
    assert np.all(lifetime > 0.0)


@each_model
def test_standard_frame_is_what_it_says(model):
    # Flux goes with brightness, (q, u) turn by twice the axis angle (IAU 1974), positions by it.
    if not model.standard_frame:
        return
    names = [parameter.name for parameter in model.parameters]
    theta = draws(model)
    standard, angle = theta.copy(), np.radians(theta[:, [names.index("axis_angle")]])
    standard[:, names.index("axis_angle")], standard[:, names.index("brightness")] = 0.0, 1.0
    seen, plain = model.curves(theta, TIMES), model.curves(standard, TIMES)
    bright = theta[:, [names.index("brightness")]]
    np.testing.assert_allclose(seen["flux"], bright * plain["flux"], rtol=1e-9)
    turned = (plain["q"] + 1j * plain["u"]) * np.exp(2j * angle)
    np.testing.assert_allclose(seen["q"] + 1j * seen["u"], turned, atol=1e-9)
    east, north = plain["east"], plain["north"]
    np.testing.assert_allclose(seen["east"], east * np.cos(angle) + north * np.sin(angle), atol=1e-8)
    np.testing.assert_allclose(seen["north"], north * np.cos(angle) - east * np.sin(angle), atol=1e-8)


@each_family
def test_toml_there_and_back_is_the_same_family(found):
    assert parse_family(family_text(found), "again") == found
    assert family_text(parse_family(family_text(found), "again")) == family_text(found)


@each_family
def test_name_path_inner_and_parameters_agree(found):
    assert found.name == f"{found.path}-{found.inner}"
    names = {parameter.name for parameter in found.parameters}
    assert names == {*SHARED, *OF_PATH[found.path], *OF_INNER[found.inner]}


@each_family
def test_scatter_is_the_share_of_the_synchrotron_maximum(found):
    # Westfold (1959): (P + 1) / (P + 7/3) with P = 2 s + 1.
    if "turbulent" not in found.inner:
        assert found.scatter(draws(found)) is None
        return
    theta = draws(found)
    names = [parameter.name for parameter in found.parameters]
    power = 2.0 * theta[:, names.index("index")] + 1.0
    sigma, lifetime = found.scatter(theta)
    maximum = (power + 1.0) / (power + 7.0 / 3.0)
    np.testing.assert_allclose(sigma, maximum * theta[:, names.index("scatter")], rtol=1e-12)
    np.testing.assert_array_equal(lifetime, theta[:, names.index("cell_lifetime")])


@each_family
def test_shared_priors_and_interval_are_those_of_the_first_family(found):
    first = family(FAMILIES[0])
    ours = {parameter.name: parameter for parameter in found.parameters}
    theirs = {parameter.name: parameter for parameter in first.parameters}
    for name in set(ours) & set(theirs) - {"rise", "opening"}:
        assert ours[name] == theirs[name]
    assert found.valid_interval == first.valid_interval == (-160.0, 160.0)
    assert found.r_min == first.r_min == 3.0


@each_family
def test_no_family_contains_another(found):
    # A least effect in the prior keeps nested families apart, or odds between them mean nothing.
    bounds = {parameter.name: parameter.prior for parameter in found.parameters}
    if "turn" in bounds:
        assert bounds["turn"].bounds[0] >= 30.0
        assert max(np.abs(bounds["turn_time"].bounds)) <= 30.0
    if "scatter" in bounds:
        assert bounds["scatter"].bounds[0] >= 0.03
    if "rate" in bounds:
        assert bounds["rate"].bounds[0] >= 0.3
    if found.path == "helix":
        assert bounds["rise"].inner >= 0.03
        assert bounds["opening"].bounds[0] >= 0.0
    assert max(np.abs(bounds["peak_time"].bounds)) <= 30.0


@each_family
def test_most_of_the_prior_box_is_valid(found):
    # A smaller share would bend the priors that all families have in common.
    assert found.prior.accepted_fraction > 0.85
    assert found.prior.accepted_fraction_error < 1e-3


@each_family
def test_a_path_inside_the_least_radius_is_not_valid(found):
    theta = draws(found)
    names = [parameter.name for parameter in found.parameters]
    theta[:, names.index("radius")] = 2.0
    for name in {"opening", "rise", "height"} & set(names):
        theta[:, names.index(name)] = 0.0
    assert not found.valid(theta).any()
