"""A ray that was not found adds nothing and is counted, everywhere downstream."""

from __future__ import annotations

import numpy as np

from emu.assemble import assemble
from emu.raymap.exact import ExactRays
from emu.source.frozen import Frozen
from emu.source.midplane import Midplane
from emu.source.source import Source


class _Blind(ExactRays):
    """Fail for every source behind the hole."""

    def trace(self, spin, inclination, r, n, order, start=None):
        bundle = super().trace(spin, inclination, r, n, order, start)
        behind = n[:, 0] < -0.5
        for array in (bundle.delay, bundle.p_r, bundle.p_theta, bundle.p_phi, bundle.magnification):
            array[behind] = 0.0
        bundle.failed[behind] = True
        return bundle


def test_failures_are_counted_and_dark():
    """The curves stay finite, the lost rows are dark, and each is counted."""
    given = {
        "spin": 0.3, "inclination": 60.0, "axis_angle": 10.0, "radius": 8.0, "phase": 0.0, "rate": 1.0,
        "tilt": 20.0, "pitch": 30.0, "index": 0.6, "polarised_share": 0.8, "brightness": 1.0,
    }  # fmt: skip
    values = {name: np.full((1, 1), value) for name, value in given.items()}
    curves = assemble(Source(Midplane(), Frozen(), None, 0), values, np.linspace(-70, 70, 29)[None, :], _Blind())
    dark = curves["flux"][0] == 0.0
    assert 3 < dark.sum() < 20
    assert curves["failures"][0] == dark.sum()
    for name in ("flux", "q", "u", "east", "north"):
        assert np.all(np.isfinite(curves[name]))
        assert not np.any(curves[name][0][dark])
