"""Light of the emitter against published numbers."""

from __future__ import annotations

import numpy as np
import pytest

from emu.source.light import brightness_profile, polarisation_degree


@pytest.mark.parametrize(("electrons", "degree"), [(2.0, 0.692308), (2.5, 0.724138), (3.0, 0.75)])
def test_polarisation_degree(electrons, degree):
    """Westfold 1959: (P + 1)/(P + 7/3)."""
    assert polarisation_degree(np.array((electrons - 1.0) / 2.0)) == pytest.approx(degree, abs=5e-7)


def test_brightness_has_two_widths():
    """One width before and the other after the peak: e^{-1/2} there."""
    peak, rise, decay = np.array(1.0), np.array(2.0), np.array(5.0)
    shape = brightness_profile(np.array([-1.0, 1.0, 6.0]), peak, rise, decay)
    assert shape == pytest.approx([np.exp(-0.5), 1.0, np.exp(-0.5)])
