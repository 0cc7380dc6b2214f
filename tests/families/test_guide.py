"""The model written out in the guide must work as the guide says."""

import re
from pathlib import Path

import numpy as np
import pytest

from emu.families.model import Model
from emu.inference.likelihood import log_posterior
from emu.observe.campaign import campaign
from emu.observe.rows import Rows
from emu.problem import Problem

GUIDE = Path(__file__).resolve().parents[2] / "emu" / "guide"


@pytest.fixture(name="model")
def rotator():
    (code,) = re.findall(r"```python\n(.*?)```", (GUIDE / "models.md").read_text(), re.DOTALL)
    names = {"__name__": "guide"}
    exec(code, names)
    return names["Rotator"]()


def test_the_example_is_a_model(model):
    assert isinstance(model, Model)
    curves = model.curves(np.array([[1.0, 0.5, 10.0, 2.0]]), np.array([0.0, 20.0]))
    # 10 degrees, and 10 + 2 * 20 = 50 degrees: q = 0.5 cos(2 chi), u = 0.5 sin(2 chi).
    np.testing.assert_allclose(curves["q"], 0.5 * np.cos(np.radians([[20.0, 100.0]])))
    np.testing.assert_allclose(curves["u"], 0.5 * np.sin(np.radians([[20.0, 100.0]])))


def test_the_example_meets_data_of_its_kinds(model):
    problem = Problem(model, campaign("realistic"))
    rng = np.random.default_rng(1)
    theta = problem.prior.sample(1, rng)
    schedule = problem.campaign.draw(1, rng)
    schedule = schedule.replace(mask=schedule.mask & (schedule.kind < 3))  # flux, q, u: it gives no positions
    batch, failures = problem.simulate(theta, schedule, rng)
    assert failures.tolist() == [0]
    rows = batch.rows(0)
    assert isinstance(rows, Rows)
    far = problem.prior.sample(200, rng)
    assert log_posterior(problem, theta, rows)[0] > np.quantile(log_posterior(problem, far, rows), 0.95)


def test_the_families_page_names_every_density_and_parameter():
    from emu.families.catalogue import family, family_names

    page = (GUIDE / "families.md").read_text()
    for name in family_names():
        assert all(f"`{parameter.name}`" in page for parameter in family(name).parameters)
