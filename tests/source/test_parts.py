"""Paths, fields and their changes against closed forms."""

from __future__ import annotations

import numpy as np
import pytest

from emu.source.cloud import cloud_points
from emu.source.drift import Drift
from emu.source.field import background
from emu.source.frozen import Frozen
from emu.source.helix import Helix
from emu.source.midplane import Midplane
from emu.source.motion import Offset
from emu.source.turning import Turning


def _values(**given):
    start = {"spin": 0.5, "radius": 8.0, "phase": 0.3, "rate": 0.9, "opening": 0.04, "rise": -0.1, "height": 2.0}
    return {name: np.full((1, 1), value) for name, value in {**start, **given}.items()}


@pytest.mark.parametrize("path", [Midplane(), Helix(), Drift()])
def test_rates_are_derivatives(path):
    """The velocities are the derivatives of the positions, by central differences."""
    time = np.linspace(-50.0, 80.0, 7)[None, :]
    h = 1e-4
    here = path.motion(_values(), time, Offset())
    after, before = (path.motion(_values(), time + s * h, Offset()) for s in (1, -1))
    for name in ("cylinder", "height", "phi", "r"):
        rate = (getattr(after, name) - getattr(before, name)) / (2 * h)
        assert getattr(here, f"{name}_rate") == pytest.approx(rate, abs=1e-8)
    theta = [np.arctan2(m.cylinder, m.height) for m in (after, before)]
    assert here.theta_rate == pytest.approx((theta[0] - theta[1]) / (2 * h), abs=1e-8)


def test_angular_momentum_is_kept():
    """R^2 dphi/dt is constant while the path opens."""
    motion = Helix().motion(_values(), np.linspace(-80.0, 80.0, 9)[None, :], Offset())
    assert motion.cylinder**2 * motion.phi_rate == pytest.approx(np.full((1, 9), 64.0 * 0.9 / (8**1.5 + 0.5)))


def test_possible_paths():
    """Faster than light, through the axis, or too close: not possible; a plain orbit is."""
    ask = lambda path, **given: bool(path.valid(_values(**given), (-160.0, 160.0), 3.0)[0])  # noqa: E731
    assert ask(Midplane())
    assert not ask(Midplane(), rate=30.0)
    assert not ask(Midplane(), radius=2.9)
    assert not ask(Helix(), opening=0.06)  # R = -1.6 at the start
    assert not ask(Drift(), rise=1.01)
    assert ask(Drift(), rise=0.7)
    # static limit: at a = 0.9 in the midplane nothing stands still inside r = 2
    still = _values(spin=0.9, radius=1.9, opening=0.0, rise=0.0, height=0.0)
    assert not Drift().valid(still, (-1.0, 1.0), 0.0)[0]
    assert Drift().valid({**still, "radius": np.full((1, 1), 2.1)}, (-1.0, 1.0), 0.0)[0]


def test_background_keeps_flux():
    """tan(pitch) grows as R along the path; tilt and its Mobius partner are one axis."""
    values = {"tilt": np.array(0.7), "pitch": np.array(0.5), "radius": np.array(8.0)}
    b = background(values, np.array([4.0, 8.0, 16.0]))
    assert np.linalg.norm(b, axis=-1) == pytest.approx(np.ones(3))
    assert b[:, 1] / np.hypot(b[:, 0], b[:, 2]) == pytest.approx(np.tan(0.5) * np.array([0.5, 1.0, 2.0]))
    partner = background({**values, "tilt": values["tilt"] + np.pi, "pitch": -values["pitch"]}, np.array([8.0]))
    assert partner[0] == pytest.approx(-b[1])


def test_turning_keeps_length_and_ends_at_its_angle():
    """Long before: b; long after: turned by `turn` in the plane of b and m; half way: half, and the dip."""
    values = {
        "tilt": np.array(0.7), "turn": np.array(1.2), "roll": np.array(2.0), "turn_time": np.array(5.0),
        "turn_duration": np.array(3.0), "dip": np.array(0.4),
    }  # fmt: skip
    start = background({**values, "pitch": np.array(0.5), "radius": np.array(8.0)}, np.array([8.0]))
    b = np.broadcast_to(start, (3, 3))
    turned, strength = Turning().apply(values, np.array([-500.0, 5.0, 500.0]), b)
    assert np.linalg.norm(turned, axis=-1) == pytest.approx(np.ones(3))
    assert np.arccos(np.clip(np.sum(turned * b, axis=-1), -1, 1)) == pytest.approx([0.0, 0.6, 1.2], abs=1e-7)
    assert strength == pytest.approx([1.0, 0.6, 1.0])
    assert Frozen().apply(values, np.zeros(3), b)[0] is b


def test_cloud_has_the_moments_of_a_gaussian():
    """Weights sum to 1; mean 0, variance 1, fourth moment 3 on every axis; the centre comes first."""
    for side in (3, 5, 7):
        points, weights = cloud_points(side)
        assert weights.sum() == pytest.approx(1.0)
        assert points[0] == pytest.approx(np.zeros(3), abs=1e-12)
        assert weights @ points == pytest.approx(np.zeros(3), abs=1e-12)
        assert weights @ points**2 == pytest.approx(np.ones(3))
        assert weights @ points**4 == pytest.approx(np.full(3, 3.0))
