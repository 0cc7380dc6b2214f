"""The driver of all checks, on a small fit of the closed-form model."""

import json
from pathlib import Path

import numpy as np
import pytest

from emu.errors import UserError
from training.check import across_table, check
from training.checks.across import Across
from training.fit_estimator import fit
from training.publish import publish
from training.simulate import simulate

FEW = {"cases": 40, "draws": 100, "weighed": 1}


@pytest.fixture
def run(tmp_path: Path, toys: tuple[str, str]) -> Path:
    """Fit the closed-form model for a short while."""
    campaign, recipe = toys
    simulate("toy", campaign, tmp_path / "set", 1200, seed=1, workers=1)
    fit(tmp_path / "set", tmp_path / "run", recipe, steps=40)
    return tmp_path / "run"


def test_a_fit_and_its_bundle_get_the_same_verdict(run: Path, tmp_path: Path) -> None:
    of_fit = check(run, tmp_path / "fit", **FEW)
    publish([run], tmp_path / "bundle")
    of_bundle = check(tmp_path / "bundle", tmp_path / "checks", **FEW)
    assert of_fit == of_bundle
    assert of_fit in (0, 1, 4)
    found = json.loads((tmp_path / "fit" / "checks.json").read_text())
    assert found == json.loads((tmp_path / "checks" / "toy" / "checks.json").read_text())
    assert (of_fit == 0) == all(found["passed"].values())


def test_checks_of_a_fit_travel_with_its_bundle(run: Path, tmp_path: Path) -> None:
    check(run, run, **FEW)
    publish([run], tmp_path / "bundle")
    manifest = json.loads((tmp_path / "bundle" / "manifest.json").read_text())
    assert manifest["estimators"]["toy"]["checks"] == json.loads((run / "checks.json").read_text())


def test_options_that_do_not_fit_are_refused(run: Path, tmp_path: Path) -> None:
    with pytest.raises(UserError, match="--across needs at least two families"):
        check(run, tmp_path / "out", across=True, **FEW)
    with pytest.raises(UserError, match="no estimator of 'helix-frozen'"):
        check(run, tmp_path / "out", families=["helix-frozen"], **FEW)
    with pytest.raises(UserError, match="no reference draws"):
        check(run, tmp_path / "out", references=tmp_path, **FEW)
    with pytest.raises(UserError, match="no bundle"):
        check(tmp_path, tmp_path / "out", **FEW)
    assert not (tmp_path / "out").exists()


def test_the_matrix_as_text_has_answers_in_lines() -> None:
    coverage = np.array([[[0.7], [0.2]], [[0.6], [0.68]]])
    found = Across(("a", "b"), ("spin",), coverage, 0.5 * coverage, 100, (0, 0))
    lines = across_table(found).splitlines()
    spin = next(place for place, line in enumerate(lines) if line.startswith("spin"))
    assert lines[spin].split() == ["spin", "a", "b"]
    assert lines[spin + 1].split() == ["a", "0.700", "/", "0.350", "0.200", "/", "0.100"]
    assert lines[spin + 2].split() == ["b", "0.600", "/", "0.300", "0.680", "/", "0.340"]
    assert lines[-1] == "coverage more than three errors too low: 1 of 4"
