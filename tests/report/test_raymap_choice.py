"""The choice of the ray map reaches the likelihood of an answer."""

from __future__ import annotations

import numpy as np
import pytest

from emu.errors import UserError
from emu.report.answer import answer
from emu.report.toolbox import FromConfigs


def test_learned_rays_reach_the_model():
    """The curves of the learned map agree with the exact ones to its stated 1e-3, and are not the same numbers."""
    name = "midplane-frozen"
    exact, learned = (FromConfigs("demo", (name,), way).open().problems[name] for way in ("exact", "learned"))
    theta = exact.prior.sample(20, np.random.default_rng(3))[:, : len(exact.model.parameters)]
    times = np.linspace(-60.0, 60.0, 25)
    one, other = (problem.model.curves(theta, times) for problem in (exact, learned))
    assert other["q"] == pytest.approx(one["q"], abs=1e-3)
    assert not np.array_equal(one["q"], other["q"])
    assert FromConfigs("demo", ("midplane-frozen",), "learned").origin()["raymap"] == "learned"


def test_an_unknown_map_is_one_line(tmp_path):
    """A word that names no ray map is refused before anything is read."""
    with pytest.raises(UserError, match="--raymap is 'fast'"):
        answer([tmp_path], None, tmp_path / "out", finish="exact", raymap="fast")
