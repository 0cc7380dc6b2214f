"""Fresh flares from stored curves follow the same law as flares of the model itself."""

from dataclasses import dataclass

import numpy as np
import pytest
from scipy.stats import ks_2samp

from emu.families.parameters import Parameter
from emu.families.priors import LogUniform, Uniform
from emu.observe.campaign import parse_campaign
from emu.observe.rows import KINDS
from emu.problem import Problem, problem
from tests.training.small import CAMPAIGN, SMALL, small_set
from training.fresh import FreshFlares, StoredCurves, interpolate
from training.simulate import layout_of, simulate_problem
from training.store import TrainingSet

WITH_ALL = (
    CAMPAIGN
    + """
[[stream]]
kinds = ["east", "north"]
cadence = [3.0, 6.0]
error = [20.0, 80.0]
[nuisance.jitter]
range = [0.001, 0.05]
"""
)


@dataclass(frozen=True)
class Circling:
    """Circle uniformly, with position angle, brightness and one more parameter, by formulas of the sky.

    East is -alpha cos W + beta sin W, north alpha sin W + beta cos W for a screen position (alpha, beta);
    the electric vector's position angle is that on the screen plus W (IAU 1974).
    """

    name: str = "circling"
    kinds: tuple[str, ...] = ("flux", "q", "u", "east", "north")
    standard_frame: bool = True
    parameters: tuple[Parameter, ...] = (
        Parameter("axis_angle", "W", "deg", Uniform(0.0, 360.0), circular=True),
        Parameter("rate", "k", "", Uniform(0.01, 0.03)),
        Parameter("brightness", "A", "", LogUniform(0.3, 3.0)),
    )

    def valid(self, theta):
        return np.ones(len(theta), bool)

    def scatter(self, theta):
        return None

    def curves(self, theta, times):
        turn, rate, scale = np.deg2rad(theta[:, :1]), theta[:, 1:2], theta[:, 2:3]
        phase = rate * times
        alpha, beta, angle = 9 * np.cos(phase), 4 * np.sin(phase), 0.7 * phase + turn
        return {
            "flux": scale * (1 + 0.3 * np.sin(phase)),
            "q": 0.4 * np.cos(2 * angle),
            "u": 0.4 * np.sin(2 * angle),
            "east": -alpha * np.cos(turn) + beta * np.sin(turn),
            "north": alpha * np.sin(turn) + beta * np.cos(turn),
        }


def circling_set(folder) -> tuple[Problem, TrainingSet]:
    problem = Problem(Circling(), parse_campaign(WITH_ALL, "all.toml"))
    simulate_problem(problem, layout_of(problem, 500, 1, nodes=(96, 32)), folder, 1)
    return problem, TrainingSet.load(folder)


def test_interpolation_is_exact_for_cubics():
    rng = np.random.default_rng(1)
    nodes = np.sort(rng.uniform(-10, 10, (3, 17)).astype(np.float32), axis=1)
    cubics = rng.normal(size=(3, 2, 4))
    curves = np.stack(
        [[np.polyval(c, at / 10) for c in pair] for pair, at in zip(cubics, nodes, strict=True)]
    ).swapaxes(1, 2)
    times = rng.uniform(-9, 9, (5, 30))
    which = np.array([2, 0, 1, 1, 2])
    found = interpolate(nodes, curves.astype(np.float32), which, times)
    expected = [[np.polyval(cubics[w, k], times[b] / 10) for b, w in enumerate(which)] for k in range(2)]
    np.testing.assert_allclose(found, expected, atol=2e-4)  # float32 amplified between close nodes


def test_standing_in_the_sky_is_drawn_anew_exactly(tmp_path):
    problem, stored = circling_set(tmp_path / "set")
    column = {parameter.name: place for place, parameter in enumerate(problem.model.parameters)}
    assert (stored.theta[:, column["axis_angle"]] == 0).all()
    assert (stored.theta[:, column["brightness"]] == 1).all()
    rng = np.random.default_rng(2)
    which = rng.integers(500, size=40)
    theta, rows = FreshFlares(problem, stored).batch(which, rng)
    assert len(np.unique(theta[:, column["axis_angle"]])) == 40
    found = StoredCurves(problem.model, stored, which).curves(theta[:, :3], rows.time)
    for kind, curve in problem.model.curves(theta[:, :3], rows.time).items():
        np.testing.assert_allclose(found[kind], curve, atol=2e-5, err_msg=kind)


def test_real_curves_are_stored_finer_than_they_can_be_measured(tmp_path):
    real = problem("midplane-frozen", "realistic")
    simulate_problem(real, layout_of(real, 200, 5), tmp_path / "set", 1)
    stored = TrainingSet.load(tmp_path / "set")
    rng = np.random.default_rng(6)
    which, columns = np.arange(200), len(real.model.parameters)
    theta, rows = FreshFlares(real, stored).batch(which, rng)
    found = StoredCurves(real.model, stored, which).curves(theta[:, :columns], rows.time)
    exact = real.model.curves(theta[:, :columns], rows.time)
    brightness = theta[:, [real.index("brightness")]]
    length = real.campaign.target.length_unit
    best = {"flux": 0.02, "q": 0.01, "u": 0.01, "east": 20.0 / length, "north": 20.0 / length}
    off = np.zeros(rows.time.shape)
    for kind, error in best.items():
        here = rows.mask & (rows.kind == KINDS.index(kind))
        off = np.where(here, np.abs(found[kind] - exact[kind]) / error, off)
    assert np.mean(off[rows.mask] > 0.1) < 0.004  # all but a few rows of orbits seen edge-on
    assert np.median(off[rows.mask]) < 1e-3
    assert brightness.std() > 0.1  # fluxes were scaled, or the comparison would be of nothing


def test_fresh_flares_and_the_model_s_own_follow_one_law(tmp_path):
    stored = TrainingSet.load(small_set(tmp_path / "set", flares=4000))
    rng = np.random.default_rng(3)
    theta, fresh = FreshFlares(SMALL, stored).batch(np.arange(4000), rng)
    own_theta = SMALL.prior.sample(4000, rng)
    own, _ = SMALL.simulate(own_theta, SMALL.campaign.draw(4000, rng), rng)
    for kind in ("flux", "q", "u"):
        samples = [b.value[b.mask & (b.kind == KINDS.index(kind))] for b in (fresh, own)]
        # Rows of one flare are alike, hence the generous bound; a jitter of 0.05 would give 1e-20.
        assert ks_2samp(*samples).pvalue > 1e-4, kind
    for column in range(theta.shape[1]):
        assert ks_2samp(theta[:, column], own_theta[:, column]).pvalue > 1e-3


def test_schedules_and_noise_differ_from_batch_to_batch(tmp_path):
    problem, stored = circling_set(tmp_path / "set")
    rng = np.random.default_rng(4)
    which = np.zeros(200, np.int64)
    theta, rows = FreshFlares(problem, stored).batch(which, rng)
    assert len(np.unique(rows.mask.sum(axis=1))) > 5
    jitter = theta[:, problem.index("jitter_q_u")]
    assert 0.001 <= jitter.min() < 0.005
    assert 0.02 < jitter.max() <= 0.05
    assert theta[:, 1] == pytest.approx(stored.theta[0, 1])
